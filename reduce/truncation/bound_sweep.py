"""Guaranteed error over the kept count, statics side by side, with the floor: what a count costs at a glance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.certify import grid_of
from modesieve.reduce.truncation.floor import Floor, floor_of
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.trial import Static, Trial, small_system

_FLOOR = 1e-3


@dataclass(frozen=True, kw_only=True, eq=False)
class BoundSweep:
    """kept (q,) counts; errors and states: label ("none", "feedthrough", "vectors 1", ...) to (q,) guaranteed errors at
    the sampled frequencies relative to ``of`` and to numbers of states, nan where a set is not legal; floor: of the
    whole axis, over states, weighted units (not a ratio): never to be drawn beside the band errors."""

    kept: Ints
    of: str
    errors: dict[str, Real]
    states: dict[str, Ints]
    floor: Floor


def bound_sweep(
    hub: Hub,
    order: Ints,
    band: tuple[float, float],
    *,
    counts: Ints | None = None,
    of: str = "local",
    threshold: float | None = None,
    progress: Listener = None,
) -> BoundSweep:
    """Guaranteed error of the first modes of ``order`` (numbers, best first) for every count and every legal statics.

    The error is that of the sampled frequencies (every mode and pseudo-mode with its flanks); `certify` proves one
    model over the whole band. of: "peak" or "local".

    Raises ChoiceError for another reference.
    """
    if of not in ("peak", "local"):
        raise ChoiceError("no such reference in a sweep", expected="peak or local", got=of)
    counts = np.arange(1, len(order) + 1) if counts is None else np.asarray(counts, dtype=int)
    omega = grid_of(hub, hub.system, band)
    trial = Trial(hub=hub, omega=omega, of=of, scale=_scale(hub, omega, of, threshold), outputs=np.ones(1))
    errors: dict[str, Real] = {}
    states: dict[str, Ints] = {}
    for label, static in _statics(hub):
        tell(progress, "sweep", message=label)
        rows = [_one(trial, tuple(int(i) for i in order[:count]), static) for count in counts]
        errors[label] = np.array([error for error, _ in rows])
        states[label] = np.array([number for _, number in rows], dtype=np.int64)
    return BoundSweep(kept=counts, of=of, errors=errors, states=states, floor=floor_of(hub))


def _statics(hub: Hub) -> list[tuple[str, Static]]:
    out = [("none", Static(kind="none"))]
    if not (np.any(hub.terms.cv) or np.any(hub.terms.ca)):
        out.append(("feedthrough", Static(kind="feedthrough")))
    return [*out, *((f"vectors {n}", Static(kind="vectors", levels=n)) for n in range(1, hub.levels + 1))]


def _one(trial: Trial, kept: tuple[int, ...], static: Static) -> tuple[float, int]:
    try:
        return trial.error(kept, static), small_system(trial.hub, kept, static).states
    except ChoiceError:
        return float("nan"), 0  # a rigid-body mode is not among the kept ones yet


def _scale(hub: Hub, omega: Real, of: str, threshold: float | None) -> Real:
    own = hub.error(omega)
    elastic = largest_singular_value(hub.weigh(hub.elastic().response(omega))) - own
    peak = float(np.max(elastic, initial=0.0))
    if of == "peak":
        return np.full(len(omega), peak)
    size = largest_singular_value(hub.weigh(hub.response(omega))) - own
    return np.maximum(size, _FLOOR * peak if threshold is None else threshold)
