"""The frequency axis of a plate: hertz for structures, period or time constant for thermal models."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.comparison.records import Comparison
from modesieve.reduce.modal.records import Modes

_STEPS = ((3600.0, "h"), (60.0, "min"), (1.0, "s"))


@dataclass(frozen=True, kw_only=True)
class Scale:
    """thermal: the axis shows times, slow at the left; ``tick`` seconds are one ``unit``."""

    thermal: bool
    tick: float
    unit: str

    def of(self, omega: Any) -> Any:
        """Axis values of angular frequencies: Hz, or the time constant 1/omega that responds there."""
        omega = np.asarray(omega, dtype=float)
        return 1 / omega / self.tick if self.thermal else omega / (2 * np.pi)

    @property
    def label(self) -> str:
        return f"time constant 1/ω, {self.unit}" if self.thermal else "frequency, Hz"

    def orient(self, axes: Any) -> None:
        """Slow to fast, left to right."""
        if self.thermal and not axes.xaxis_inverted():
            axes.invert_xaxis()

    def window(self, band: tuple[float, float], lowest: float) -> tuple[float, float]:
        """The band on this axis; a band from 0 begins where the data do."""
        low = max(band[0], lowest)
        return float(self.of(low)), float(self.of(band[1]))


def scale_of(modes: Modes, band: tuple[float, float]) -> Scale:
    """Seconds, minutes or hours by the slow end of the band."""
    thermal = modes.origin.kind == "thermal"
    slow = 1 / max(band[0], 1e-2 * band[1])
    tick, unit = next((t, u) for t, u in _STEPS if slow >= 2 * t or t == 1.0)
    return Scale(thermal=thermal, tick=tick if thermal else 1.0, unit=unit if thermal else "Hz")


def positive(comparison: Comparison) -> Any:
    """Indices of the frequencies that a logarithmic axis can show."""
    return np.flatnonzero(comparison.full.omega > 0)
