"""What is promised of a small model, on what grounds, and where it was checked."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Real, frozen
from modesieve.reduce.report import ShowsAsTable, aligned, span
from modesieve.reduce.response.records import ErrorFigure


@dataclass(frozen=True, kw_only=True)
class SpotCheck:
    """One frequency that no other step has used: the full model solved, the promise held against it.

    error: largest singular value of the weighted true error; low, high: where it was promised to lie; slack: what the
    solution itself may be off by; beside: why this frequency ("mode 7", "counting point", ...).
    """

    omega: float
    error: float
    low: float
    high: float
    slack: float
    backward_error: float
    beside: str = ""

    @property
    def passed(self) -> bool:
        return bool(self.low - self.slack <= self.error <= self.high + self.slack)


@dataclass(frozen=True, kw_only=True, eq=False)
class Guarantee(ShowsAsTable):
    """The guaranteed error of one small model over one band, with its grounds.

    holds: True when every figure below is guaranteed; reason: why not, or "". formula: what was proved, in words.
    x_c, modes_below, shift, worst_residual, relative_rounding: the grounds (see `Hub`); levels: tail levels of the hub.
    omega (w,) rad/s, difference (w,), hub_error (w,), reference (w,): the curve ``difference +- hub_error`` of the
    largest singular value of the weighted error, and of the full response from below. peak, local: worst figures over
    the whole band, between the samples too; absolute: one per output. pair_peak (p, m): every pair's worst error over
    that pair's own peak. peak_reference: guaranteed lower bound of the band's elastic peak; threshold: the level below
    which the response does not count as a local reference.
    """

    holds: bool
    reason: str
    formula: str
    band: tuple[float, float]
    x_c: float
    modes_below: int
    shift: float
    levels: int
    worst_residual: float
    relative_rounding: float
    omega: Real
    difference: Real
    hub_error: Real
    reference: Real
    peak: ErrorFigure | None = None
    local: ErrorFigure | None = None
    absolute: tuple[ErrorFigure, ...] = ()
    pair_peak: Real | None = None
    peak_reference: float = 0.0
    threshold: float = 0.0
    spot_checks: tuple[SpotCheck, ...] = ()
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name in ("omega", "difference", "hub_error", "reference"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=float)))

    def __repr__(self) -> str:
        rows = [
            ("holds", "yes" if self.holds else f"no: {self.reason}"),
            ("band", span(self.band)),
            ("of peak", str(self.peak) if self.peak else ""),
            ("of local", str(self.local) if self.local else ""),
            ("grounds", f"{self.modes_below} modes below the counting point, {self.levels} tail levels"),
            ("checked", f"{len(self.spot_checks)} frequencies that no other step used"),
        ]
        return aligned("Guarantee", [*rows, *(("note", note) for note in self.notes)])

    @property
    def upper(self) -> Real:
        """Guaranteed upper curve of the weighted error at ``omega``, (w,)."""
        return self.difference + self.hub_error

    @property
    def lower(self) -> Real:
        """The true error is no smaller than this, (w,)."""
        return np.maximum(self.difference - self.hub_error, 0.0)

    def figure(self, of: str) -> ErrorFigure | None:
        """The worst figure relative to ``peak``, ``local`` or ``absolute`` (the worst output)."""
        if of == "absolute":
            return max(self.absolute, key=lambda one: one.value, default=None)
        return self.local if of == "local" else self.peak
