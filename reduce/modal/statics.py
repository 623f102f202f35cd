"""The exact static response without rigid-body or integrating modes, independent of the shift."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.modal.workspace import Workspace


def elastic_solution(K: Sparse, M: Sparse, F: Real, zero: Real, workspace: Workspace) -> Real:
    """``u`` (n, m) with ``K u = P F`` and no part in the zero modes, ``P F = F - M Z Z^T F``.

    zero (n, z): M-orthonormal zero modes Z. With a shifted factor: ``u <- u + (K - sigma M)^-1 (P F - K u)``,
    projected; the error shrinks by ``abs(sigma)/(x_1 - sigma)`` a step.
    """
    load = F - M @ (zero @ (zero.T @ F))
    u = _without(workspace.solve(load), zero, M)
    if workspace.sigma == 0 and zero.shape[1] == 0:
        return u
    best = np.inf
    for _ in range(60):
        correction = _without(workspace.solve(_range(load - K @ u, zero, M)), zero, M)
        size = float(np.linalg.norm(correction))
        if not size < 0.9 * best or size <= 1e-15 * float(np.linalg.norm(u)):
            break
        best = size
        u = u + correction
    return u


def _without(u: Real, zero: Real, M: Sparse) -> Real:
    return u - zero @ (zero.T @ (M @ u)) if zero.shape[1] else u


def _range(r: Real, zero: Real, M: Sparse) -> Real:
    return r - M @ (zero @ (zero.T @ r)) if zero.shape[1] else r
