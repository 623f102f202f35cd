"""The forms in which a small model is handed over, as plain arrays with their names, units and provenance."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, Literal, TypeAlias

import numpy as np
from scipy import signal

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import Interface
from modesieve.reduce.response.discrete import Hold, discretise, folded_poles
from modesieve.reduce.response.small import SecondOrderModal, SmallSystem
from modesieve.reduce.truncation.records import ReducedModel

FormName: TypeAlias = Literal["state-space", "second-order", "discrete"]


@dataclass(frozen=True, kw_only=True, eq=False)
class Form:
    """One hand-over form. arrays: by their usual letters; about: plain JSON values (channels, units, certificate)."""

    name: str
    arrays: dict[str, Real]
    about: dict[str, Any] = field(default_factory=dict)


def state_space_form(small: ReducedModel) -> Form:
    """Real block-diagonal modal form ``x' = A x + B u``, ``y = C x + D u``."""
    A, B, C, D = small.system.state_space()
    return Form(name="state-space", arrays={"A": A, "B": B, "C": C, "D": D}, about=about(small))


def second_order_form(small: ReducedModel) -> Form:
    """``q'' + D q' + K q = F u``, ``y = Cq q + Cv q' + Ca q'' + Du u`` with M = I and K diagonal.

    Raises ChoiceError for models of first order: their modes are not oscillators.
    """
    system = small.system
    if not isinstance(system, SecondOrderModal):
        raise ChoiceError(
            "this model has no second-order form",
            expected="a structure with proportional damping",
            got=f"a {small.modes.origin.kind} model in first-order blocks",
            remedy="export it as state-space",
        )
    damping = system.d + system.eta * np.sqrt(np.maximum(system.x, 0.0))
    arrays = {
        "M": np.eye(system.terms),
        "D": np.diag(damping),
        "K": np.diag(system.x),
        "F": system.b,
        "Cq": system.cq,
        "Cv": system.cv,
        "Ca": system.ca,
        "Du": system.D + system.X,
    }
    notes = ["the loss factor is given as a damping ratio of half its size"] if np.any(system.eta) else []
    return Form(name="second-order", arrays=arrays, about=about(small, notes))


def discrete_form(small: ReducedModel, dt: float, hold: Hold = "zero", delay: float = 0.0) -> Form:
    """``z[k+1] = A z[k] + B u[k]``, ``y[k] = C z[k] + D u[k]`` ; dt in s (see `response.discrete`)."""
    d = discretise(sampled(small), dt, hold=hold, delay=delay)
    extra = {"sample_time_s": dt, "hold": hold, "delay_s": delay, "states_of_the_model": d.states}
    return Form(
        name="discrete",
        arrays={"A": d.A, "B": d.B, "C": d.C, "D": d.D, "shift": d.shift},
        about=about(small, sampling_notes(small, dt)) | extra,
    )


def sampled(small: ReducedModel) -> SmallSystem:
    """The system that may be sampled: a structure's pseudo-modes are no motions and would fold into the band.

    They are replaced by their static answer as feedthrough; of velocity and acceleration outputs they have none.
    """
    system, kept = small.system, len({int(small.modes.term[n - 1]) for n in small.kept})
    if small.statics != "vectors" or not isinstance(system, SecondOrderModal) or system.terms == kept:
        return system
    tail = np.arange(kept, system.terms)
    static = (system.cq[:, tail] / system.x[tail]) @ system.b[tail]
    return replace(system.select(np.arange(kept)), X=system.X + static)


def sampling_notes(small: ReducedModel, dt: float) -> list[str]:
    """What sampling does to the poles, and what it does to the certainty of the error."""
    notes = []
    system = sampled(small)
    if system is not small.system:
        lost = system.terms
        notes.append(f"{small.system.terms - lost} pseudo-modes became feedthrough: as motions they would fold")
        if isinstance(system, SecondOrderModal) and (np.any(system.cv) or np.any(system.ca)):
            notes.append("velocity and acceleration outputs lose what their pseudo-modes added")
    for f in folded_poles(system, dt, small.band):
        where = ", in the band: choose a shorter sample time or filter the input" if f.in_band else ""
        notes.append(
            f"a pole at {f.hz:.4g} Hz is past the Nyquist frequency and appears at {f.appears_hz:.4g} Hz{where}"
        )
    if small.error is not None and small.error.certainty == "guaranteed":
        notes.append("the error was guaranteed in the band; it holds here only for inputs limited to that band")
    return notes


def to_scipy(form: Form) -> Any:
    """``scipy.signal.StateSpace`` of a state-space form, its discrete twin (with dt) of a discrete form."""
    if form.name == "second-order":
        raise ChoiceError("SciPy has no second-order systems", expected="state-space or discrete", got=form.name)
    parts = [form.arrays[letter] for letter in "ABCD"]
    return (
        signal.StateSpace(*parts, dt=form.about["sample_time_s"])
        if form.name == "discrete"
        else signal.StateSpace(*parts)
    )


def about(small: ReducedModel, notes: list[str] | None = None) -> dict[str, Any]:
    """Channels, units, provenance and certificate as plain values."""
    origin, certificate = small.modes.origin, small.modes.certificate
    return {
        "title": origin.title,
        "inputs": _channels(origin)[0],
        "outputs": _channels(origin)[1],
        "units": {k: v for k, v in vars(origin.units).items() if v},
        "full_model": {
            "kind": origin.kind,
            "unknowns": origin.n,
            "sha256": origin.fingerprint,
            "damping": origin.damping,
        },
        "kept_modes": list(small.kept),
        "statics": small.statics,
        "band_hz": None if small.band is None else [w / (2 * np.pi) for w in small.band],
        "error": _error(small),
        "certificate": {k: v for k, v in vars(certificate).items() if v not in (None, "")},
        "notes": [*small.notes, *(notes or [])],
    }


def _channels(interface: Interface) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
    inputs = [{"name": c.name, "unit": c.unit, "amplitude": c.amplitude} for c in interface.inputs]
    outputs = [{"name": c.name, "unit": c.unit, "resolution": c.resolution} for c in interface.outputs]
    return inputs, outputs


def _error(small: ReducedModel) -> dict[str, Any] | None:
    e = small.error
    if e is None:
        return None
    hz = None if e.at_omega is None else e.at_omega / (2 * np.pi)
    return {"value": e.value, "unit": e.unit, "certainty": e.certainty, "relative_to": e.relative_to, "at_hz": hz}
