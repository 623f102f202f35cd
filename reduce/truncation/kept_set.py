"""The best kept set of a given size for computed modes, beside what the single scores would keep."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from modesieve.reduce.arrays import Ints
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.response.grid import frequency_grid
from modesieve.reduce.response.records import Certainty
from modesieve.reduce.truncation.choice import always, groups
from modesieve.reduce.truncation.select import Selection, select, terms_of, unit_orders
from modesieve.reduce.truncation.set_error import SetError, band_error, h2_error


@dataclass(frozen=True, kw_only=True)
class KeptSet:
    """numbers: kept modes, ascending, always-kept ones included. error, nothing and of_score are weighted H2 errors or
    band maxima of what is dropped *of the computed modes*; certainty: "estimated" unless every mode is known."""

    numbers: tuple[int, ...]
    by: Literal["h2", "band"]
    error: float
    nothing: float
    of_score: dict[str, float]
    certainty: Certainty
    warnings: tuple[str, ...] = ()


def best_set(
    modes: Modes,
    count: int,
    *,
    by: Literal["h2", "band"] = "band",
    band: tuple[float, float] | None = None,
    ranking: Ranking | None = None,
    static: bool = False,
    restarts: int = 10,
    seed: int = 0,
) -> KeptSet:
    """The ``count`` modes (always-kept ones included) whose dropped partners do the least harm together.

    by: "h2" (random loads, transients) or "band" (largest singular value over ``band``, rad/s). ranking: its measures'
    orders start the search and are compared with the result. static: dropped modes leave their static part in place.
    Groups that belong together are never split; where they do not fit, fewer modes are kept.

    Raises ChoiceError for counts that do not exist, a band error without a band, and an infinite H2 error.
    """
    held = always(modes)
    if not len(held) <= count <= len(modes):
        raise ChoiceError(
            f"{count} modes cannot be kept",
            expected=f"{len(held)} to {len(modes)}, always-kept ones included",
            got=str(count),
        )
    units = [unit for unit in (tuple(i for i in unit if i not in held) for unit in groups(modes)) if unit]
    error = _error(modes, units, by, band, static)
    orders = unit_orders(ranking, units) if ranking is not None else None
    found = _fitting(error, units, count - len(held), orders, restarts, seed)
    numbers = tuple(sorted(held.union(*(units[i] for i in found.kept)) if found.kept else held))
    return KeptSet(
        numbers=numbers,
        by=by,
        error=found.error,
        nothing=found.nothing,
        of_score=found.of_score,
        certainty="measured" if modes.certificate.complete == "all" else "estimated",
        warnings=found.warnings,
    )


def _fitting(
    error: SetError, units: list[tuple[int, ...]], room: int, orders: dict[str, Ints] | None, restarts: int, seed: int
) -> Selection:
    """The largest number of units whose best set holds at most ``room`` modes."""
    number = min(room, len(units))
    while True:
        found = select(error, number, orders=orders, restarts=restarts, seed=seed)
        if number == 0 or sum(len(units[i]) for i in found.kept) <= room:
            return found
        number -= 1


def _error(
    modes: Modes, units: list[tuple[int, ...]], by: str, band: tuple[float, float] | None, static: bool
) -> SetError:
    terms = terms_of(modes, units)
    a, r = modes.origin.amplitudes, modes.origin.resolutions
    if by == "h2":
        return h2_error(modes.system, terms, a, r)
    if band is None:
        raise ChoiceError("the band error needs a band", expected="a band", got="none", remedy="give one, or use h2")
    omega = frequency_grid(modes, band, per_mode=5, base=60, cap=600)
    return band_error(modes.system, terms, omega, a, r, static=static)
