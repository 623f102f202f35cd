"""The smallest count in rank order whose measured error passes.

The error is not monotone in the count (overlapping contributions cancel), so counts are not bisected: they are tried in
order, each first at the frequencies where its predecessors failed, and everywhere only when it passes there.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.progress import Listener
from modesieve.reduce.response.deviation import Yardstick
from modesieve.reduce.response.norms import largest_singular_value, worst_ratio
from modesieve.reduce.response.records import FullResponse
from modesieve.reduce.truncation.choice import Sequence
from modesieve.reduce.truncation.gauge import Solver, refined, response, told, yardstick_for
from modesieve.reduce.truncation.records import Tolerance
from modesieve.reduce.truncation.statics import Cutter

_WITNESSES = 8
_ROUNDS = 6
_TRIED = 60


@dataclass(frozen=True, kw_only=True, eq=False)
class Found:
    """The count that passes, the full response it was measured on, and what to say."""

    count: int
    full: FullResponse
    yard: Yardstick
    notes: tuple[str, ...] = ()


@dataclass(kw_only=True, eq=False)
class _Search:
    """One pass over the counts. ``witnesses``: sample indices where a count failed; ``best``: (error, count)."""

    ordered: Sequence
    make: Cutter
    yard: Yardstick
    tolerance: Tolerance
    outputs: Ints
    witnesses: list[int] = field(default_factory=list)

    def passes(self, count: int) -> bool:
        small = self.make(self.ordered.order[:count])
        spots = np.array(self.witnesses, dtype=int)
        if spots.size and self._errors(response(small, self.yard.omega[spots]), spots).max() > self.tolerance.value:
            return False
        value, at = self._worst(response(small, self.yard.omega))
        if value <= self.tolerance.value:
            return True
        self.witnesses = [at, *(i for i in self.witnesses if i != at)][:_WITNESSES]
        return False

    def best(self) -> tuple[float, int]:
        """Smallest error of any count and that count, for the message that none passes."""
        cuts = self.ordered.cuts[self.ordered.cuts > 0]
        picks = cuts[np.unique(np.linspace(0, len(cuts) - 1, _TRIED).round().astype(int))]
        return min((self.error(int(count)), int(count)) for count in picks)

    def error(self, count: int) -> float:
        small = self.make(self.ordered.order[:count])
        return self._worst(response(small, self.yard.omega))[0]

    def _errors(self, R: Complex, spots: Ints) -> Real:
        """Error (q,) at the given samples, in the terms of the tolerance."""
        E = self.yard.G[spots] - self.yard.channels.weigh(R)
        if self.tolerance.of == "absolute":
            sizes = np.abs(E) * self.yard.channels.resolutions[:, None]
            return np.asarray(sizes.sum(axis=2)[:, self.outputs].max(axis=1, initial=0.0))
        return np.asarray(largest_singular_value(E) / self.yard.scale(self.tolerance.of)[spots])

    def _worst(self, R: Complex) -> tuple[float, int]:
        if self.tolerance.of == "absolute":
            errors = self._errors(R, np.arange(len(self.yard.omega)))
            at = int(np.argmax(errors))
            return float(errors[at]), at
        return worst_ratio(self.yard.G - self.yard.channels.weigh(R), self.yard.scale(self.tolerance.of))


def smallest(
    modes: Modes,
    ordered: Sequence,
    tolerance: Tolerance,
    make: Cutter,
    full: FullResponse,
    band: tuple[float, float],
    *,
    solve: Solver | None,
    progress: Listener = None,
) -> Found:
    """The smallest legal count whose error is within ``tolerance`` on the frequencies of ``full``.

    With ``solve`` the frequencies are refined between the samples around the estimated worst points, and counts that
    no longer pass are given up, until nothing changes.

    Raises ChoiceError for a tolerance that is none, for relative errors where they mean nothing, and where even all
    computed modes do not pass.
    """
    yard = yardstick_for(modes, full, band)
    outputs = _checked(tolerance, yard)
    start, changed, rounds = 0, True, 0
    notes = _left_out(tolerance, yard, outputs)
    while changed:
        search = _Search(ordered=ordered, make=make, yard=yard, tolerance=tolerance, outputs=outputs)
        start = _first_passing(search, start, progress)
        changed = solve is not None and rounds < _ROUNDS
        if solve is not None and changed:
            small = make(ordered.order[: ordered.cuts[start]])
            full, yard, changed = refined(modes, yard, full, solve, small, tolerance.of, band)
            rounds += 1
    if solve is None:
        notes.append("not refined between the given frequencies")
    return Found(count=int(ordered.cuts[start]), full=full, yard=yard, notes=tuple(notes))


def _first_passing(search: _Search, start: int, progress: Listener) -> int:
    """Index of the first cut from ``start`` on that passes; refining only ever adds failures, so none lies before."""
    cuts = search.ordered.cuts
    for i in range(start, len(cuts)):
        if cuts[i] == 0:
            continue
        told(progress, "trying counts", int(cuts[i]), int(cuts[-1]))
        if search.passes(int(cuts[i])):
            return i
    raise _unmet(search)


def _unmet(search: _Search) -> ChoiceError:
    tolerance, (value, count) = search.tolerance, search.best()
    total = int(search.ordered.cuts[-1])
    best = f"{_size(tolerance, value)} with {count} modes" if np.isfinite(value) else "an infinite error"
    return ChoiceError(
        f"no count of modes meets {_size(tolerance, tolerance.value)} of {tolerance.of}"
        if tolerance.of != "absolute"
        else f"no count of modes meets {_size(tolerance, tolerance.value)}",
        expected=f"an error within the tolerance with at most {total} modes, statics {search.make.statics}",
        got=f"at best {best}",
        remedy="compute more modes, allow better statics, or loosen the tolerance",
    )


def _size(tolerance: Tolerance, value: float) -> str:
    return f"{value:.3g} {tolerance.unit}".rstrip() if tolerance.of == "absolute" else f"{100 * value:.3g} %"


def _checked(tolerance: Tolerance, yard: Yardstick) -> Ints:
    """Indices of the outputs that the tolerance is about."""
    if not (np.isfinite(tolerance.value) and tolerance.value > 0):
        raise ChoiceError("the tolerance is none", expected="a number above 0", got=f"{tolerance.value}")
    if tolerance.of != "absolute":
        if yard.refusal:
            raise ChoiceError(
                "a relative tolerance means nothing in this band",
                expected="damping in every mode inside the band",
                got=yard.refusal,
                remedy="give the model damping, move the band, or choose by count or band",
            )
        return np.arange(yard.channels.p)
    units = [channel.unit for channel in yard.channels.outputs]
    if len(set(units)) <= 1:
        return np.arange(len(units))
    chosen = np.flatnonzero([unit == tolerance.unit for unit in units])
    if chosen.size == 0:
        raise ChoiceError(
            "an absolute tolerance cannot speak for outputs in several units",
            expected="outputs in one unit, or a tolerance in the unit of some of them",
            got=f"tolerance in {tolerance.unit or 'no unit'}, outputs in {', '.join(sorted(set(units)))}",
            remedy="give a relative tolerance, or write a model with the outputs that matter",
        )
    return chosen


def _left_out(tolerance: Tolerance, yard: Yardstick, outputs: Ints) -> list[str]:
    if len(outputs) == yard.channels.p:
        return []
    others = [c.name for i, c in enumerate(yard.channels.outputs) if i not in set(outputs.tolist())]
    return [f"the tolerance in {tolerance.unit} says nothing about {', '.join(others)}"]
