"""The shift of ``(K - sigma M)^-1 M`` and its factor: 0 for a supported body, a little below 0 for a free one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import eigh

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.dense import EPS
from modesieve.reduce.linalg.factor import Factor, SolverName, Symmetry, factorise


@dataclass(frozen=True, kw_only=True, eq=False)
class Shifted:
    """A live factor of ``K - sigma M``; solves: right-hand sides used to find it; negative: eigenvalues below sigma
    (unstable modes) as far as its pivots told."""

    factor: Factor
    sigma: float
    factorisations: int
    solves: int = 0
    negative: int = 0


def combined(K: Sparse, M: Sparse, sigma: float) -> Sparse:
    """``K - sigma M``."""
    return K if sigma == 0 else K - sigma * M


def at(K: Sparse, M: Sparse, sigma: float, solver: SolverName, groups: Ints | None) -> Shifted:
    """The factor at a given shift: definite if it is, else indefinite."""
    A, tries = combined(K, M, sigma), 0
    for symmetry in _symmetries(K):
        tries += 1
        try:
            factor = factorise(A, symmetry=symmetry, solver=solver, groups=groups)
        except SolveError as error:
            failure = error
            continue
        return Shifted(sigma=sigma, factor=factor, factorisations=tries)
    raise failure


def supported(K: Sparse, M: Sparse, solver: SolverName, groups: Ints | None, seed: int) -> Shifted | None:
    """The factor at sigma = 0, None when K is singular to working precision (or not definite, where that shows)."""
    symmetry = _symmetries(K)[0]
    try:
        factor = factorise(K, symmetry=symmetry, solver=solver, groups=groups)
    except SolveError as error:
        if "memory" in str(error) or "too large" in str(error):
            raise
        return None
    if regular(K, M, factor, seed):
        return Shifted(sigma=0.0, factor=factor, factorisations=1, solves=2)
    factor.release()
    return None


def regular(K: Sparse, M: Sparse, factor: Factor, seed: int) -> bool:
    """False when the smallest eigenvalue that one inverse iteration finds is rounding of K.

    One step of ``K^-1 M`` on random vectors blows a null vector up by 1e16; its Rayleigh quotient is then below the
    rounding ``eps abs(y)^T abs(K) abs(y)`` of its own evaluation.
    """
    rng = np.random.default_rng(seed)
    try:
        Y = factor.solve(M @ rng.standard_normal((K.shape[0], min(2, K.shape[0]))))
    except SolveError:
        return False
    with np.errstate(over="ignore", invalid="ignore"):
        Y = Y / np.linalg.norm(Y, axis=0)
    if not np.all(np.isfinite(Y)):
        return True  # nothing excited: M is zero
    x, Z = _ritz(K, M, Y)
    worst = np.abs(Y @ Z)
    rounding = 100 * EPS * np.einsum("ij,ij->j", worst, abs(K) @ worst)
    return bool(np.all(np.abs(x) > rounding))


def _ritz(K: Sparse, M: Sparse, Y: Real) -> tuple[Any, Any]:
    A, B = Y.T @ (K @ Y), Y.T @ (M @ Y)
    try:
        return eigh((A + A.T) / 2, (B + B.T) / 2)
    except np.linalg.LinAlgError:
        m = np.maximum(B.diagonal(), 1e-300)
        return A.diagonal() / m, np.diag(1 / np.sqrt(m))


def first_guess(K: Sparse, M: Sparse) -> float:
    """A positive number of the order of the first flexible eigenvalue, from the diagonals and the number of unknowns.

    ``diag(K)/diag(M)`` is about the largest eigenvalue; the smallest of a mesh of n unknowns lies a factor of about
    ``n^(4/3)`` below (slender bodies further). It only has to be near enough for the first Krylov step to correct it.
    """
    k, m = K.diagonal(), M.diagonal()
    both = (k > 0) & (m > 0)
    if not both.any():
        return 1.0
    return float(np.median(k[both] / m[both])) * float(K.shape[0]) ** (-4 / 3)


def _symmetries(K: Sparse) -> tuple[Symmetry, ...]:
    if np.all(K.diagonal() > 0):
        return ("definite", "indefinite")
    return ("indefinite",)
