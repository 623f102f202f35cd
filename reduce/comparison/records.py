"""Stage 3's records: small models held against the full one."""

from __future__ import annotations

from dataclasses import dataclass

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Model
from modesieve.reduce.response.records import Certainty, ErrorFigure, FullResponse
from modesieve.reduce.truncation.records import ReducedModel


@dataclass(frozen=True, kw_only=True, eq=False)
class Check:
    """One small model against the full one, on the full response's frequencies.

    G (w, p, m); sigma (w,) largest singular value of the weighted error; local (w,) the same over the local
    reference; phase (w, p, m) phase error in rad (nan where the full response is below the threshold);
    peak_error, local_error: the worst figures; absolute: one figure per output in its unit, all inputs at their
    amplitudes added; pair_peak (p, m): worst relative error of every pair, relative to that pair's own peak;
    dc_error: relative error at 0, None with ``dc_reason``.
    """

    small: ReducedModel
    label: str
    G: Complex
    sigma: Real
    local: Real
    phase: Real
    peak_error: ErrorFigure
    local_error: ErrorFigure
    absolute: tuple[ErrorFigure, ...]
    pair_peak: Real
    dc_error: float | None
    dc_reason: str = ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Sweep:
    """Error over the number of kept modes, in rank order.

    kept (q,) counts; states (q,); errors: (statics, reference) to (q,) worst errors; certainty of all of them.
    """

    kept: Real
    states: Real
    errors: dict[tuple[str, str], Real]
    certainty: Certainty
    ranked_by: str


@dataclass(frozen=True, kw_only=True, eq=False)
class TimeResponse:
    """Step or impulse responses. t (t,) s; full (t, p, m) and one (t, p, m) per small model, unit inputs times
    amplitude; certainty of the full curve: measured from all modes, estimated from the computed ones."""

    kind: str
    t: Real
    full: Real
    small: tuple[Real, ...]
    certainty: Certainty
    note: str = ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Comparison:
    """Everything the comparison stage knows; figures, reports and the page read nothing else."""

    model: Model
    modes: Modes
    full: FullResponse
    checks: tuple[Check, ...]
    band: tuple[float, float]
    threshold: float
    threshold_note: str
    reference_peak: float
    sweep: Sweep | None = None
    step: TimeResponse | None = None
    impulse: TimeResponse | None = None
    warnings: tuple[str, ...] = ()
