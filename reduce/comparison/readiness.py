"""Before a small model is handed over: what each actuator reaches, what each sensor sees, what spills over."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.response.small import SecondOrderModal, SmallSystem
from modesieve.reduce.truncation.records import ReducedModel

#: Coupling below this share of the channel's largest counts as none.
BLIND = 1e-3
#: Dropped modes whose peak gain exceeds this share of the kept ones' deserve a word (common practice: spillover).
SPILL = 0.05


@dataclass(frozen=True, kw_only=True, eq=False)
class Readiness:
    """Checks of one small model.

    reach (q, m), sight (q, p): coupling of every kept mode to every input and output, as a share of that channel's
    largest over all computed modes; numbers (q,): the kept modes. spill (p, m): largest gain of the dropped computed
    modes over the largest of the kept ones. warnings: what a control engineer must know, in words.
    """

    numbers: tuple[int, ...]
    reach: Real
    sight: Real
    spill: Real
    warnings: tuple[str, ...]


def couplings(modes: Modes) -> tuple[Real, Real]:
    """Coupling per mode to inputs (k, m) and outputs (k, p), each as a share of the channel's largest."""
    system = modes.system
    to_inputs = np.array([_to_inputs(system, i) for i in range(system.terms)]).reshape(system.terms, system.m)
    to_outputs = np.array([_to_outputs(system, i) for i in range(system.terms)]).reshape(system.terms, system.p)
    return _shares(to_inputs)[modes.term], _shares(to_outputs)[modes.term]


def _to_inputs(system: SmallSystem, i: int) -> Real:
    if isinstance(system, SecondOrderModal):
        return np.abs(system.b[i])
    return np.linalg.norm(system.B[system.states_of(i)], axis=0)


def _to_outputs(system: SmallSystem, i: int) -> Real:
    if isinstance(system, SecondOrderModal):
        w = np.sqrt(max(float(system.x[i]), 0.0))
        return np.abs(system.cq[:, i] + 1j * w * system.cv[:, i] - w**2 * system.ca[:, i])
    return np.linalg.norm(system.C[:, system.states_of(i)], axis=1)


def _shares(table: Real) -> Real:
    top = table.max(axis=0, initial=0.0)
    return table / np.where(top > 0, top, 1.0)


def readiness(small: ReducedModel) -> Readiness:
    """Controllability and observability of the kept modes per channel, spillover and direct feedthrough."""
    modes = small.modes
    reach, sight = couplings(modes)
    at = np.array(small.kept, dtype=int) - 1
    spill = _spill(small)
    return Readiness(
        numbers=small.kept,
        reach=reach[at],
        sight=sight[at],
        spill=spill,
        warnings=(*_blind(small, reach, sight), *_spilling(small, spill), *_through(small)),
    )


def _in_band(small: ReducedModel, number: int) -> bool:
    if small.band is None:
        return True
    return bool(small.band[0] <= small.modes.omega[number - 1] <= small.band[1])


def _blind(small: ReducedModel, reach: Real, sight: Real) -> list[str]:
    origin, out = small.modes.origin, []
    names = [
        *(("input", c.name, "does not reach", reach[:, l]) for l, c in enumerate(origin.inputs)),
        *(("output", c.name, "does not see", sight[:, k]) for k, c in enumerate(origin.outputs)),
    ]
    for noun, name, verb, shares in names:
        lost = [n for n in small.kept if _in_band(small, n) and shares[n - 1] < BLIND]
        if lost:
            out.append(f"{noun} {name} {verb} {_listed(lost)} (coupling below {100 * BLIND:g} % of its largest)")
    return out


def _listed(numbers: list[int]) -> str:
    shown = ", ".join(map(str, numbers[:8])) + (f" and {len(numbers) - 8} more" if len(numbers) > 8 else "")
    return ("mode " if len(numbers) == 1 else "modes ") + shown


def _peaks(system: SmallSystem, poles_at: Real) -> Real:
    """Largest magnitude of every entry over the frequencies of the modes, (p, m)."""
    G = np.abs(system.response(poles_at) - system.through(poles_at))
    return np.where(np.isfinite(G), G, 0.0).max(axis=0, initial=0.0)


def _spill(small: ReducedModel) -> Real:
    modes = small.modes
    kept = np.unique(modes.term[np.array(small.kept, dtype=int) - 1])
    rest = np.setdiff1d(np.arange(modes.system.terms), kept)
    grid = np.unique(modes.omega[modes.omega > 0])
    if rest.size == 0 or grid.size == 0:
        return np.zeros((modes.system.p, modes.system.m))
    over, under = _peaks(modes.system.select(rest), grid), _peaks(modes.system.select(kept), grid)
    return over / np.where(under > 0, under, np.where(over > 0, np.finfo(float).tiny, 1.0))


def _spilling(small: ReducedModel, spill: Real) -> list[str]:
    if spill.size == 0 or spill.max() <= SPILL:
        return []
    k, l = np.unravel_index(int(np.argmax(spill)), spill.shape)
    origin = small.modes.origin
    pair = f"{origin.outputs[k].name} from {origin.inputs[l].name}"
    far = spill[k, l] >= 1e3
    size = "alone" if far else f"at {100 * spill[k, l]:.3g} % of the kept ones"
    return [
        f"spillover: dropped modes peak {size} for {pair}; roll the controller off below them, or keep them in the "
        "model that it is checked against"
    ]


def _through(small: ReducedModel) -> list[str]:
    D = small.system.state_space()[3]
    pairs = np.argwhere(np.abs(D) > 1e-12 * np.abs(D).max(initial=0.0)) if D.size else np.zeros((0, 2), dtype=int)
    if len(pairs) == 0:
        return []
    return [
        f"{len(pairs)} input-output pairs have direct feedthrough: a feedback loop around them is algebraic unless the "
        "controller or the actuator is strictly proper; statics none or vectors avoid it for displacement outputs"
    ]
