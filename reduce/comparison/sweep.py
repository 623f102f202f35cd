"""Error over the number of kept modes, in rank order, for every statics that costs no new solve."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.comparison.records import Sweep
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.model import Interface
from modesieve.reduce.response.deviation import Yardstick
from modesieve.reduce.response.norms import worst_ratio
from modesieve.reduce.response.records import Certainty
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem
from modesieve.reduce.truncation.choice import sequence
from modesieve.reduce.truncation.gauge import response
from modesieve.reduce.truncation.statics import loss_factor, refusal, static_terms, terms_of

#: Every count up to this many, then evenly spread ones: the curve is looked at, not read off.
_EVERY = 40
_MOST = 100


def sweep_of(modes: Modes, ranking: Ranking, yard: Yardstick, certainty: Certainty) -> Sweep:
    """Worst errors of the models that keep the first 1, 2, ... modes of ``ranking`` (clusters and blocks whole).

    The error is updated by the terms that each count adds, so the sweep costs one evaluation of all modes.
    """
    ordered = sequence(modes, ranking)
    counts = _counts(ordered.cuts[ordered.cuts > 0])
    bare = _weighted_terms(modes.system, yard.channels)
    parts = None if refusal(modes) else static_terms(modes)
    X = None if parts is None else modes.static
    legal = ["none"] if parts is None else ["none", "feedthrough"]
    errors: dict[tuple[str, str], list[float]] = {(s, of): [] for s in legal for of in ("peak", "local")}
    E = yard.G - yard.channels.weigh(modes.system.through(yard.omega))
    states: list[int] = []
    before = 0
    for count in counts:
        added = terms_of(modes, ordered.order[before:count])
        fresh = bare.select(added)
        E -= response(fresh, yard.omega)
        states.append(fresh.states + (states[-1] if states else 0))
        _note(errors, "none", E, yard)
        if parts is not None and X is not None:
            X = X - parts[added].sum(axis=0)
            _note(errors, "feedthrough", E - _remainder(modes, yard.channels.weigh(X), yard.omega), yard)
        before = count
    return Sweep(
        kept=np.asarray(counts, dtype=float),
        states=np.asarray(states, dtype=float),
        errors={key: np.asarray(values) for key, values in errors.items()},
        certainty=certainty,
        ranked_by=ranking.by,
    )


def _counts(cuts: Ints) -> Ints:
    if len(cuts) <= _MOST:
        return cuts
    late = np.linspace(_EVERY, len(cuts) - 1, _MOST - _EVERY).round().astype(int)
    return cuts[np.unique(np.concatenate([np.arange(_EVERY), late]))]


def _note(errors: dict[tuple[str, str], list[float]], statics: str, E: Complex, yard: Yardstick) -> None:
    errors[statics, "peak"].append(worst_ratio(E, yard.scale("peak"))[0])
    errors[statics, "local"].append(worst_ratio(E, yard.scale("local"))[0])


def _weighted_terms(system: SmallSystem, channels: Interface) -> SmallSystem:
    """The terms alone, without D and X, in weighted channels."""
    a, r = channels.amplitudes, channels.resolutions[:, None]
    nothing = np.zeros_like(system.D)
    if isinstance(system, FirstOrderModal):
        direct = None if system.direct is None else channels.weigh(system.direct)
        return replace(system, B=system.B * a, C=system.C / r, D=nothing, direct=direct)
    rows = {name: getattr(system, name) / r for name in ("cq", "cv", "ca")}
    return replace(system, b=system.b * a, D=nothing, X=nothing, **rows)


def _remainder(modes: Modes, X: Real, omega: Real) -> Complex | Real:
    eta = loss_factor(modes.system)
    return X / (1 + 1j * eta * np.sign(omega))[:, None, None] if eta else X
