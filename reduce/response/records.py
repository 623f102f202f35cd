"""What the response layer hands on: the full model's response with its proof of accuracy, and error figures."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np

from modesieve.reduce.arrays import Complex, Real, frozen
from modesieve.reduce.report import hertz, number, share

Certainty: TypeAlias = Literal["guaranteed", "measured", "estimated"]
Reference: TypeAlias = Literal["peak", "local", "absolute"]


@dataclass(frozen=True, kw_only=True, eq=False)
class FullResponse:
    """Response of the full model, G(j omega), solved to a checked backward error.

    omega (w,) rad/s ascending; G (w, p, m) complex in physical channel units.
    backward_error (w,): worst column of ``norm(F - Z x) / (norm(Z) norm(x) + norm(F))``.
    residual (w,): worst column of ``norm(F - Z x) / norm(F)``.
    method (w,): how each frequency was solved, e.g. "krylov", "direct".
    """

    omega: Real
    G: Complex
    backward_error: Real
    residual: Real
    method: tuple[str, ...]
    solver: str = ""
    factorisations: int = 0
    solves: int = 0
    seconds: float = 0.0

    def __post_init__(self) -> None:
        for name in ("omega", "G", "backward_error", "residual"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name))))

    @property
    def worst_backward_error(self) -> float:
        """Largest ``norm(F - Z x) / (norm(Z) norm(x) + norm(F))`` over all frequencies and columns."""
        return float(np.max(self.backward_error, initial=0.0))

    @property
    def worst_residual(self) -> float:
        """Largest ``norm(F - Z x) / norm(F)``; stiff models near a resonance cannot bring it far down."""
        return float(np.max(self.residual, initial=0.0))


@dataclass(frozen=True, kw_only=True)
class ErrorFigure:
    """One error with its certainty and what it is relative to.

    A value of nan means "undefined", with the reason in ``note`` (see `defined`).

    value: a ratio (``unit == ""``) for ``peak`` and ``local``, else in ``unit``. pair: (input name, output name) of
    the worst entry, "" where a figure has none. at_omega: rad/s of the worst frequency, None where it has none.
    threshold: the level below which the full response does not count as a local reference (weighted units).
    """

    value: float
    certainty: Certainty
    relative_to: Reference
    unit: str = ""
    pair: tuple[str, str] | None = None
    at_omega: float | None = None
    threshold: float | None = None
    note: str = ""

    @property
    def defined(self) -> bool:
        return not np.isnan(self.value)

    @property
    def size(self) -> str:
        """The value in words: a share in per cent, or a number with its unit."""
        return share(self.value) if self.relative_to != "absolute" else f"{number(self.value)} {self.unit}".rstrip()

    def __str__(self) -> str:
        if not self.defined:
            return f"undefined: {self.note}"
        of = "" if self.relative_to == "absolute" else f" of {self.relative_to}"
        where = [f"{self.pair[0]} to {self.pair[1]}"] if self.pair else []
        where += [f"at {hertz(self.at_omega)}"] if self.at_omega is not None else []
        return f"{self.size}{of}, {self.certainty}" + (f" ({' '.join(where)})" if where else "")
