"""The operators whose Krylov spaces hold the response: a pencil at a shift, and the linearised quadratic pencil."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.linalg as sl
import scipy.sparse as sp

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import SolverName, Symmetry, factorise
from modesieve.reduce.response.dynamic import Dynamic, times


class ShiftedPencil:
    """``(P0 - sigma P1)^-1 P1`` where ``Z = a(w) P0 + b(w) P1`` (and low-rank terms)."""

    def __init__(self, P0: Any, P1: Any, weights: Any, shift: float, solve: Any, solver: str) -> None:
        self.P0, self.P1, self._weights, self.shift, self._solve, self.solver = P0, P1, weights, shift, solve, solver
        self.n = self.N = int(P0.shape[0])
        self.dtype = np.result_type(P0.dtype, P1.dtype)
        self.solves = 0

    def apply(self, V: Any) -> Any:
        return self.inverse(times(self.P1, V))

    def inverse(self, R: Any) -> Any:
        self.solves += R.shape[1]
        return self._solve(np.asarray(R))

    def coefficients(self, omega: Real) -> tuple[Complex, Complex]:
        pairs = np.array([self._weights(float(w)) for w in omega], dtype=complex).reshape(-1, 2)
        return pairs[:, 0], pairs[:, 0] * self.shift + pairs[:, 1]

    def image(self, Q: Any) -> tuple[Any, Any]:
        out = times(self.P0, Q)
        return (out - self.shift * times(self.P1, Q) if self.shift else out), np.zeros((1, Q.shape[1]))


class Linearised:
    """``Z = K + j w D - w^2 M`` as a pencil of twice the size, ``P0 + j w P1`` with the states x and j w x:

        P0 = [K 0; 0 M],  P1 = [D M; -M 0],

    whose shifted inverse needs one factor of ``K - s D + s^2 M`` and no other matrix (M drops out of the second row).
    Tisseur and Meerbergen, SIAM Review 43 (2001) 235-286. K may be complex (imaginary stiffness).
    """

    def __init__(self, K: Any, D: Any, M: Any, shift: float, solve: Any, solver: str) -> None:
        self.K, self.D, self.M, self.shift, self._solve, self.solver = K, D, M, shift, solve, solver
        self.n = int(K.shape[0])
        self.N = 2 * self.n
        self.dtype = np.result_type(K.dtype, D.dtype, M.dtype)
        self.solves = 0

    def apply(self, V: Any) -> Any:
        x, v = V[: self.n], V[self.n :]
        return self._both(times(self.D, x) + times(self.M, v), -x)

    def inverse(self, R: Any) -> Any:
        return self._both(R, np.zeros_like(R))

    def _both(self, top: Any, bottom: Any) -> Any:
        """Solution of the shifted system with right-hand side ``[top; M bottom]``."""
        self.solves += top.shape[1]
        rhs = top + self.shift * times(self.M, bottom) if self.shift else top
        x = self._solve(np.asarray(rhs))
        return np.concatenate([x, bottom - self.shift * x])

    def coefficients(self, omega: Real) -> tuple[Complex, Complex]:
        return np.ones(len(omega), dtype=complex), np.asarray(self.shift + 1j * np.asarray(omega), dtype=np.complex128)

    def image(self, Q: Any) -> tuple[Any, Any]:
        """``K x - s (D x + M v)``, and the second row ``M (v + s x)``, which enters as ``-j w`` times itself."""
        x, v = Q[: self.n], Q[self.n :]
        top = times(self.K, x) - self.shift * (times(self.D, x) + times(self.M, v))
        return top, -times(self.M, v + self.shift * x)


def pencil_at(dynamic: Dynamic, P0: Any, P1: Any, weights: Any, shift: float, solver: SolverName) -> ShiftedPencil:
    """Factorise ``P0 - shift P1``."""
    A = P0 - shift * P1 if shift else P0
    solve, name = factor_of(A, "indefinite" if dynamic.symmetric else "none", solver)
    return ShiftedPencil(P0, P1, weights, shift, solve, name)


def linearised_at(K: Any, D: Any, M: Any, shift: float, solver: SolverName) -> Linearised:
    """Factorise ``K - shift D + shift^2 M``."""
    solve, name = factor_of(K - shift * D + shift**2 * M if shift else K, "indefinite", solver)
    return Linearised(K, D, M, shift, solve, name)


def factor_of(A: Any, symmetry: Symmetry, solver: SolverName) -> tuple[Any, str]:
    """A solve for A, sparse or dense, and the method's name. Raises SolveError where A is singular."""
    if sp.issparse(A):
        factor = factorise(sp.csr_array(A), symmetry=symmetry, solver=solver)
        return factor.solve, factor.solver
    with np.errstate(all="ignore"):
        lu, pivots = sl.lu_factor(np.asarray(A), check_finite=False)
    diagonal = np.abs(np.diag(lu))
    if not np.all(np.isfinite(lu)) or diagonal.min() == 0:
        raise SolveError("the matrix is singular", where=f"{len(lu)} unknowns")
    return (lambda B: sl.lu_solve((lu, pivots), B, check_finite=False)), "LAPACK"
