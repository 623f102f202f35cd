"""Eigenpairs of a symmetric pencil as a record, and how good they are."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.linalg.dense import EPS
from modesieve.reduce.linalg.factor import Factor


@dataclass(frozen=True, kw_only=True, eq=False)
class SymmetricPairs:
    """Eigenpairs in ascending x. vectors (n, k) are M-orthonormal; residuals (k,) as `residuals` gives them.

    factor: the live factor of ``K - sigma M``, None where none was needed. basis: the M-orthonormal Krylov space that
    the vectors were taken from, for a full response (None from the dense path). complete: every finite mode is here.
    next_x: estimate of the first eigenvalue beyond the list, inf when ``complete``. negative: eigenvalues below sigma,
    as far as known. solver names the method; solves counts right-hand sides. status: "converged", or in a word why not;
    message says more.
    """

    x: Real
    vectors: Real = field(repr=False)
    residuals: Real = field(repr=False)
    sigma: float = 0.0
    factor: Factor | None = field(default=None, repr=False)
    basis: Real | None = field(default=None, repr=False)
    complete: bool = False
    next_x: float = np.inf
    negative: int = 0
    solver: str = ""
    solves: int = 0
    factorisations: int = 0
    seconds: float = 0.0
    status: str = "converged"
    message: str = ""

    def __len__(self) -> int:
        return len(self.x)

    def first(self, k: int) -> SymmetricPairs:
        """The first k pairs only."""
        if k >= len(self.x):
            return self
        x, next_x = self.x[:k], float(self.x[k])
        vectors, worst = self.vectors[:, :k], self.residuals[:k]
        return replace(self, x=x, vectors=vectors, residuals=worst, next_x=next_x, complete=False)


def residuals(K: Sparse, M: Sparse, x: Real, vectors: Real) -> Real:
    """True relative residuals ``norm(K phi - x M phi) / (norm(K phi) + abs(x) norm(M phi))``, shape (k,).

    Where both terms are no more than rounding (a zero mode) the reference is ``norm(abs(K) abs(phi))`` instead.
    """
    return residuals_and_floor(K, M, x, vectors)[0]


def residuals_and_floor(K: Sparse, M: Sparse, x: Real, vectors: Real) -> tuple[Real, Real]:
    """Relative residuals, and the part of them that rounding in ``K phi`` alone explains."""
    if vectors.shape[1] == 0:
        return np.zeros(0), np.zeros(0)
    KV, MV = K @ vectors, M @ vectors
    norm = np.linalg.norm
    spread = norm(abs(K) @ np.abs(vectors), axis=0)
    size = norm(KV, axis=0) + np.abs(x) * norm(MV, axis=0)
    size = np.where(size > 1e4 * EPS * spread, size, np.maximum(spread, 1e-300))
    return norm(KV - MV * x, axis=0) / size, EPS * spread / size


def eigenvalues(K: Sparse, sigma: float, theta: Real, largest: float, vectors: Real) -> Real:
    """``sigma + 1/theta`` or the Rayleigh quotient of M-normalised vectors, whichever rounding spoils less."""
    x = sigma + 1 / theta
    error = 4 * EPS * largest / theta**2
    quotient = np.einsum("ij,ij->j", vectors, K @ vectors)
    spread = EPS * np.einsum("ij,ij->j", np.abs(vectors), abs(K) @ np.abs(vectors))
    return np.where(spread < error, quotient, x)
