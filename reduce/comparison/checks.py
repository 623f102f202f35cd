"""One small model against the full response."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.comparison.records import Check
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.response.deviation import Yardstick, largest_pairs, phase_error
from modesieve.reduce.response.grid import has_integrators
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.records import Certainty, FullResponse
from modesieve.reduce.truncation.gauge import Solver, response
from modesieve.reduce.truncation.records import ReducedModel


@dataclass(frozen=True, kw_only=True, eq=False)
class DcGain:
    """The full model at frequency 0 (p, m), or why there is nothing to compare with."""

    G: Real | None
    reason: str = ""


def dc_gain(modes: Modes, solve: Solver, full: FullResponse) -> DcGain:
    """The static response, from ``full`` where it holds frequency 0."""
    if has_integrators(modes):
        names = sorted({reason for reason in modes.always_kept if reason in ("rigid body", "integrating")})
        return DcGain(G=None, reason=f"none, integrates ({' and '.join(names)} modes)")
    at_zero = full if full.omega[0] == 0 else solve(np.zeros(1))
    if len(at_zero.omega) == 0:
        return DcGain(G=None, reason="none, the full model is singular at 0")
    return DcGain(G=at_zero.G[0].real)


def check_of(yard: Yardstick, small: ReducedModel, label: str, certainty: Certainty, gain: DcGain) -> Check:
    """Every error of ``small`` on the frequencies of ``yard``."""
    G = response(small.system, yard.omega)
    weighted = yard.channels.weigh(G)
    E = yard.G - weighted
    sigma = largest_singular_value(E)
    dc, reason = _dc_error(yard, small, gain)
    return Check(
        small=small,
        label=label,
        G=G,
        sigma=sigma,
        local=np.full_like(sigma, np.nan) if yard.refusal else sigma / yard.local,
        phase=phase_error(weighted, yard.G, yard.threshold),
        peak_error=yard.figure(G, "peak", certainty),
        local_error=yard.figure(G, "local", certainty),
        absolute=yard.absolute(G, certainty),
        pair_peak=largest_pairs(E, yard.G),
        dc_error=dc,
        dc_reason=reason,
    )


def _dc_error(yard: Yardstick, small: ReducedModel, gain: DcGain) -> tuple[float | None, str]:
    if gain.G is None:
        return None, gain.reason
    full = yard.channels.weigh(gain.G)
    size = float(largest_singular_value(full[None])[0])
    if size == 0:
        return None, "none, the full model does not answer statically"
    error = full - yard.channels.weigh(response(small.system, np.zeros(1))[0])
    value = float(largest_singular_value(error[None])[0]) / size
    return (value, "") if np.isfinite(value) else (None, "none, the small model integrates")


def labels_of(smalls: tuple[ReducedModel, ...]) -> list[str]:
    """A short name for every small model, each only once."""
    plain = [label_of(small) for small in smalls]
    seen: Counter[str] = Counter()
    out = []
    for label in plain:
        seen[label] += 1
        out.append(label if plain.count(label) == 1 else f"{label} ({seen[label]})")
    return out


def label_of(small: ReducedModel) -> str:
    """Kept count (or states) and statics in words."""
    many = len(small.kept)
    size = f"{many} mode{'s' * (many != 1)}" if many else f"{small.states} states"
    return size if small.statics == "none" else f"{size}, {small.statics}"
