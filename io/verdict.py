"""The verdict of a comparison: one sentence with its numbers and certainties, and the cautions that apply."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from modesieve.io.wording import format_frequency, format_number, format_quantity, format_ratio
from modesieve.reduce.comparison.records import Check, Comparison, TimeResponse
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Structure
from modesieve.reduce.response.records import ErrorFigure
from modesieve.reduce.truncation.guarantee import Guarantee
from modesieve.reduce.truncation.records import ReducedModel, Tolerance

#: Where people can be hurt a model is not the last word.
HARM = {
    "structure": "where a failure can hurt people, local codes and licensed practice decide, not this model",
    "thermal": "where heat can hurt people or start a fire, local codes and licensed practice decide, not this model",
    "state space": "where a machine can hurt people, local codes and licensed practice decide, not this model",
}


@dataclass(frozen=True, kw_only=True)
class Line:
    """One output, all inputs at their amplitudes: the full model's largest response and the worst error over the band.

    step: the worst error in time after switching all inputs on at once.
    """

    output: str
    response: str
    error: str
    certainty: str
    step: str = ""
    step_certainty: str = ""


@dataclass(frozen=True, kw_only=True)
class Verdict:
    """headline: the one number; sentence: what was kept and how wrong it is; outputs: per output in its unit."""

    headline: str
    sentence: str
    outputs: tuple[Line, ...]
    cautions: tuple[str, ...]


def verdict_of(comparison: Comparison, check: Check) -> Verdict:
    """The verdict on one small model."""
    figure = leading(comparison, check)
    kept = kept_words(check.small)
    sentence = f"{kept}. {error_words(figure, comparison)}"
    return Verdict(
        headline=figure.size if figure.defined else "undefined",
        sentence=sentence,
        outputs=_lines(comparison, check),
        cautions=tuple(cautions(comparison, check)),
    )


def leading(comparison: Comparison, check: Check) -> ErrorFigure:
    """The error that the choice asked for: of local unless a tolerance said peak or a size with a unit.

    Guaranteed where the small model carries a guarantee, else as the comparison has it.
    """
    choice, source = check.small.choice, proof(comparison, check.small)
    of = choice.of if isinstance(choice, Tolerance) else "local"
    if of == "absolute" and check.absolute:
        figures = (source.absolute if source is not None else ()) or check.absolute
        fitting = [figure for figure in figures if figure.unit == choice.unit] or list(figures)
        return max(fitting, key=lambda figure: figure.value)
    measured = check.peak_error if of == "peak" else check.local_error
    proved = None if source is None else source.peak if of == "peak" else source.local
    return measured if proved is None else proved


def proof(comparison: Comparison, small: ReducedModel) -> Guarantee | None:
    """The guarantee of ``small`` where it holds for this comparison: same full model, and its band covers this one."""
    guarantee = small.guarantee
    if guarantee is None or not guarantee.holds or not _same_full_model(comparison.modes, small.modes):
        return None
    low, high = guarantee.band
    inside = low <= comparison.band[0] * (1 + 1e-12) and comparison.band[1] <= high * (1 + 1e-12)
    return guarantee if inside else None


def _same_full_model(ours: Modes, theirs: Modes) -> bool:
    # With modal damping the counted modes are part of what the full model is.
    if ours.origin.fingerprint != theirs.origin.fingerprint:
        return False
    modal = isinstance(ours.model, Structure) and ours.model.damping.is_modal
    return not modal or len(ours) == len(theirs)


def kept_words(small: ReducedModel) -> str:
    """How much was kept, of how much."""
    origin, kept = small.modes.origin, len(small.kept)
    noun = "states" if origin.kind == "state space" else "unknowns"
    size = f"{small.states} state{'s' * (small.states != 1)} in place of {origin.n} {noun}"
    if not kept:
        return f"The small model has {size}"
    return f"{kept} of {len(small.modes)} computed modes {'are' if kept != 1 else 'is'} kept: {size}"


def error_words(figure: ErrorFigure, comparison: Comparison) -> str:
    """The worst error with its reference, certainty and range."""
    low, high = (band_end(w, comparison.modes.origin.kind) for w in comparison.band)
    ends = f"from {low} to {high}"
    if not figure.defined:
        return f"The relative error {ends} is undefined: {figure.note}."
    of = "" if figure.relative_to == "absolute" else f" of {_REFERENCES[figure.relative_to]}"
    size, place = figure_size(figure) + of, _place(figure, comparison.modes.origin.kind)
    match figure.certainty:
        case "guaranteed":
            return f"Its error is at most {size} at every frequency {ends}, guaranteed{place}."
        case "measured":
            count = comparison.frequency_count
            return f"Its largest error at {count} frequencies {ends} is {size}, measured against the full model{place}."
    return f"Its error {ends} is about {size}, only estimated{place}."


def _place(figure: ErrorFigure, kind: str) -> str:
    """Where the worst error is."""
    pair = f" for {figure.pair[0]} to {figure.pair[1]}" if figure.pair and figure.pair[0] else ""
    at = f" at {band_end(figure.at_omega, kind)}" if figure.at_omega is not None else ""
    return f"; worst{pair}{at}" if pair or at else ""


_REFERENCES = {"peak": "the band's peak", "local": "the response at the same frequency"}


def figure_size(figure: ErrorFigure) -> str:
    """The value in words."""
    if figure.relative_to == "absolute":
        return format_quantity(figure.value, figure.unit)
    return format_ratio(figure.value)


def band_end(omega: float, kind: str) -> str:
    """A frequency; for thermal models the time constant that belongs to it.

    >>> band_end(0.2, "thermal"), band_end(0.0, "thermal"), band_end(1256.637, "structure")
    ('5 s', 'steady state', '200 Hz')
    """
    if kind != "thermal":
        return format_frequency(omega)
    return "steady state" if omega == 0 else format_quantity(1 / omega, "s")


# ---- per output ------------------------------------------------------------------------------------------------------


def _lines(comparison: Comparison, check: Check) -> tuple[Line, ...]:
    index = next((i for i, one in enumerate(comparison.checks) if one is check), 0)
    steps = step_errors(comparison.step, index) if _steps_tell(comparison, check) else None
    peaks = (np.abs(comparison.full.G) * comparison.modes.origin.amplitudes).sum(axis=2).max(axis=0, initial=0.0)
    outputs, source = comparison.modes.origin.outputs, proof(comparison, check.small)
    figures = source.absolute if source is not None and source.absolute else check.absolute
    return tuple(
        Line(
            output=output.name,
            response=format_quantity(float(peaks[k]), output.unit),
            error=format_quantity(figure.value, figure.unit) if figure.defined else "undefined",
            certainty=figure.certainty,
            step="" if steps is None else format_quantity(float(steps[k]), output.unit),
            step_certainty="" if steps is None or comparison.step is None else comparison.step.certainty,
        )
        for k, (output, figure) in enumerate(zip(outputs, figures, strict=True))
    )


def _steps_tell(comparison: Comparison, check: Check) -> bool:
    # Where not all modes are known, the full curve in time holds the rest by its statics alone: a small model with tail
    # levels is closer to the truth than that, and their difference says nothing about it.
    step = comparison.step
    return step is not None and (step.certainty != "estimated" or check.small.statics != "vectors")


def step_errors(step: TimeResponse | None, index: int) -> np.ndarray[tuple[int], np.dtype[np.float64]] | None:
    """Largest error in time per output (p,), every input switched on at its amplitude at once."""
    if step is None:
        return None
    error = (step.full - step.small[index]).sum(axis=2)
    return np.asarray(np.abs(error).max(axis=0, initial=0.0))


# ---- cautions --------------------------------------------------------------------------------------------------------


def cautions(comparison: Comparison, check: Check) -> list[str]:
    """What a reader must know before using the small model."""
    figure, small, modes = leading(comparison, check), check.small, comparison.modes
    out = [
        *_estimate_only(figure),
        *_certificate(modes),
        *_reach(modes, comparison.band),
        *_no_proof(comparison, small),
        *_missed(figure, small),
    ]
    out += [*_local(check, figure), *_phase(check)]
    out += [f"{text}" for text in (*modes.warnings, *comparison.warnings)]
    out += [note for note in small.notes if "pseudo-modes lie inside" in note]
    out += ["held against the full model only, not against hardware: errors of the full model itself come on top"]
    return [*dict.fromkeys(out), HARM[modes.origin.kind]]


def _estimate_only(figure: ErrorFigure) -> list[str]:
    if figure.certainty != "estimated":
        return []
    return ["the error is only estimated: nothing bounds it, and it was not measured against the full model"]


def _missed(figure: ErrorFigure, small: ReducedModel) -> list[str]:
    """The tolerance was met by the measured error, which the leading figure may exceed."""
    choice = small.choice
    if not isinstance(choice, Tolerance) or figure.relative_to != choice.of or not figure.value > choice.value:
        return []
    asked = replace(figure, value=choice.value)
    return [
        f"the {figure.certainty} error of {figure_size(figure)} lies above the tolerance of {figure_size(asked)}: "
        "ask for a tighter one, or keep more modes"
    ]


def _no_proof(comparison: Comparison, small: ReducedModel) -> list[str]:
    guarantee, kind = small.guarantee, comparison.modes.origin.kind
    if guarantee is None or proof(comparison, small) is not None:
        return []
    if not guarantee.holds:
        return [f"nothing is guaranteed: {guarantee.reason}"]
    if not _same_full_model(comparison.modes, small.modes):
        return ["the small model's guarantee is for another full model, and is left aside here"]
    low, high = (band_end(w, kind) for w in guarantee.band)
    return [f"the small model's guarantee covers {low} to {high} only, and is left aside here"]


def _certificate(modes: Modes) -> list[str]:
    if modes.certificate.complete != "no":
        return []
    reason = f" ({modes.certificate.reason})" if modes.certificate.reason else ""
    return [f"the list of modes is not proven complete{reason}: a mode may be missing"]


def _reach(modes: Modes, band: tuple[float, float]) -> list[str]:
    below = modes.certificate.below_omega
    if modes.certificate.complete != "counted" or below is None or band[1] <= below:
        return []
    kind = modes.origin.kind
    return [f"the band reaches to {band_end(band[1], kind)}, the counted modes only to {band_end(below, kind)}"]


def _local(check: Check, figure: ErrorFigure) -> list[str]:
    local = check.local_error
    if figure.relative_to == "local" or not local.defined or local.value <= max(0.1, 3 * _ratio(figure)):
        return []
    return [
        f"relative to the response at the same frequency the error reaches {format_ratio(local.value)} "
        f"({local.certainty}): use the small model where the response is large, not in its valleys"
    ]


def _ratio(figure: ErrorFigure) -> float:
    return figure.value if figure.relative_to != "absolute" and figure.defined else 0.0


def _phase(check: Check) -> list[str]:
    worst = check.worst_phase
    if math.isnan(worst) or worst < math.radians(30):
        return []
    return [f"the phase is off by up to {format_number(math.degrees(worst))} degrees ({check.certainty})"]
