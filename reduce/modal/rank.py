"""Ranking: every measure side by side, and the order by one of them."""

from __future__ import annotations

import difflib

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.measures import MEASURES, score, table_of
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.modal.request import MARGIN

__all__ = ["MEASURES", "rank", "share"]

#: Values closer than this (relative) are equal as far as a ranking goes: rounding must not reorder them.
TIE = 1e-9


def rank(modes: Modes, by: str = "band-share", band: tuple[float, float] | None = None) -> Ranking:
    """All measures of ``modes`` in weighted channels, and the order by ``by``.

    Weighted couplings ``c_k/resolution_k`` and ``b_l amplitude_l``; measures as `MEASURES` describes them, in raw
    weighted units (`share` gives the share of the largest). band (rad/s) is where band-share looks; without one, from
    0 to the counted range over 1.5. Members of a block share its values.

    Always-kept modes come first, then descending values; ties by frequency, then the slower decay; undefined values
    come last. No single measure is safe alone: residues overlap and cancel.

    Raises ChoiceError for an unknown measure, for a band that is none and for a measure that this model cannot have.
    """
    if by not in MEASURES:
        raise unknown_measure(by)
    inside, note = _band(modes, band)
    table = table_of(modes, inside)
    scores = {name: score(name, table) for name in MEASURES}
    if len(modes) and np.all(np.isnan(scores[by].values)):
        raise ChoiceError(
            f"{by} is undefined for this model", expected="a value for at least one mode", got=scores[by].reason,
            remedy="rank by band-share or coupling",
        )  # fmt: skip
    return Ranking(
        modes=modes,
        by=by,
        measures={name: s.values for name, s in scores.items()},
        undefined={name: s.reason for name, s in scores.items() if s.reason},
        order=_order(modes, scores[by].values),
        band=band,
        warnings=tuple(text for text in (note if by == "band-share" else "", _lost(by, scores[by].values)) if text),
    )


def share(values: Real) -> Real:
    """Values as shares of the largest finite one, nan where undefined.

    >>> share(np.array([2.0, 1.0, np.nan])).tolist()
    [1.0, 0.5, nan]
    """
    values = np.asarray(values, dtype=float)
    finite = values[np.isfinite(values)]
    top = float(finite.max(initial=0.0))
    return values / top if top > 0 else np.where(np.isfinite(values), 0.0, values)


def unknown_measure(name: str) -> ChoiceError:
    """The refusal of a measure that does not exist, with the names that come close."""
    near = difflib.get_close_matches(name, MEASURES, n=2)
    return ChoiceError(
        f"unknown measure {name!r}",
        expected="one of " + ", ".join(MEASURES),
        got=name,
        remedy=f"did you mean {' or '.join(near)}?" if near else "",
    )


def _band(modes: Modes, band: tuple[float, float] | None) -> tuple[tuple[float, float], str]:
    if band is not None:
        low, high = float(band[0]), float(band[1])
        if not (np.isfinite(low) and np.isfinite(high) and 0 <= low < high):
            raise ChoiceError(
                "the band is not one",
                expected="0 <= low < high, both finite",
                got=f"{low / (2 * np.pi):.6g} Hz to {high / (2 * np.pi):.6g} Hz",
                remedy="give the lower end first",
            )
        return (low, high), ""
    top = (modes.certificate.below_omega or float(modes.omega.max(initial=0.0))) / MARGIN
    top = top if top > 0 else 1.0
    return (0.0, top), f"no band was given: band-share looks from 0 to {top / (2 * np.pi):.4g} Hz"


def _lost(by: str, values: Real) -> str:
    count = int(np.count_nonzero(np.isnan(values)))
    return f"{by} is undefined for {count} of {len(values)} modes, which come last" if count else ""


def _order(modes: Modes, values: Real) -> Ints:
    """Mode numbers, best first."""
    held = np.array([not reason for reason in modes.always_kept], dtype=bool)
    level = _levels(values)
    slow = np.where(np.isnan(modes.time_constant), np.inf, modes.time_constant)
    order = np.lexsort((-slow, modes.omega, level, held))
    return np.asarray(order + 1, dtype=np.int64)


def _levels(values: Real) -> Ints:
    """Rank level (k,) by descending value, equal within TIE; undefined last."""
    key = np.where(np.isnan(values), -np.inf, values)
    order = np.argsort(-key, kind="stable")
    ranked = key[order]
    with np.errstate(invalid="ignore"):
        drop = ranked[:-1] - ranked[1:] > TIE * np.abs(ranked[:-1])
    level = np.empty(len(values), dtype=np.int64)
    level[order] = np.concatenate([[0], np.cumsum(drop)])[: len(values)]
    return level
