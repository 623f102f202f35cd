"""How many modes lie below a point: Sylvester's law of inertia."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import SolverName, factorise

#: Neighbours closer than this (relative) belong to one cluster; a counting point never lies between them.
CLUSTER_GAP = 1e-4


@dataclass(frozen=True, kw_only=True)
class CountResult:
    """Number of eigenvalues x < mu; reliable only if the pivots could be trusted (else reason)."""

    expected: int
    mu: float
    reliable: bool
    reason: str = ""
    solver: str = ""
    negative_pivots: int = 0
    corrections: str = ""


def count_below(
    K: Sparse,
    M: Sparse,
    mu: float,
    *,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    multiplier_rows: Ints | None = None,
) -> CountResult:
    """The number of eigenvalues x < mu of ``K phi = x M phi``, from the negative pivots of ``K - mu M``.

    Each Lagrange-multiplier row (zero mass, K zero on the block of such rows) adds one negative pivot that is no mode.
    With a singular M the count is right when K is definite on the null space of M, multipliers aside.
    """
    rows = find_multipliers(K, M) if multiplier_rows is None else multiplier_rows
    try:
        factor = factorise(K - mu * M, symmetry="indefinite", solver=solver, groups=groups)
    except SolveError as error:
        return CountResult(expected=-1, mu=mu, reliable=False, reason=f"the factorisation failed: {error.got}")
    inertia, name = factor.inertia(), factor.solver
    factor.release()
    return CountResult(
        expected=inertia.negative - len(rows),
        mu=mu,
        reliable=inertia.reliable,
        reason=inertia.reason,
        solver=name,
        negative_pivots=inertia.negative,
        corrections=f"{len(rows)} Lagrange multipliers subtracted" if len(rows) else "",
    )


def find_multipliers(K: Sparse, M: Sparse) -> Ints:
    """Rows that are Lagrange multipliers: no mass, no stiffness among themselves, coupled to the rest."""
    massless = row_sums(M) == 0
    candidates = np.flatnonzero(massless & (K.diagonal() == 0) & (row_sums(K) > 0))
    if candidates.size == 0:
        return candidates
    among = abs(K[candidates][:, candidates])
    return candidates[row_sums(among) == 0]


def row_sums(A: Sparse) -> Real:
    """Sum of absolute values of every row, shape (n,)."""
    return np.asarray(abs(A).sum(axis=1)).ravel()


def gap_above(x: Real, least: int) -> int | None:
    """How many of the ascending x lie below the best counting point that has at least ``least`` below it.

    The first gap wider than a cluster is taken; None when the list ends before one.
    """
    for k in range(max(least, 1), len(x)):
        low, high = x[k - 1], x[k]
        if high - low > CLUSTER_GAP * max(abs(high), abs(low)):
            return k
    return None


def counting_point(x: Real, below: int) -> float:
    """A point in the gap after the first ``below`` of the ascending x: their geometric mean, midway if not positive."""
    low, high = x[below - 1], x[below]
    return float(np.sqrt(low * high) if low > 0.1 * high else (low + high) / 2)
