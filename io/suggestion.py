"""Settings that suit a model: a band from its lowest modes, a tolerance that its small models can meet."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from modesieve.io.settings import Settings
from modesieve.reduce.arrays import Real
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.comparison.records import Check
from modesieve.reduce.errors import ChoiceError, ModesieveError
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.modal.request import ALL_LIMIT
from modesieve.reduce.model import Model
from modesieve.reduce.progress import Listener
from modesieve.reduce.report import share
from modesieve.reduce.response.records import FullResponse
from modesieve.reduce.truncation.records import Band, Keep, ReducedModel, Statics, Tolerance
from modesieve.reduce.truncation.truncate import truncate

#: Modes that a suggested band holds, about.
_INSIDE = 10
#: Frequencies at which the best small model is tried.
_TRIES = 12
#: Resonances among them.
_PEAKS = 3
#: A tolerance is suggested if the best small model is so many times better at the frequencies tried.
_RESERVE = 4.0
_LADDER = ((0.02, "local"), (0.05, "local"), (0.1, "local"), (0.02, "peak"), (0.05, "peak"), (0.1, "peak"))


@dataclass(frozen=True, kw_only=True)
class Suggestion:
    """Settings, and why they are what they are."""

    settings: Settings
    notes: tuple[str, ...]


def suggest(model: Model, progress: Listener = None) -> Suggestion:
    """A band that holds about ten modes, and the tightest usual tolerance that all computed modes meet with reserve.

    Raises ChoiceError for a model without inputs or outputs, ModelError for one that cannot be used.
    """
    if 0 in (model.m, model.p):
        raise ChoiceError(
            "a brief needs a model with inputs and outputs",
            expected="at least one of each",
            got=f"{model.m} inputs and {model.p} outputs",
            where=model.source,
            remedy="add load and output matrices to the model file; `modesieve modes` works without them",
        )
    lowest = find_modes(model, count=None if model.n <= ALL_LIMIT else 2 * _INSIDE, progress=progress)
    band = suggested_band(lowest)
    return _settings(model, band, progress)


# ---- the band --------------------------------------------------------------------------------------------------------


def suggested_band(modes: Modes) -> tuple[float, float]:
    """From 0 (thermal: half the slowest decay rate) to a round value in a gap above about ten moving modes."""
    omega = moving(modes)
    if omega.size == 0:
        raise ChoiceError(
            "the model has no mode that moves or decays",
            expected="at least one eigenvalue that is not zero",
            got=f"{len(modes)} rigid-body or integrating modes",
            where=modes.origin.source,
        )
    thermal = modes.origin.kind == "thermal"
    low, high = _gap(omega)
    if thermal:
        return 1 / round_between(1 / omega[0] * 1.5, 1 / omega[0] * 3), 1 / round_between(1 / high, 1 / low)
    return 0.0, 2 * math.pi * round_between(low / (2 * math.pi), high / (2 * math.pi))


def moving(modes: Modes) -> Real:
    """``abs(lambda)`` of the modes that are not rigid-body or integrating ones, ascending."""
    still = np.array([reason in ("rigid body", "integrating") for reason in modes.always_kept], dtype=bool)
    return np.sort(modes.omega[~still])


def _gap(omega: Real) -> tuple[float, float]:
    """Two neighbours, the widest gap among those around the tenth mode; beyond the last mode there is room as well."""
    ends = np.append(omega, 1.5 * omega[-1])
    last = min(_INSIDE, len(omega))
    first = max(0, last - 3)
    ratios = ends[first + 1 : last + 1] / ends[first:last]
    at = first + int(np.argmax(ratios))
    return float(ends[at]), float(ends[at + 1])


def round_between(low: float, high: float) -> float:
    """The number with the fewest digits well inside (low, high).

    >>> round_between(37.2, 52.9), round_between(0.0123, 0.0127), round_between(118.0, 231.0)
    (40.0, 0.0125, 200.0)
    """
    margin = 0.1 * (high - low)
    middle = math.sqrt(low * high)
    for digits in range(1, 17):
        value = float(f"{middle:.{digits - 1}e}")
        half = _halved(middle, digits)
        for candidate in (value, half):
            if low + margin < candidate < high - margin:
                return candidate
    return middle


def _halved(value: float, digits: int) -> float:
    """``value`` rounded to half a unit of its last digit."""
    unit = 10.0 ** (math.floor(math.log10(value)) - digits + 1) / 2
    return float(f"{round(value / unit) * unit:.{digits}e}")


# ---- the tolerance ---------------------------------------------------------------------------------------------------


def _settings(model: Model, band: tuple[float, float], progress: Listener) -> Suggestion:
    """The tightest tolerance of the ladder that is met with reserve, with the best statics without pseudo-modes where
    they do, else with them; else every mode in the band."""
    modes = find_modes(model, band, progress=progress)  # as a run will
    everything, omega = Keep(numbers=tuple(int(i) for i in modes.numbers)), _trial(band, modes)
    full: FullResponse | None = None
    notes: list[str] = []
    for statics in _STATICS:
        best = _best(modes, everything, statics, band, full)
        if best is None:
            continue
        comparison = compare(
            model, [best], modes=modes, band=band, omega=omega, full=full, times=False, sweep=False, progress=progress
        )
        check, full = comparison.checks[0], comparison.full
        if not check.local_error.defined:
            return Suggestion(settings=_whole(band), notes=(f"no tolerance: {check.local_error.note}",))
        notes.append(_told(check, len(modes)))
        found = _met(check)
        if found is not None:
            return Suggestion(settings=Settings(band=band, choice=found, statics=statics), notes=tuple(notes))
    return Suggestion(settings=_whole(band), notes=(*notes, "no usual tolerance is safely within reach"))


#: In the order tried.
_STATICS: tuple[Statics | None, ...] = (None, "vectors")


def _whole(band: tuple[float, float]) -> Settings:
    return Settings(band=band, choice=Band(low=band[0], high=band[1]))


def _best(
    modes: Modes,
    everything: Keep,
    statics: Statics | None,
    band: tuple[float, float],
    full: FullResponse | None,
) -> ReducedModel | None:
    """The small model with every computed mode; None where these statics cannot be had."""
    # Without a model nothing is solved for the error; pseudo-modes need the model, and a response to measure on.
    source = replace(modes, model=None, workspace=None) if statics is None else modes
    try:
        return truncate(source, everything, statics=statics, band=band, full=full)
    except ModesieveError:
        if statics is None:
            raise
        return None


def _met(check: Check) -> Tolerance | None:
    found = {"local": check.local_error.value, "peak": check.peak_error.value}
    for value, of in _LADDER:
        if found[of] * _RESERVE <= value:
            return Tolerance(value=value, of="peak" if of == "peak" else "local")
    return None


def _told(check: Check, count: int) -> str:
    return (
        f"all {count} computed modes, statics {check.small.statics}: off by {share(check.local_error.value)} of local, "
        f"{share(check.peak_error.value)} of peak at the frequencies tried"
    )


def _trial(band: tuple[float, float], modes: Modes) -> Real:
    """Frequencies through the band up to its top, and the strongest resonances, so that the peak is among them."""
    low, high = band
    if modes.origin.kind == "thermal":
        return np.geomspace(low, high, _TRIES)
    spread = np.linspace(max(low, 0.02 * high), high, _TRIES)
    inside = modes.omega[(modes.omega > spread[0]) & (modes.omega < high)]
    G = np.abs(modes.origin.weigh(modes.system.response(inside))).max(axis=(1, 2), initial=0.0)
    strongest = inside[np.argsort(-np.nan_to_num(G, posinf=0.0), kind="stable")[:_PEAKS]]
    return np.unique(np.concatenate([spread, strongest]))
