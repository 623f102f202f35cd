"""One frequency at a time: a complex factorisation, refinement, and the backward error with the full matrices."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.linalg as sl
import scipy.sparse as sp

from modesieve.reduce.arrays import Complex
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import SolverName, factorise
from modesieve.reduce.linalg.shift import regular
from modesieve.reduce.response.dynamic import Dynamic

#: Singular to working precision: an answer larger than this many times ``norm(F)`` over the size of Z, which still
#: leaves this relative residual.
BLOWN_UP, LEFT_OVER = 1e11, 1e-3
#: Models of this size are solved densely when they carry modal damping.
WHOLE = 400


@dataclass(frozen=True, kw_only=True, eq=False)
class Answer:
    """Solution X (n, m) at one frequency with its worst backward error and worst relative residual."""

    X: Complex
    backward_error: float
    residual: float
    solves: int
    solver: str = ""


def errors(dynamic: Dynamic, omega: float, X: Complex) -> tuple[Complex, float, float]:
    """Residual ``F - Z X`` (n, m), worst ``norm(r)/(norm(Z) norm(x) + norm(f))``, worst ``norm(r)/norm(f)``."""
    R = dynamic.F - dynamic.apply(omega, X)
    return R, *worst(R, X, dynamic.F, dynamic.norm(omega))


def worst(R: Complex, X: Complex, F: Any, size: float) -> tuple[float, float]:
    """Backward error and relative residual of the worst column, in the 2-norm of vectors."""
    r, x, f = (np.linalg.norm(A, axis=0) for A in (R, X, F))
    if not np.all(np.isfinite(r)):
        return np.inf, np.inf
    scale = size * x + f
    backward = float(np.max(r / np.where(scale > 0, scale, 1.0), initial=0.0))
    return backward, float(np.max(r / np.where(f > 0, f, 1.0), initial=0.0))


def solve_at(dynamic: Dynamic, omega: float, *, solver: SolverName, tolerance: float, refine: int = 3) -> Answer:
    """Factorise Z(w), solve, refine while the backward error is above the tolerance.

    Raises SolveError when Z(w) is singular (an undamped mode exactly on the frequency).
    """
    solve, name = _inverse(dynamic, omega, solver)
    X, solves = solve(dynamic.F.astype(complex)), dynamic.F.shape[1]
    R, backward, relative = errors(dynamic, omega, X)
    if not _is_answer(dynamic, omega, X, relative):
        raise SolveError("the matrix is singular to working precision", where=f"omega = {omega:.6g} rad/s")
    for _ in range(refine):
        if backward <= tolerance / 100:
            break
        better = X + solve(R)
        solves += X.shape[1]
        R_new, b_new, r_new = errors(dynamic, omega, better)
        if not b_new < backward:
            break
        X, R, backward, relative = better, R_new, b_new, r_new
    return Answer(X=X, backward_error=backward, residual=relative, solves=solves, solver=name)


def _is_answer(dynamic: Dynamic, omega: float, X: Complex, relative: float) -> bool:
    """False for the vector that rounding (or a perturbed pivot) makes of a singular system: large enough to pass any
    backward error, it leaves the load unanswered. A free body at rest is asked directly: its load may be balanced."""
    x, f = np.linalg.norm(X, axis=0), np.linalg.norm(dynamic.F, axis=0)
    if not np.all(np.isfinite(x)):
        return False
    if relative > LEFT_OVER and np.any(dynamic.size(omega) * x > BLOWN_UP * f):
        return False
    return omega != 0 or not dynamic.symmetric or _is_regular(dynamic)


def _is_regular(dynamic: Dynamic) -> bool:
    """True when K of a symmetric pencil is regular to working precision."""
    K, M = dynamic.pencil
    try:
        factor = factorise(K, symmetry="indefinite", solver="auto")
        return regular(K, M, factor, 0)
    except SolveError:
        return False


def _inverse(dynamic: Dynamic, omega: float, solver: SolverName) -> tuple[Any, str]:
    Z = dynamic.matrix(omega)
    if dynamic.U is not None and dynamic.d is not None and sp.issparse(Z) and Z.shape[0] <= WHOLE:
        # Modal damping on most of a small model: the low-rank formula would divide by the undamped resonance.
        return _dense_inverse(Z.toarray() + 1j * omega * (dynamic.U * dynamic.d) @ dynamic.U.T), "LAPACK"
    if sp.issparse(Z):
        factor = factorise(Z, symmetry="indefinite" if dynamic.symmetric else "none", solver=solver)
        solve, name = factor.solve, factor.solver
    else:
        solve, name = _dense_inverse(np.asarray(Z)), "LAPACK"
    return _with_low_rank(dynamic, omega, solve), name


def _dense_inverse(Z: Complex) -> Any:
    with np.errstate(all="ignore"):
        lu, pivots = sl.lu_factor(Z, check_finite=False)
    if np.any(np.diag(lu) == 0):
        raise SolveError("the matrix is singular", where="a frequency that is an eigenvalue")
    return lambda B: sl.lu_solve((lu, pivots), B, check_finite=False)


def _with_low_rank(dynamic: Dynamic, omega: float, solve: Any) -> Any:
    """The inverse of ``Z + j w U diag(d) U^T`` by the formula of Sherman, Morrison and Woodbury."""
    if dynamic.U is None or dynamic.d is None or omega == 0 or not np.any(dynamic.d):
        return solve
    U, d = dynamic.U[:, dynamic.d != 0], dynamic.d[dynamic.d != 0]
    half = solve(U.astype(complex))
    core = np.diag(1 / (1j * omega * d)) + U.T @ half

    def whole(B: Complex) -> Complex:
        X = solve(B)
        return X - half @ np.linalg.solve(core, U.T @ X)

    return whole
