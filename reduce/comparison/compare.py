"""Stage 3: small models held against the full one, in frequency and in time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.comparison.checks import DcGain, check_of, dc_gain, labels_of
from modesieve.reduce.comparison.records import Check, Comparison, Sweep
from modesieve.reduce.comparison.sweep import sweep_of
from modesieve.reduce.comparison.times import time_responses
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.model import Model
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.deviation import Yardstick, joined, picked
from modesieve.reduce.response.grid import checked_band, frequency_grid, has_integrators
from modesieve.reduce.response.records import Certainty, FullResponse
from modesieve.reduce.truncation.gauge import (
    Solver,
    default_band,
    full_solver,
    grid_for,
    is_modal,
    worse_between,
    yardstick_for,
)
from modesieve.reduce.truncation.records import ReducedModel

#: A full solution with a larger backward error proves nothing: its errors are called estimated.
_TRUSTED = 1e-10


@dataclass(frozen=True, kw_only=True, eq=False)
class _Setting:
    """What the comparison is made with. modes hold ``model``; solve is the full model as a function of omega."""

    model: Model
    modes: Modes
    band: tuple[float, float]
    solve: Solver
    notes: tuple[str, ...]


def compare(
    model: Model,
    smalls: Sequence[ReducedModel],
    *,
    modes: Modes | None = None,
    band: tuple[float, float] | None = None,
    omega: Real | None = None,
    full: FullResponse | None = None,
    times: bool = True,
    sweep: bool = True,
    progress: Listener = None,
) -> Comparison:
    """Hold ``smalls`` against ``model``: response errors, time responses, error over the number of kept modes.

    modes: computed modes of the model; by default those of the small model that counts furthest. band (rad/s): by
    default the widest of the small models'. omega: frequencies to solve at instead of a grid refined around the
    resonances and the estimated worst points. full: a response that is already there. times, sweep: whether to make
    the step and impulse responses and the sweep. Small models may come from files.

    With modal damping the full model is defined by its counted modes: those with the highest counting point are used,
    and a small model with other ones is named in the warnings.

    Raises ChoiceError where the small models do not have the model's channels, or the band or frequencies are none.
    """
    smalls = tuple(smalls)
    _same_channels(model, smalls)
    _ported(model)
    setting = _setting(model, smalls, modes, band, omega, progress)
    tell(progress, "compare", message="full response")
    full, notes = _full(setting, smalls, omega, full)
    yard = yardstick_for(setting.modes, full, setting.band)
    certainty, doubt = _certainty(full)
    gain = dc_gain(setting.modes, setting.solve, full)
    checks = _checks(yard, smalls, certainty, gain)
    step, impulse = time_responses(setting.modes, smalls, setting.band) if times else (None, None)
    return Comparison(
        model=model,
        modes=setting.modes,
        full=full,
        checks=checks,
        band=setting.band,
        threshold=yard.threshold,
        threshold_note=yard.threshold_note,
        reference_peak=yard.peak,
        sweep=_sweep(setting, yard, smalls, certainty) if sweep else None,
        step=step,
        impulse=impulse,
        warnings=(*setting.notes, *notes, *doubt, *((yard.refusal,) if yard.refusal else ())),
    )


def _checks(yard: Yardstick, smalls: tuple[ReducedModel, ...], certainty: Certainty, gain: DcGain) -> tuple[Check, ...]:
    return tuple(
        check_of(yard, small, label, certainty, gain) for small, label in zip(smalls, labels_of(smalls), strict=True)
    )


def _sweep(setting: _Setting, yard: Yardstick, smalls: tuple[ReducedModel, ...], certainty: Certainty) -> Sweep | None:
    if yard.refusal or 0 in (yard.channels.m, yard.channels.p) or len(setting.modes) == 0:
        return None
    ranking = _ranking(setting, smalls)
    return None if ranking is None else sweep_of(setting.modes, ranking, yard, certainty)


def _ranking(setting: _Setting, smalls: tuple[ReducedModel, ...]) -> Ranking | None:
    """The order of the first small model, or another one where this list of modes has no such measure."""
    from modesieve.reduce.modal.rank import MEASURES, rank

    asked = [small.ranked_by for small in smalls if small.ranked_by in MEASURES]
    for by in (*asked[:1], "band-share", "coupling"):
        try:
            return rank(setting.modes, by=by, band=setting.band)
        except ChoiceError:
            continue
    return None


# ---- what is compared ----------------------------------------------------------------------------------------------


def _same_channels(model: Model, smalls: tuple[ReducedModel, ...]) -> None:
    for small in smalls:
        if (small.system.p, small.system.m) != (model.p, model.m):
            raise ChoiceError(
                "a small model does not have the full model's channels",
                expected=f"{model.m} inputs and {model.p} outputs",
                got=f"{small.system.m} inputs and {small.system.p} outputs",
                where=small.modes.origin.source,
                remedy="compare it with the model that it was cut from",
            )


def _ported(model: Model) -> None:
    if 0 in (model.p, model.m):
        raise ChoiceError(
            "the model has no response to compare",
            expected="at least one input and one output",
            got=f"{model.m} inputs and {model.p} outputs",
            where=model.source,
            remedy="give the model loads and outputs",
        )


def _setting(
    model: Model,
    smalls: tuple[ReducedModel, ...],
    modes: Modes | None,
    band: tuple[float, float] | None,
    omega: Real | None,
    progress: Listener,
) -> _Setting:
    mark = fingerprint(model)
    _own(modes, mark, model)
    candidates = [m for m in (modes, *(small.modes for small in smalls)) if m is not None]
    chosen = _furthest(model, [m for m in candidates if m.origin.fingerprint == mark], modes)
    around = _band(smalls, band, omega, chosen)
    if chosen is None:
        if around is None:
            raise ChoiceError("nothing says where to compare", expected="a band, modes or small models", got="none")
        from modesieve.reduce.modal.find import find_modes

        chosen = find_modes(model, around, progress=progress)
    elif is_modal(model) and chosen.vectors is None:
        chosen = _again(model, chosen, progress)
    chosen = chosen if chosen.model is not None else replace(chosen, model=model)
    around = around or default_band(chosen)
    if around is None:
        raise ChoiceError("nothing says where to compare", expected="a band", got="none", remedy="give one")
    notes = (*_strangers(mark, smalls), *_other_counts(model, smalls, chosen))
    return _Setting(model=model, modes=chosen, band=around, solve=full_solver(model, chosen, progress), notes=notes)


def _furthest(model: Model, candidates: list[Modes], given: Modes | None) -> Modes | None:
    """With modal damping the highest counting point wins; else the given modes, else the furthest counted."""
    if not candidates:
        return None
    if given is not None and not is_modal(model):
        return given
    return max(candidates, key=lambda m: (counted_to(m), m.vectors is not None))


def counted_to(modes: Modes) -> float:
    """Counting point in rad/s (1/s): inf when all modes are known, 0 when nothing is proven."""
    certificate = modes.certificate
    return np.inf if certificate.complete == "all" else certificate.below_omega or 0.0


def _again(model: Model, modes: Modes, progress: Listener) -> Modes:
    from modesieve.reduce.modal.find import find_modes

    tell(progress, "compare", message="modes again: modal damping needs their vectors")
    return find_modes(model, count=len(modes), progress=progress)


def _band(
    smalls: tuple[ReducedModel, ...], band: tuple[float, float] | None, omega: Real | None, modes: Modes | None
) -> tuple[float, float] | None:
    if band is not None:
        return checked_band(band)
    if omega is not None:
        omega = _checked_omega(omega)
        return float(omega[0]), float(omega[-1])
    bands = [small.band for small in smalls if small.band is not None]
    if bands:
        return min(low for low, _ in bands), max(high for _, high in bands)
    return None if modes is None else default_band(modes)


def _own(modes: Modes | None, mark: str, model: Model) -> None:
    if modes is not None and modes.origin.fingerprint != mark:
        raise ChoiceError(
            "these are the modes of another model",
            expected=f"modes of {model.title or 'the model'} (fingerprint {mark[:12]})",
            got=f"fingerprint {modes.origin.fingerprint[:12]}",
            where=modes.origin.source,
            remedy="compute the modes again, or leave them out",
        )


def _strangers(mark: str, smalls: tuple[ReducedModel, ...]) -> list[str]:
    other = [i + 1 for i, small in enumerate(smalls) if small.modes.origin.fingerprint != mark]
    return [
        f"small model {i} was cut from another full model (other fingerprint): its error includes the difference"
        for i in other
    ]


def _other_counts(model: Model, smalls: tuple[ReducedModel, ...], modes: Modes) -> list[str]:
    """Modal damping: what a small model took for the full one may not be what it is compared with."""
    if not is_modal(model):
        return []
    notes = []
    for i, small in enumerate(smalls):
        theirs, ours = counted_to(small.modes), counted_to(modes)
        if theirs != ours and len(small.modes) != len(modes):
            notes.append(
                f"modal damping acts on the {len(modes)} modes {_to(ours)} here; small model {i + 1} was made for"
                f" {len(small.modes)} modes {_to(theirs)}, so its errors are measured anew"
            )
    return notes


def _to(omega: float) -> str:
    return "of the whole model" if np.isinf(omega) else f"counted to {omega / (2 * np.pi):.4g} Hz"


# ---- the full response ---------------------------------------------------------------------------------------------


def _full(
    setting: _Setting, smalls: tuple[ReducedModel, ...], omega: Real | None, full: FullResponse | None
) -> tuple[FullResponse, list[str]]:
    if full is not None:
        return _finite(full, setting)
    if omega is not None:
        wanted, notes = _without_zero(_checked_omega(omega), setting.modes)
        full = _solved(setting, wanted, ())
        lost = len(wanted) - len(full.omega)
        singular = [f"{lost} frequencies left out: the full model is singular there"] if lost else []
        return full, [*notes, *singular]
    wanted = _grid(setting, smalls)
    notes = [_ZERO] if setting.band[0] == 0 and has_integrators(setting.modes) else []
    full = _solved(setting, wanted, smalls)
    yard = yardstick_for(setting.modes, full, setting.band)
    if yard.refusal:
        return full, notes
    extra = [worse_between(setting.modes, yard, small.system, "local", most=8) for small in smalls]
    more = np.setdiff1d(np.concatenate([np.zeros(0), *extra]), full.omega)
    return (joined([full, setting.solve(more)]) if more.size else full), notes


_ZERO = "frequency 0 left out: rigid-body or integrating modes make the response infinite there"


def _grid(setting: _Setting, smalls: tuple[ReducedModel, ...]) -> Real:
    """The modes' own grid, the frequencies of the small models' errors, and points around their other poles."""
    parts = [grid_for(setting.modes, setting.band)]
    for small in smalls:
        if small.samples is not None:
            parts.append(small.samples.omega)
        if small.statics == "vectors":
            parts.append(frequency_grid(_Poles(small), setting.band, base=2))
    omega = np.unique(np.concatenate(parts))
    omega = omega[(omega >= setting.band[0]) & (omega <= setting.band[1])]
    return _without_zero(omega, setting.modes)[0]


class _Poles:
    """A small model's own poles, for a grid."""

    def __init__(self, small: ReducedModel) -> None:
        poles = small.system.poles
        self.eigenvalue = poles[poles.imag >= 0]
        self.always_kept = ("",) * len(self.eigenvalue)


