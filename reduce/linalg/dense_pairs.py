"""All eigenpairs of a small symmetric pencil by LAPACK, accurate at both ends of a wide spectrum."""

from __future__ import annotations

import numpy as np
from scipy.linalg import LinAlgError, eigh

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.errors import SolveError

#: Each pass keeps the eigenvalues theta of (M, K) within this factor of the largest; the rest is projected again.
SPAN = 1e-5


def dense_pairs(K: Sparse, M: Sparse, rank: int) -> tuple[Real, Real]:
    """x (rank,) ascending and M-orthonormal vectors (n, rank) of ``K phi = x M phi``.

    ``eigh(K, M)`` loses the low end of a stiff pencil (absolute error eps x_max), the inverted pencil
    ``M phi = theta (K - sigma M) phi`` the high end: so the inverted one is solved pass after pass, each on the
    M-orthogonal complement of what is known. rank: number of finite eigenvalues (rank of M).
    """
    Kd, Md = K.toarray(), M.toarray()
    sigma = _definite_shift(Kd, Md)
    Ks = Kd - sigma * Md
    W = np.eye(len(Kd))
    x, V = np.zeros(0), np.zeros((len(Kd), 0))
    while len(x) < rank:
        theta, S = eigh(_sym(W.T @ Md @ W), _sym(W.T @ Ks @ W))
        theta, S = theta[::-1], S[:, ::-1]
        good = np.arange(len(theta)) < rank - len(x)
        good &= theta > SPAN * theta[0]
        found = W @ (S[:, good] / np.sqrt(theta[good]))
        x, V = np.concatenate([x, sigma + 1 / theta[good]]), np.hstack([V, found])
        W = W @ S[:, ~good]
        for _ in range(2):
            W = W - V @ (V.T @ (Md @ W))
    order = np.argsort(x, kind="stable")
    return x[order], V[:, order]


def _sym(A: Real) -> Real:
    return (A + A.T) / 2


def _definite_shift(K: Real, M: Real) -> float:
    """0 if K is positive definite with room to spare, else a negative shift that makes ``K - sigma M`` so."""
    scale = np.abs(np.diag(K)).sum() / max(np.abs(np.diag(M)).sum(), np.finfo(float).tiny)
    for sigma in (0.0, *(-scale * 10.0**k for k in range(-8, 4))):
        if _is_definite(K - sigma * M):
            return sigma
    raise SolveError(
        "no shift makes this pencil definite",
        expected="stiffness positive definite where the mass is zero",
        got=f"{len(K)} unknowns",
        remedy="check for massless unknowns without stiffness",
    )


def _is_definite(A: Real) -> bool:
    d = np.sqrt(np.abs(np.diag(A)))
    if np.any(np.diag(A) <= 0):
        return False
    try:
        smallest = eigh(A / d / d[:, None], eigvals_only=True, subset_by_index=[0, 0])[0]
    except LinAlgError:
        return False
    return bool(smallest > 1e3 * len(A) * np.finfo(float).eps)
