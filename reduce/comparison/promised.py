"""What the hub guarantees for every number of kept modes: in the band, and on the whole axis above the floor."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Ranking
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.choice import resolve
from modesieve.reduce.truncation.floor import floor_of
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.records import Count, ReducedModel
from modesieve.reduce.truncation.statics import Cutter, static_terms

#: More counts than this are thinned: each costs a response and a singular value at every frequency.
MOST = 40


@dataclass(frozen=True, kw_only=True, eq=False)
class Promised:
    """Per count: kept (q,), states (q,); local (q,): worst guaranteed local error at the band's samples; axis (q,): the
    same of the absolute weighted error over the whole axis, and floor (q,) below it, None with ``reason``."""

    kept: Real
    states: Real
    local: Real
    axis: Real | None = None
    floor: Real | None = None
    reason: str = ""


def promised(small: ReducedModel, ranking: Ranking, omega: Real, threshold: float) -> Promised | None:
    """Guaranteed errors over the kept count, in rank order, for the statics of ``small``; None without a guarantee.

    omega (w,): samples inside the band; between them nothing is said here (the delivered model's own guarantee does).
    threshold: weighted level from which a response counts as a local reference.
    """
    hub, guarantee = small.hub, small.guarantee
    if hub is None or guarantee is None or not guarantee.holds or len(omega) == 0:
        return None
    made = list(_systems(small, ranking, hub))
    bound = hub.error(omega)
    full = hub.weigh(hub.response(omega))
    reference = np.maximum(np.maximum(largest_singular_value(full) - bound, 0.0), threshold)
    local = [float(np.max((_gap(hub, full, R, omega) + bound) / reference)) for _, R in made]
    kept, states = (np.array(v, dtype=float) for v in ([k for k, _ in made], [R.states for _, R in made]))
    axis, floor, reason = _whole_axis(hub, made, states)
    return Promised(kept=kept, states=states, local=np.array(local), axis=axis, floor=floor, reason=reason)


def _systems(small: ReducedModel, ranking: Ranking, hub: Hub) -> Iterator[tuple[int, SmallSystem]]:
    """Small systems of a thinned list of counts, each legal (no coupled cluster is split)."""
    modes = small.modes
    parts = static_terms(modes) if small.statics == "feedthrough" else None
    make = Cutter(modes=modes, statics=small.statics, parts=parts, hub=hub, levels=small.levels)
    seen: set[int] = set()
    for k in np.unique(np.linspace(1, len(modes), min(len(modes), MOST)).astype(int)):
        try:
            numbers = resolve(Count(modes=int(k)), modes, ranking).numbers
        except ChoiceError:  # a cluster that ranks first, or always-kept modes, ask for more
            continue
        if len(numbers) not in seen:
            seen.add(len(numbers))
            yield len(numbers), make(numbers)


def _gap(hub: Hub, full: Any, R: SmallSystem, omega: Real) -> Real:
    return np.asarray(largest_singular_value(full - hub.weigh(R.response(omega))))


def _whole_axis(hub: Hub, made: list[tuple[int, SmallSystem]], states: Real) -> tuple[Real | None, Real | None, str]:
    floor = floor_of(hub)
    if floor.reason:
        return None, None, floor.reason
    size = hub.terms.x if hub.rest.order == 1 else np.sqrt(np.maximum(hub.terms.x, 0.0))
    size = size[size > 0]
    omega = np.unique(np.concatenate([[0.0], np.geomspace(1e-3 * size.min(), 30 * size.max(), 300), size]))
    bound, full = hub.error(omega), hub.weigh(hub.response(omega))
    axis = np.array([float(np.max(_gap(hub, full, R, omega) + bound)) for _, R in made])
    below = np.concatenate([floor.floor, np.zeros(int(states.max()) + 1)])
    return axis, below[states.astype(int)], ""
