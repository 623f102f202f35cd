"""JSON for scripts: keys that hold a quantity end in its unit; null stands with its reason beside it."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from modesieve.reduce.comparison.records import Check, Comparison
from modesieve.reduce.inspection import Facts
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.response.records import ErrorFigure
from modesieve.reduce.truncation.records import ReducedModel, describe_choice

if TYPE_CHECKING:
    from modesieve.io.run import Result

Object = dict[str, Any]


def dumps(content: Object) -> str:
    """One JSON object as text; refuses nan and infinity, which JSON does not have."""
    return json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def held(key: str, value: float | None, reason: str) -> Object:
    """``{key: value}``, or null with ``key_reason`` where there is no finite value.

    >>> held("time_constant_s", float("inf"), "undamped")
    {'time_constant_s': None, 'time_constant_s_reason': 'undamped'}
    """
    if value is None or not math.isfinite(value):
        return {key: None, f"{key}_reason": reason}
    return {key: float(value)}


def _hz(omega: float | None) -> float | None:
    return None if omega is None else float(omega) / (2 * math.pi)


# ---- modes -----------------------------------------------------------------------------------------------------------


def modes_object(ranking: Ranking) -> Object:
    """What ``modesieve modes --json`` prints: the table in the order of its ranking."""
    modes = ranking.modes
    certificate = modes.certificate
    why = "every mode is known" if certificate.complete == "all" else certificate.reason or "not counted"
    return {
        "count": len(modes),
        "complete": certificate.complete,
        **held("complete_below_hz", _hz(certificate.below_omega), why),
        "kind": modes.origin.kind,
        "unknowns": modes.origin.n,
        "model": modes.origin.fingerprint,
        "ranked_by": ranking.by,
        "solver": modes.solver,
        "notes": [*modes.warnings, *ranking.warnings],
        "modes": [mode_object(ranking, int(number)) for number in ranking.order],
    }


def mode_object(ranking: Ranking, number: int) -> Object:
    """One mode with every measure."""
    modes, i = ranking.modes, number - 1
    value = complex(modes.eigenvalue[i])
    measures: Object = {}
    reasons: Object = {}
    for name, values in ranking.measures.items():
        found = float(values[i])
        measures[name] = found if math.isfinite(found) else None
        if not math.isfinite(found):
            infinite = "infinite" if math.isinf(found) else "undefined"
            reasons[name] = ranking.undefined.get(name) or infinite
    return {
        "number": number,
        "frequency_hz": float(modes.frequency_hz[i]),
        **held("time_constant_s", float(modes.time_constant[i]), "does not decay"),
        "decay_rate_per_s": float(modes.decay_rate[i]),
        **held("damping_ratio", float(modes.damping_ratio[i]), "the eigenvalue is zero"),
        **held("residual", float(modes.residual[i]), "not known"),
        **held("condition", float(modes.condition[i]), "not known"),
        "eigenvalue_per_s": [value.real, value.imag],
        "cluster": list(modes.cluster[i]),
        "always_kept": modes.always_kept[i],
        "measures": measures,
        **({"measures_reason": reasons} if reasons else {}),
    }


# ---- errors and small models -----------------------------------------------------------------------------------------


def figure_object(figure: ErrorFigure) -> Object:
    """An error with its certainty, reference and place."""
    return {
        **held("value", figure.value, figure.note or "not finite"),
        "unit": figure.unit,
        "certainty": figure.certainty,
        "relative_to": figure.relative_to,
        "pair": None if figure.pair is None else list(figure.pair),
        **({} if figure.pair is not None else {"pair_reason": "no single pair"}),
        **held("at_hz", _hz(figure.at_omega), "no single frequency"),
        **({} if figure.threshold is None else {"threshold": figure.threshold}),
    }


def reduced_object(small: ReducedModel) -> Object:
    """What ``modesieve truncate --json`` prints."""
    why = "; ".join(small.notes) or "not measured"
    return {
        "kept_count": len(small.kept),
        "states": small.states,
        "kept": list(small.kept),
        "computed_count": len(small.modes),
        "unknowns": small.modes.origin.n,
        "statics": small.statics,
        "choice": describe_choice(small.choice),
        "ranked_by": small.ranked_by,
        **_band(small.band),
        "error": None if small.error is None else figure_object(small.error),
        **({} if small.error is not None else {"error_reason": why}),
        **_guarantee(small),
        "model": small.modes.origin.fingerprint,
        "notes": list(small.notes),
    }


def _guarantee(small: ReducedModel) -> Object:
    """What is guaranteed, or why nothing is."""
    found = small.guarantee
    if found is None or not found.holds:
        return {"guarantee": None, "guarantee_reason": "not asked for" if found is None else found.reason}
    figures = {"peak": found.peak, "local": found.local}
    return {
        "guarantee": {
            **{name: figure_object(figure) for name, figure in figures.items() if figure is not None},
            "absolute": [_of_output(figure) for figure in found.absolute],
            "formula": found.formula,
            "spot_check_hz": [_hz(spot.omega) for spot in found.spot_checks],
        }
    }


def _band(band: tuple[float, float] | None) -> Object:
    if band is None:
        return {"band_hz": None, "band_hz_reason": "none given"}
    return {"band_hz": [_hz(band[0]), _hz(band[1])]}


# ---- comparison ------------------------------------------------------------------------------------------------------


def comparison_object(comparison: Comparison, files: tuple[Path | str, ...]) -> Object:
    """What ``modesieve compare --json`` prints; files: of the small models, in order."""
    return {
        "frequency_count": comparison.frequency_count,
        **_band(comparison.band),
        **held("worst_backward_error", comparison.worst_backward_error, "not known"),
        **held("worst_residual_of_full", comparison.worst_residual_of_full, "not known"),
        "threshold": comparison.threshold,
        "threshold_note": comparison.threshold_note,
        "models": [check_object(c, f) for c, f in zip(comparison.checks, files, strict=True)],
        "notes": list(comparison.warnings),
    }


def check_object(check: Check, file: Path | str) -> Object:
    """One small model against the full one."""
    return {
        "file": str(file),
        "states": check.small.states,
        "kept_count": len(check.small.kept),
        "max_relative_error": _relative(check),
        "peak": figure_object(check.peak_error),
        "local": figure_object(check.local_error),
        "absolute_error": [_of_output(figure) for figure in check.absolute],
        "certainty": check.certainty,
        **held("worst_phase_error_rad", check.worst_phase, "the full response is nowhere above the threshold"),
        "dc_error": check.dc_error,
        **({} if check.dc_error is not None else {"dc_reason": check.dc_reason}),
    }


def _relative(check: Check) -> Object:
    return held("peak", check.peak_error.value, check.peak_error.note or "not finite") | held(
        "local", check.local_error.value, check.local_error.note or "not finite"
    )


def _of_output(figure: ErrorFigure) -> Object:
    output = figure.pair[1] if figure.pair is not None else ""
    largest = figure.pair[0] if figure.pair is not None else ""
    return {
        "output": output,
        **held("value", figure.value, figure.note or "not finite"),
        "unit": figure.unit,
        "certainty": figure.certainty,
        "largest_input": largest,
        **held("at_hz", _hz(figure.at_omega), "no single frequency"),
    }


def run_object(result: Result) -> Object:
    """The summary of a run: verdict, modes, small model, comparison."""
    verdict = result.verdict
    return {
        "format": "modesieve summary",
        "version": 1,
        "title": result.modes.origin.title,
        "verdict": verdict.sentence,
        "cautions": list(verdict.cautions),
        "reduced": reduced_object(result.reduced),
        "comparison": comparison_object(result.comparison, ("small.h5",)),
        "modes": modes_object(result.ranking),
    }


# ---- inspection ------------------------------------------------------------------------------------------------------


def facts_object(facts: Facts) -> Object:
    """What ``modesieve inspect --json`` prints of a full model."""
    units = {name: text for name, text in vars(facts.units).items() if text}
    mass_unit = facts.units.mass or ("mass unit of the matrices" if facts.total_mass is not None else "")
    return {
        "holds": "model",
        "kind": facts.kind,
        "title": facts.title,
        "unknowns": facts.n,
        "inputs": facts.inputs,
        "outputs": facts.outputs,
        "damping": facts.damping,
        "units": units,
        "nonzeros": dict(facts.nonzeros),
        "asymmetry": {name: float(value) for name, value in facts.asymmetry.items()},
        "definiteness": dict(facts.definiteness),
        "massless_unknowns": facts.massless,
        "parts": list(facts.parts),
        "zero_rows": list(facts.zero_rows),
        "total_mass": None if facts.total_mass is None else _directions(facts.total_mass, mass_unit),
        **({} if facts.total_mass is not None else {"total_mass_reason": "directions of the unknowns are not known"}),
        "problems": list(facts.problems),
        "next_steps": list(facts.next_steps),
    }


def _directions(values: Any, unit: str) -> Object:
    return {axis: float(v) for axis, v in zip("xyz", np.asarray(values), strict=True)} | {"unit": unit}


def modes_file_object(modes: Modes) -> Object:
    """What ``modesieve inspect --json`` prints of a modes file."""
    certificate = modes.certificate
    return {
        "holds": "modes",
        "kind": modes.origin.kind,
        "title": modes.origin.title,
        "unknowns": modes.origin.n,
        "count": len(modes),
        "complete": certificate.complete,
        **held("complete_below_hz", _hz(certificate.below_omega), certificate.reason or "every mode is known"),
        **held("worst_residual", float(np.max(modes.residual, initial=0.0)), "not known"),
        "model": modes.origin.fingerprint,
        "notes": list(modes.warnings),
    }


def reduced_file_object(small: ReducedModel) -> Object:
    """What ``modesieve inspect --json`` prints of a reduced model's file."""
    return {"holds": "reduced model", "title": small.modes.origin.title, **reduced_object(small)}
