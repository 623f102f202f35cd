"""What the page knows: the modal data, the stored full response and the words around them, as one JSON text."""

from __future__ import annotations

import base64
import json
import math
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.comparison.records import Check, TimeResponse
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.model import (
    BaseDamping,
    LossFactor,
    ModalRatio,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    Structure,
    Unknowns,
)
from modesieve.reduce.response.records import ErrorFigure
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem
from modesieve.reduce.truncation.records import ReducedModel
from modesieve.reduce.truncation.time_bound import step_error

#: Mode shapes are left out of the page past this many numbers (8 bytes each before encoding).
SHAPE_LIMIT = 200_000


def encode(text: Any) -> str:
    """JSON that is safe inside a script element: no ``<``, ``>`` or ``&`` survives."""
    out = json.dumps(text, allow_nan=False, ensure_ascii=True, separators=(",", ":"))
    return out.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")


def packed(array: Any) -> dict[str, str]:
    """Little-endian doubles as base64, so that the browser holds the same digits; complex as (re, im) pairs."""
    array = np.ascontiguousarray(array)
    if np.iscomplexobj(array):
        array = array.astype(np.complex128).view(np.float64)
    return {"f8": base64.b64encode(array.astype("<f8").tobytes()).decode()}


def number(value: Any) -> float | None:
    """A finite float, else None."""
    return float(value) if value is not None and math.isfinite(value) else None


def system_data(system: SmallSystem) -> dict[str, Any]:
    """A small system's terms, and its part that belongs to no mode."""
    common = {"terms": system.terms, "p": system.p, "m": system.m, "D": packed(system.D)}
    if isinstance(system, SecondOrderModal):
        arrays = {name: packed(getattr(system, name)) for name in ("x", "d", "eta", "b", "cq", "cv", "ca", "X")}
        return {"form": "second order", "eta_X": system.eta_X, **common, **arrays}
    blocks = np.concatenate([np.zeros(0), *(a.ravel() for a in system.blocks)])
    return {
        "form": "first order",
        "sizes": [len(a) for a in system.blocks],
        "blocks": packed(blocks),
        "B": packed(system.B),
        "C": packed(system.C),
        "direct": None if system.direct is None else packed(system.direct),
        **common,
    }


def hub_data(small: ReducedModel, omega: Real) -> dict[str, Any] | None:
    """The reference model of the guarantee, its own bound at the stored frequencies, and the rule of pseudo-modes.

    None where the small model carries no guarantee that holds.
    """
    hub, guarantee = small.hub, small.guarantee
    if hub is None or guarantee is None or not guarantee.holds:
        return None
    terms = hub.terms
    arrays = {name: packed(getattr(terms, name)) for name in ("x", "b", "cq", "cv", "ca", "d", "eta")}
    weighted, entries = hub.bound(omega)
    return {
        "order": terms.order,
        "terms": terms.terms,
        "computed": hub.computed,
        "p": hub.system.p,
        "m": hub.system.m,
        "levels": small.levels if small.statics == "vectors" else 0,
        "rule": _rule(hub.damping),
        "error": packed(weighted),
        "pair_error": packed(hub.weigh(entries)),
        **arrays,
    }


def _rule(base: BaseDamping) -> dict[str, Any]:
    """The base damping as numbers, see `rest.pseudo_damping`."""
    match base:
        case ModalRatio(ratio=ratio):
            return {"omega": [0.0], "ratio": [ratio]}
        case RatioByFrequency(omega=omega, ratio=ratios):
            return {"omega": omega.tolist(), "ratio": ratios.tolist()}
        case RatioByMode(ratio=ratios):
            return {"omega": [0.0], "ratio": [float(ratios[-1])]}
        case Rayleigh(alpha=alpha, beta=beta):
            return {"alpha": alpha, "beta": beta}
        case LossFactor(eta=eta):
            return {"eta": eta}
    return {}


def spot_data(small: ReducedModel) -> list[dict[str, float]]:
    """Places, true errors and upper bounds of the spot checks, weighted."""
    if small.guarantee is None:
        return []
    return [{"omega": s.omega, "error": s.error, "bound": s.high} for s in small.guarantee.spot_checks]


