"""From a typed choice to kept mode numbers.

What stays together: a complex pair is one mode already; the modes of a non-normal block share a term and are kept or
dropped whole; the coupled members of a symmetric cluster are not split by a count (any basis of them is as good as
another, so half of them means nothing), while members without coupling are free to go.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.report import runs
from modesieve.reduce.response.grid import checked_band
from modesieve.reduce.response.small import FirstOrderModal
from modesieve.reduce.truncation.records import Above, Band, Choice, Count, Keep

#: A cluster member whose coupling is this small a share of its cluster's largest has none.
_UNCOUPLED = 1e-8


@dataclass(frozen=True, kw_only=True)
class Kept:
    """Mode numbers, ascending, and what to say about them."""

    numbers: tuple[int, ...]
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, eq=False)
class Sequence:
    """Rank order with what stays together side by side: the kept sets of every count that splits nothing.

    order (k,): mode numbers. cuts (q,): ascending counts; ``order[:cuts[i]]`` is a legal kept set. The first cut holds
    the always-kept modes (0 if there are none).
    """

    order: Ints
    cuts: Ints

    def kept(self, count: int) -> tuple[int, ...]:
        return tuple(sorted(int(i) for i in self.order[:count]))


def resolve(choice: Choice, modes: Modes, ranking: Ranking | None) -> Kept:
    """The modes that ``choice`` keeps. `Tolerance` is not resolved here, since it needs the full response.

    Raises ChoiceError for counts and numbers that do not exist, unknown measures and empty bands.
    """
    match choice:
        case Count(modes=count):
            return _first(count, sequence(modes, _needed(ranking)))
        case Band(low=low, high=high):
            return _inside(checked_band((low, high)), modes)
        case Keep(numbers=numbers):
            return _listed(numbers, modes)
        case tuple() if choice and all(isinstance(one, Above) for one in choice):
            return _above(choice, modes, _needed(ranking))
    raise ChoiceError(
        "the choice of modes is none that is known",
        expected="Count, Band, Keep, Tolerance or a tuple of Above",
        got=repr(choice),
    )


def _needed(ranking: Ranking | None) -> Ranking:
    if ranking is None:
        raise ChoiceError("this choice needs a ranking", expected="a Ranking", got="modes alone", remedy="rank first")
    return ranking


# ---- what stays together -------------------------------------------------------------------------------------------


def coupling(modes: Modes) -> Real:
    """Weighted ``norm(c_i) norm(b_i)`` per mode (k,), outputs taken at the mode's own frequency."""
    system, origin = modes.system, modes.origin
    a, r = origin.amplitudes, origin.resolutions
    if isinstance(system, FirstOrderModal):
        parts = [system.states_of(i) for i in range(system.terms)]
        per_term = np.array(
            [np.linalg.norm(system.C[:, s] / r[:, None]) * np.linalg.norm(system.B[s] * a) for s in parts]
        )
        return np.asarray(per_term[modes.term]) if len(modes) else np.zeros(0)
    omega = np.sqrt(np.abs(system.x))
    c = system.cq + 1j * omega * system.cv - omega**2 * system.ca
    per_term = np.linalg.norm(c / r[:, None], axis=0) * np.linalg.norm(system.b * a, axis=1)
    return np.asarray(per_term[modes.term])


def groups(modes: Modes) -> list[tuple[int, ...]]:
    """Mode numbers that stay together, as one tuple each; every mode is in exactly one."""
    strength = coupling(modes)
    out: list[tuple[int, ...]] = []
    placed: set[int] = set()
    for number in range(1, len(modes) + 1):
        if number not in placed:
            members = _together(number, modes, strength)
            out.append(members)
            placed.update(members)
    return out


def _together(number: int, modes: Modes, strength: Real) -> tuple[int, ...]:
    block = modes.modes_of(int(modes.term[number - 1]))
    if len(block) > 1:
        return tuple(int(i) for i in block)
    cluster = np.array(modes.cluster[number - 1] or (number,))
    floor = max(_UNCOUPLED * strength[cluster - 1].max(), 1e-14 * strength.max(initial=0.0))
    if strength[number - 1] <= floor:
        return (number,)
    return tuple(int(i) for i in cluster if strength[i - 1] > floor and len(modes.modes_of(modes.term[i - 1])) == 1)


def whole_blocks(numbers: Iterable[int], modes: Modes) -> set[int]:
    """``numbers`` with the rest of every non-normal block that is touched."""
    return {int(j) for i in numbers for j in modes.modes_of(int(modes.term[i - 1]))}


def always(modes: Modes) -> set[int]:
    """Numbers of the modes that are never dropped, with the rest of their blocks."""
    return whole_blocks((i + 1 for i, reason in enumerate(modes.always_kept) if reason), modes)


def sequence(modes: Modes, ranking: Ranking) -> Sequence:
    """Rank order in whole groups; a group stands where its best member stands."""
    held = always(modes)
    rank = {int(number): i for i, number in enumerate(ranking.order)}
    rest = [tuple(i for i in group if i not in held) for group in groups(modes)]
    rest = [tuple(sorted(group, key=rank.__getitem__)) for group in rest if group]
    rest.sort(key=lambda group: rank[group[0]])
    order = [*sorted(held, key=rank.__getitem__), *(i for group in rest for i in group)]
    cuts = np.cumsum([len(held), *(len(group) for group in rest)])
    return Sequence(order=np.array(order, dtype=np.int64), cuts=cuts.astype(np.int64))