def _solved(setting: _Setting, omega: Real, smalls: tuple[ReducedModel, ...]) -> FullResponse:
    """The full response at ``omega``; samples of a small model of the same run are not solved twice."""
    known = [
        s.samples for s in smalls if s.samples is not None and s.modes is setting.modes and s.modes.vectors is not None
    ]
    if not known:
        return _some(setting.solve(omega))
    had = joined(known)
    had = picked(had, np.isin(had.omega, omega))
    rest = np.setdiff1d(omega, had.omega)
    return joined([had, setting.solve(rest)]) if rest.size else had


def _some(full: FullResponse) -> FullResponse:
    if len(full.omega) == 0:
        raise ChoiceError(
            "the full model has no finite response at any of the frequencies",
            expected="a regular dynamic stiffness",
            got="singular ones, as at an undamped mode",
            remedy="give the model damping, or other frequencies",
        )
    return full


def _finite(full: FullResponse, setting: _Setting) -> tuple[FullResponse, list[str]]:
    good = np.isfinite(full.G).all(axis=(1, 2))
    if has_integrators(setting.modes):
        good &= full.omega != 0
    _some(picked(full, good))
    return (full, []) if good.all() else (picked(full, good), [_ZERO])


def _without_zero(omega: Real, modes: Modes) -> tuple[Real, list[str]]:
    if not has_integrators(modes) or omega[0] > 0:
        return omega, []
    return omega[omega > 0], [_ZERO]


def _checked_omega(omega: Real) -> Real:
    omega = np.asarray(omega, dtype=float)
    if (
        omega.ndim != 1
        or omega.size == 0
        or not np.isfinite(omega).all()
        or omega[0] < 0
        or np.any(np.diff(omega) <= 0)
    ):
        raise ChoiceError(
            "the frequencies make no grid", expected="finite, ascending, from 0 rad/s up", got=f"{omega.size} values"
        )
    return omega


def _certainty(full: FullResponse) -> tuple[Certainty, list[str]]:
    worst = float(np.max(full.backward_error, initial=0.0))
    if worst <= _TRUSTED:
        return "measured", []
    return "estimated", [f"the full solution's backward error reaches {worst:.1e}: its errors are only estimated"]
