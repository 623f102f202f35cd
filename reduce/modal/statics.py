"""The static response of all modes, ``C K^-1 F`` without rigid-body modes, from the factor that is at hand."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.linalg import Factor, SymmetricPairs
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.linalg.shift import at


@dataclass(frozen=True, kw_only=True, eq=False)
class Workspace:
    """What the solve leaves for the later stages of the same run.

    factor: the live factor of ``K - sigma M``; pairs: the solve's own result with its Krylov vectors.
    """

    sigma: float
    factor: Factor = field(repr=False)
    pairs: SymmetricPairs = field(repr=False)

    def solve(self, rhs: Any) -> Any:
        """``(K - sigma M)^-1 rhs``."""
        return self.factor.solve(np.ascontiguousarray(rhs))


def workspace_of(K: Sparse, M: Sparse, pairs: SymmetricPairs, solver: SolverName, groups: Ints | None) -> Workspace:
    """The solve's own factor, made again where it was given back."""
    factor = pairs.factor
    if factor is None:
        factor = at(K, M, pairs.sigma, solver, groups).factor
    return Workspace(sigma=pairs.sigma, factor=factor, pairs=pairs)


@dataclass(frozen=True, kw_only=True, eq=False)
class Still:
    """u (n, m): elastic static answer to the load, None with a reason; solves: right-hand sides used."""

    u: Real | None
    reason: str = ""
    solves: int = 0


def elastic_answer(K: Sparse, M: Sparse, F: Real, rigid: Real, workspace: Workspace) -> Still:
    """``K^-1 P F``, shape (n, m), P taking out the rigid modes (n, r), M-orthonormal.

    ``u <- u + (K - sigma M)^-1 (P F - K u)``, projected again each time: the error shrinks by
    ``abs(sigma)/(x_1 - sigma)`` a step, x_1 the first elastic eigenvalue; with sigma = 0 it is one refined solve.
    """
    load = _without_loads(F, M, rigid)
    u, last, solves = np.zeros_like(F), np.inf, 0
    for _ in range(60):
        du = workspace.solve(_without_loads(load - K @ u, M, rigid))
        du = du - rigid @ (rigid.T @ (M @ du))
        solves += F.shape[1]
        u = u + du
        size = np.linalg.norm(u, axis=0)
        step = float(np.max(np.linalg.norm(du, axis=0) / np.where(size > 0, size, 1.0), initial=0.0))
        if step < 1e-14 or (step < 1e-8 and step > 0.3 * last):
            return Still(u=u, solves=solves)
        if not np.isfinite(step):
            break
        last = step
    reason = f"the static solution did not converge from the shift {workspace.sigma:.3g}"
    return Still(u=None, reason=reason, solves=solves)


def _without_loads(R: Real, M: Sparse, rigid: Real) -> Real:
    return np.asarray(R - M @ (rigid @ (rigid.T @ R)))