# ---- the choices ---------------------------------------------------------------------------------------------------


def _first(count: int, ordered: Sequence) -> Kept:
    total, held = len(ordered.order), int(ordered.cuts[0])
    if count < 1 or count > total:
        raise ChoiceError(
            f"{count} modes cannot be kept",
            expected=f"1 to {total}, the number of computed modes",
            got=str(count),
            remedy="compute more modes" if count > total else "",
        )
    if count < held:
        raise ChoiceError(
            f"{count} modes cannot be kept",
            expected=f"at least {held}: rigid-body, integrating and unstable modes are always kept and count",
            got=str(count),
            remedy=f"keep {held} or more",
        )
    legal = int(ordered.cuts[ordered.cuts <= count].max())
    if legal < 1:
        first = ordered.order[: ordered.cuts[1]]
        raise ChoiceError(
            f"{count} modes cannot be kept without splitting a cluster",
            expected=f"at least {len(first)}: modes {runs(first)} belong together and rank first",
            got=str(count),
            remedy=f"keep {len(first)} or more",
        )
    if legal == count:
        return Kept(numbers=ordered.kept(count))
    split = ordered.order[legal : ordered.cuts[np.searchsorted(ordered.cuts, legal) + 1]]
    few = f"{legal} mode{'s' * (legal != 1)}"
    note = f"kept {few}, not {count}: modes {runs(split)} belong together and would have been split"
    return Kept(numbers=ordered.kept(legal), notes=(note,))


def _inside(band: tuple[float, float], modes: Modes) -> Kept:
    low, high = band
    slack = 1e-9  # a mode at a band end counts as inside whatever its rounding
    inside = (modes.omega >= low * (1 - slack)) & (modes.omega <= high * (1 + slack))
    numbers = {int(i) for i in modes.numbers[inside]}
    if not numbers:
        raise ChoiceError(
            "no mode lies in the band",
            expected=f"at least one mode between {low / (2 * np.pi):.6g} and {high / (2 * np.pi):.6g} Hz",
            got="none",
            remedy="widen the band, or choose by count",
        )
    return _completed(numbers, modes, clusters=True)


def _listed(numbers: tuple[int, ...], modes: Modes) -> Kept:
    wrong = sorted({i for i in numbers if not 1 <= i <= len(modes)})
    if wrong:
        raise ChoiceError(
            "the keep list names modes that do not exist",
            expected=f"numbers from 1 to {len(modes)}",
            got=runs(wrong),
            remedy="numbers are those of the modes table, in ascending frequency",
        )
    if not numbers and not always(modes):
        raise ChoiceError("the keep list is empty", expected="at least one mode number", got="none")
    return _completed(set(numbers), modes, clusters=False)


def _above(choice: tuple[Above, ...], modes: Modes, ranking: Ranking) -> Kept:
    passing = np.zeros(len(modes), dtype=bool)
    for one in choice:
        passing |= _passes(one, ranking)
    numbers = {int(i) for i in modes.numbers[passing]}
    if not numbers and not always(modes):
        raise ChoiceError(
            "no mode passes the thresholds",
            expected="a share at or below 1 of the largest (for decay: a time constant that occurs)",
            got=", ".join(f"{one.measure} = {one.share:g}" for one in choice),
            remedy="lower a threshold",
        )
    return _completed(numbers, modes, clusters=False)


def _passes(one: Above, ranking: Ranking) -> Any:
    if one.measure not in ranking.measures:
        near = difflib.get_close_matches(one.measure, ranking.measures, n=2)
        raise ChoiceError(
            f"unknown measure {one.measure!r}",
            expected="one of " + ", ".join(sorted(ranking.measures)),
            got=one.measure,
            remedy=f"did you mean {' or '.join(near)}?" if near else "",
        )
    if not np.isfinite(one.share) or one.share < 0:
        raise ChoiceError(
            f"the threshold on {one.measure} is none", expected="a number, 0 or larger", got=f"{one.share}"
        )
    values = ranking.measures[one.measure]
    known = ~np.isnan(values)
    if not known.any():
        reason = ranking.undefined.get(one.measure, "no value")
        raise ChoiceError(f"{one.measure} is undefined for this model", expected="values to compare", got=reason)
    if one.measure == "decay":
        return known & (np.where(known, values, 0.0) >= one.share)
    finite = values[known & np.isfinite(values)]
    largest = finite.max(initial=0.0)
    return known & (np.where(known, values, 0.0) >= one.share * largest)


def _completed(numbers: set[int], modes: Modes, *, clusters: bool) -> Kept:
    """With always-kept modes, whole blocks and, where asked, whole clusters; each addition is noted."""
    notes = []
    for extra, reason in (
        (always(modes), "are always kept"),
        (whole_blocks(numbers, modes), "belong to one block with kept modes"),
        (_cluster_mates(numbers, modes) if clusters else set(), "belong to a cluster at the band's end"),
    ):
        added = extra - numbers
        if added:
            notes.append(f"modes {runs(sorted(added))} {reason}")
        numbers = numbers | extra
    return Kept(numbers=tuple(sorted(numbers)), notes=tuple(notes))


def _cluster_mates(numbers: set[int], modes: Modes) -> set[int]:
    return {i for group in groups(modes) if not numbers.isdisjoint(group) for i in group}
