"""Small dense helpers: M-orthonormal blocks, and all pairs of a small pencil by its inverse."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.linalg import eigh

from modesieve.reduce.arrays import Real, Sparse

EPS = float(np.finfo(float).eps)


def orthonormalise(W: Real, MW: Real) -> tuple[Real, Real, Real]:
    """One pass towards an M-orthonormal basis of the columns of W, by the SVD of their scaled Gram matrix
    (Stathopoulos and Wu, SIAM J. Sci. Comput. 23 (2002) 2165-2182).

    Returns Q (n, k), MQ and R (k, k) with ``W = Q R`` exactly: no direction is dropped, small ones are only
    enlarged, so a second pass (with a fresh MQ) makes Q orthonormal. A column of zeros stays one.
    """
    size = np.sqrt(np.maximum(np.einsum("ij,ij->j", W, MW), 0.0))
    scale = np.where(size > 0, size, 1.0)
    into = 1 / scale
    G = (W.T @ MW) * into[:, None] * into
    s, U = np.linalg.eigh((G + G.T) / 2)
    root = np.sqrt(np.maximum(s, EPS * max(float(np.max(s, initial=0.0)), 1e-300)))
    forward = (U / root) * into[:, None]
    return W @ forward, MW @ forward, (U * root).T * scale


def mass_root(M: Sparse) -> Real:
    """B (n, r) with ``M = B B^T``, r the rank of M found on the scaled matrix; M dense or sparse, semidefinite.

    >>> np.abs(mass_root(np.diag([4.0, 0.0]))).tolist()
    [[2.0], [0.0]]
    """
    D = np.asarray(M.toarray() if hasattr(M, "toarray") else M)
    size = np.sqrt(np.maximum(D.diagonal(), 0.0))
    scale = np.where(size > 0, size, 1.0)
    s, U = eigh(D / scale[:, None] / scale)
    keep = s > len(s) * 10 * EPS * max(float(s[-1]), 0.0)
    return U[:, keep] * np.sqrt(s[keep]) * scale[:, None]


def all_pairs(K: Sparse, M: Sparse, sigma: float, solve: Any) -> tuple[Real, Real]:
    """All finite pairs of ``K phi = x M phi``, ascending x, phi M-orthonormal; K - sigma M regular.

    With ``M = B B^T`` the matrix ``B^T (K - sigma M)^-1 B`` has the eigenvalues ``1/(x - sigma)``: full accuracy for
    the low end. Where M is regular, the high end comes from the pencil itself, whose small eigenvalues are the ones
    that lose digits.
    """
    B = mass_root(M)
    if B.shape[1] == 0:
        return np.zeros(0), np.zeros((B.shape[0], 0))
    half = solve(B)
    A = B.T @ half
    theta, Z = eigh((A + A.T) / 2)
    order = np.argsort(sigma + 1 / theta)
    theta, Z = theta[order], Z[:, order]
    x, vectors = sigma + 1 / theta, half @ (Z / theta)
    x, vectors = _with_high_end(K, M, x, vectors)
    return x, vectors / np.sqrt(np.maximum(np.einsum("ij,ij->j", vectors, M @ vectors), 1e-300))


def _with_high_end(K: Sparse, M: Sparse, x: Real, vectors: Real) -> tuple[Real, Real]:
    """The upper half (on a logarithmic scale) from the condensed pencil itself, where that exists."""
    size = np.abs(x)
    take = size > np.sqrt(max(float(size.min()), EPS * float(size.max())) * float(size.max()))
    if not take.any():
        return x, vectors
    try:
        x_high, high = _condensed_pairs(K.toarray(), M.toarray())
    except np.linalg.LinAlgError:
        return x, vectors
    if len(x_high) != len(x):
        return x, vectors
    take &= x_high > 0
    return np.where(take, x_high, x), np.where(take, high, vectors)


def _condensed_pairs(K: Real, M: Real) -> tuple[Real, Real]:
    """All pairs by `eigh` after massless rows s are condensed: ``K_mm - K_ms K_ss^-1 K_sm``. Raises LinAlgError."""
    with_mass = np.abs(M).sum(axis=1) > 0
    m, s = np.flatnonzero(with_mass), np.flatnonzero(~with_mass)
    T = -np.linalg.solve(K[np.ix_(s, s)], K[np.ix_(s, m)]) if s.size else np.zeros((0, m.size))
    if not np.all(np.isfinite(T)):
        raise np.linalg.LinAlgError
    K_c = K[np.ix_(m, m)] + K[np.ix_(m, s)] @ T
    x, upper = eigh((K_c + K_c.T) / 2, M[np.ix_(m, m)])
    vectors = np.zeros((len(K), len(m)))
    vectors[m], vectors[s] = upper, T @ upper
    return x, vectors
