"""Step and impulse responses of the full model and the small ones on one time grid."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.comparison.records import TimeResponse
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.response.records import Certainty
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem
from modesieve.reduce.response.time import impulse_response, step_response, time_grid
from modesieve.reduce.truncation.gauge import estimate_system
from modesieve.reduce.truncation.records import ReducedModel


def time_responses(
    modes: Modes, smalls: tuple[ReducedModel, ...], band: tuple[float, float]
) -> tuple[TimeResponse | None, TimeResponse | None]:
    """Step and impulse response, every input at its amplitude, zero initial state.

    The full curve is propagated exactly from all modes where all are known (measured), else from the computed modes
    and the static remainder of the rest (estimated).
    """
    origin = modes.origin
    if len(modes) == 0 or 0 in (origin.m, origin.p):
        return None, None
    t = time_grid(modes, band)
    full = estimate_system(modes)
    certainty: Certainty = "measured" if modes.certificate.complete == "all" else "estimated"
    out = []
    for kind, respond in (("step", step_response), ("impulse", impulse_response)):
        out.append(
            TimeResponse(
                kind=kind,
                t=t,
                full=respond(full, t) * origin.amplitudes,
                small=tuple(respond(small.system, t) * origin.amplitudes for small in smalls),
                certainty=certainty,
                note="; ".join(_notes(kind, modes, full, smalls)),
            )
        )
    return out[0], out[1]


def _notes(kind: str, modes: Modes, full: SmallSystem, smalls: tuple[ReducedModel, ...]) -> list[str]:
    notes = []
    if modes.certificate.complete != "all":
        notes.append(f"full curve from {len(modes)} computed modes and the static remainder of the rest")
    if any(not isinstance(s, FirstOrderModal) and np.any(s.eta) for s in (full, *(one.system for one in smalls))):
        notes.append("loss factors act as damping ratios of half their size")
    if kind == "impulse" and any(_has_feedthrough(s) for s in (full, *(one.system for one in smalls))):
        notes.append("the impulse that a feedthrough answers with at t = 0 is not drawn")
    return notes


def _has_feedthrough(system: SmallSystem) -> bool:
    if isinstance(system, FirstOrderModal):
        return bool(np.any(system.feedthrough))
    return bool(np.any(system.D) or np.any(system.X) or np.any(system.ca))
