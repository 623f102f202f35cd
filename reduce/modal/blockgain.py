"""The same figures for a block of eigenvalues that only makes sense together: small dense matrices (A, B, C)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_continuous_lyapunov
from scipy.optimize import minimize_scalar

from modesieve.reduce.arrays import Real


@dataclass(frozen=True, kw_only=True, eq=False)
class Block:
    """One block in weighted channels: A (g, g), B (g, m), C (p, g), and its own feedthrough D (p, m) or 0."""

    A: Real
    B: Real
    C: Real
    D: Real | float = 0.0

    @property
    def size(self) -> float:
        """``norm(C) norm(B)``."""
        return float(np.linalg.norm(self.C) * np.linalg.norm(self.B))

    @property
    def stable(self) -> bool:
        return bool(np.linalg.eigvals(self.A).real.max() < 0)

    @property
    def singular(self) -> bool:
        """True when 0 is an eigenvalue: no static gain."""
        return bool(np.linalg.cond(self.A) > 1e14)

    def gain(self, omega: float) -> float:
        """Frobenius norm of ``C (j w - A)^-1 B + D``; inf at an eigenvalue on the axis."""
        try:
            X = np.linalg.solve(1j * omega * np.eye(len(self.A)) - self.A, self.B)
        except np.linalg.LinAlgError:
            return float("inf")
        return float(np.linalg.norm(self.C @ X + self.D))

    def static(self) -> float:
        return float("inf") if self.singular else self.gain(0.0)

    def supremum(self, low: float, high: float) -> float:
        """Largest gain in the band: sampled around every eigenvalue, the best of it refined."""
        lam = np.linalg.eigvals(self.A)
        scale = float(np.abs(lam).max(initial=0.0)) or float(np.linalg.norm(self.A)) or 1.0
        near = np.abs(lam.imag)[:, None] + np.abs(lam.real)[:, None] * np.linspace(-4, 4, 17)
        wide = np.concatenate([[0.0], scale * np.logspace(-4, 2, 49)])
        points = np.unique(np.clip(np.concatenate([near.ravel(), wide]), low, min(high, 1e3 * scale)))
        values = np.array([self.gain(w) for w in points])
        best = int(np.argmax(values))
        if not np.isfinite(values[best]) or len(points) < 2:
            return float(values[best])
        around = (float(points[max(best - 1, 0)]), float(points[min(best + 1, len(points) - 1)]))
        finer = minimize_scalar(
            lambda w: -self.gain(w), bounds=around, method="bounded", options={"xatol": 1e-9 * scale}
        )
        return max(float(values[best]), -float(finer.fun))

    def energy(self) -> float:
        """Squared H2 norm, ``tr(C P C^T)`` with ``A P + P A^T + B B^T = 0``; nan where infinite."""
        if not self.stable or np.any(self.D):
            return float("nan")
        P = solve_continuous_lyapunov(self.A, -self.B @ self.B.T)
        return float(np.trace(self.C @ P @ self.C.T))

    def hankel(self) -> float:
        """Largest Hankel singular value; nan if not stable."""
        if not self.stable:
            return float("nan")
        P = solve_continuous_lyapunov(self.A, -self.B @ self.B.T)
        Q = solve_continuous_lyapunov(self.A.T, -self.C.T @ self.C)
        return float(np.sqrt(max(np.linalg.eigvals(P @ Q).real.max(), 0.0)))
