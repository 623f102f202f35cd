"""Stage 3's records: small models held against the full one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Model
from modesieve.reduce.report import ShowsAsTable, aligned, columns, number, share, span
from modesieve.reduce.response.records import Certainty, ErrorFigure, FullResponse
from modesieve.reduce.truncation.records import ReducedModel


@dataclass(frozen=True, kw_only=True, eq=False, repr=False)
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

    @property
    def certainty(self) -> Certainty:
        return self.local_error.certainty

    @property
    def worst_phase(self) -> float:
        """Largest phase error in rad where the full response counts; nan where it never does."""
        return float(np.nanmax(np.abs(self.phase))) if np.isfinite(self.phase).any() else float("nan")

    @property
    def max_relative_error(self) -> dict[str, float | None]:
        """``peak`` and ``local``; None where a relative error means nothing (see the figures' notes)."""
        figures = {"peak": self.peak_error, "local": self.local_error}
        return {name: figure.value if figure.defined else None for name, figure in figures.items()}

    def __repr__(self) -> str:
        dc = share(self.dc_error) if self.dc_error is not None else self.dc_reason
        phase = self.worst_phase
        rows = [
            ("states", str(self.small.states)),
            ("error of peak", str(self.peak_error)),
            ("error of local", str(self.local_error)),
            *((f"error of {figure.pair[1]}", str(figure)) for figure in self.absolute if figure.pair is not None),
            ("phase error", "" if np.isnan(phase) else f"{number(np.degrees(phase))} degrees, {self.certainty}"),
            ("error at 0 Hz", dc),
        ]
        return aligned(f"Check of {self.label}", rows)


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


@dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class Comparison(ShowsAsTable):
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

    @property
    def frequency_count(self) -> int:
        return len(self.full.omega)

    @property
    def worst_backward_error(self) -> float:
        return self.full.worst_backward_error

    @property
    def worst_residual_of_full(self) -> float:
        return self.full.worst_residual

    def __repr__(self) -> str:
        rows = [
            ("band", span(self.band)),
            ("frequencies", f"{self.frequency_count}, backward error of the full solution {self._accuracy}"),
            ("reference", f"peak {number(self.reference_peak)}; {self.threshold_note}"),
            *(("note", warning) for warning in self.warnings),
        ]
        head = aligned(f"Comparison with {self.model.title or 'the full model'}", rows)
        if not self.checks:
            return head
        table = [
            (c.label, str(c.small.states), c.peak_error.size, c.local_error.size, _dc(c), c.certainty)
            for c in self.checks
        ]
        return head + "\n" + columns(("model", "states", "of peak", "of local", "at 0 Hz", "certainty"), table)

    @property
    def _accuracy(self) -> str:
        worst = self.worst_backward_error
        return "not known" if np.isnan(worst) else f"at most {worst:.1e}"


def _dc(check: Check) -> str:
    return share(check.dc_error) if check.dc_error is not None else "none"