def term_statics(system: SmallSystem) -> Real:
    """Static value of every term, shape (terms, p, m): zero for rigid-body and integrating ones, as in Modes.static."""
    out = np.zeros((system.terms, system.p, system.m))
    for i in range(system.terms):
        if isinstance(system, SecondOrderModal):
            if system.x[i] != 0:
                out[i] = np.outer(system.cq[:, i], system.b[i]) / system.x[i]
        elif isinstance(system, FirstOrderModal):
            at = system.states_of(i)
            if np.linalg.matrix_rank(system.blocks[i]) == len(system.blocks[i]):
                out[i] = -system.C[:, at] @ np.linalg.solve(system.blocks[i], system.B[at])
            if system.direct is not None:
                out[i] += system.direct[i]
    return out


def mode_rows(modes: Modes, ranking: Ranking) -> list[dict[str, Any]]:
    """One row a mode, in table order."""
    return [
        {
            "number": int(i + 1),
            "term": int(modes.term[i]),
            "hz": number(modes.frequency_hz[i]),
            "tau": number(modes.time_constant[i]),
            "zeta": number(modes.damping_ratio[i]),
            "residual": number(modes.residual[i]),
            "condition": number(modes.condition[i]),
            "cluster": list(modes.cluster[i]),
            "always": modes.always_kept[i],
            "measures": {name: number(values[i]) for name, values in ranking.measures.items()},
        }
        for i in range(len(modes))
    ]


def figure_data(figure: ErrorFigure | None) -> dict[str, Any] | None:
    """One error figure with everything that must be said beside it."""
    if figure is None:
        return None
    return {
        "value": number(figure.value),
        "unit": figure.unit,
        "certainty": figure.certainty,
        "relative_to": figure.relative_to,
        "pair": list(figure.pair) if figure.pair else None,
        "hz": None if figure.at_omega is None else figure.at_omega / (2 * math.pi),
        "note": figure.note,
    }


def check_data(check: Check) -> dict[str, Any]:
    """The delivered model's figures as Python computed them, for the table and for the page's own test."""
    small = check.small
    return {
        "label": check.label,
        "states": small.states,
        "kept": list(small.kept),
        "statics": small.statics,
        "peak": figure_data(check.peak_error),
        "local": figure_data(check.local_error),
        "absolute": [figure_data(f) for f in check.absolute],
        "dc_error": number(check.dc_error),
        "dc_reason": check.dc_reason,
    }


def time_data(step: TimeResponse | None, small: ReducedModel) -> dict[str, Any] | None:
    """The stored full curve; the small model's is computed in the browser. bound: guaranteed, thermal models only."""
    if step is None:
        return None
    bound = _step_bound(step, small)
    return {
        "t": packed(step.t),
        "full": packed(step.full),
        "certainty": step.certainty,
        "note": step.note,
        "bound": None if bound is None else packed(bound),
    }


def _step_bound(step: TimeResponse, small: ReducedModel) -> Real | None:
    """Guaranteed error (t, p, m) of the step responses, inputs at their amplitudes."""
    hub, guarantee = small.hub, small.guarantee
    if hub is None or guarantee is None or not guarantee.holds or small.modes.origin.kind != "thermal":
        return None
    return step_error(hub, small.system, step.t) * small.modes.origin.amplitudes


def shape_data(modes: Modes) -> dict[str, Any] | None:
    """Node positions, lines between coupled nodes and the translations of every mode; None when labels are missing."""
    model = modes.model
    if not isinstance(model, Structure) or modes.vectors is None or np.iscomplexobj(modes.vectors):
        return None
    unknowns = model.unknowns
    if unknowns is None or unknowns.xyz is None or not unknowns.node or not unknowns.direction:
        return None
    names = list(dict.fromkeys(unknowns.node))
    if len(names) * 3 * len(modes) > SHAPE_LIMIT:
        return None
    rows = {name: k for k, name in enumerate(names)}
    node = np.array([rows[name] for name in unknowns.node])
    xyz = np.zeros((len(names), 3))
    xyz[node] = unknowns.xyz
    moves = np.zeros((len(modes), len(names), 3), dtype=np.float32)
    for axis in range(3):
        picked = _directions(unknowns, axis)
        moves[:, node[picked], axis] = modes.vectors[picked].T
    lines = np.unique(np.sort(node[np.stack(model.K.nonzero(), axis=1)], axis=1), axis=0)
    lines = lines[lines[:, 0] != lines[:, 1]]
    return {"xyz": packed(xyz), "moves": packed(moves), "lines": lines.tolist() if len(lines) < 20_000 else []}


def _directions(unknowns: Unknowns, axis: int) -> Any:
    spellings = {"xyz"[axis], "u" + "xyz"[axis], str(axis + 1)}
    return np.flatnonzero([d.lower() in spellings for d in unknowns.direction])
