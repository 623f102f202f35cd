"""Residuals of many answers from one Krylov space, with the full matrices' images of its basis.

With X the basis and ``A_i X`` its images under the parts of Z, every residual ``F - Z(w) X y`` is a combination of the
columns of ``[F, A_1 X, A_2 X, ..., U]``. One triangular factor of that block (rows taken piece by piece) gives the norm
of every such combination to the rounding of the block itself; no squares are formed and nothing is n by frequencies.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.response.dynamic import Dynamic, times

#: Rows of the block that are factorised at once.
ROWS = 1 << 15


class Images:
    """The triangular factor, the Gram matrix of X, and what the outputs and the low-rank part see of X."""

    def __init__(self, dynamic: Dynamic, X: Any) -> None:
        self.dynamic, self.X = dynamic, X
        self._R = _triangle(dynamic, X)
        self._gram = X.conj().T @ X
        self._seen = [(C @ X, power) for C, power in dynamic.outputs]
        self._reach = None if dynamic.U is None else dynamic.U.T @ X
        self._load = np.linalg.norm(dynamic.F, axis=0)

    def errors(self, omega: float, y: Complex) -> tuple[float, float]:
        """Worst backward error and worst relative residual of the answer ``X y``, y (m, inputs)."""
        parts = [np.eye(y.shape[1], dtype=complex), *(-c * y for c in self.dynamic.coefficients(omega))]
        if self._reach is not None and self.dynamic.d is not None:
            parts.append(-1j * omega * (self.dynamic.d[:, None] * (self._reach @ y)))
        r = np.linalg.norm(self._R @ np.concatenate(parts), axis=0)
        if not np.all(np.isfinite(r)):
            return np.inf, np.inf
        x = np.sqrt(np.maximum(np.einsum("ij,ij->j", y.conj(), self._gram @ y).real, 0.0))
        scale = self.dynamic.norm(omega) * x + self._load
        backward = r / np.where(scale > 0, scale, 1.0)
        return float(backward.max(initial=0.0)), float((r / np.where(self._load > 0, self._load, 1.0)).max(initial=0.0))

    def response(self, omega: float, y: Complex) -> Complex:
        """``C(w) X y + D``, shape (p, inputs)."""
        out = self.dynamic.D.astype(np.complex128)
        for seen, power in self._seen:
            out = out + (1j * omega) ** power * (seen @ y)
        return out

    def solution(self, y: Complex) -> Any:
        """``X y`` (n, inputs)."""
        return times(self.X, y)


def _triangle(dynamic: Dynamic, X: Any) -> Real | Complex:
    R = None
    for start in range(0, dynamic.n, ROWS):
        rows = slice(start, min(start + ROWS, dynamic.n))
        block = [dynamic.F[rows], *(times(A[rows], X) for A in dynamic.parts)]
        if dynamic.U is not None:
            block.append(dynamic.U[rows])
        stacked = np.concatenate(block, axis=1)
        R = np.linalg.qr(stacked if R is None else np.concatenate([R, stacked]), mode="r")
    return np.asarray(R)
