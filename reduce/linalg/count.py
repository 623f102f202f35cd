"""How many eigenvalues of a symmetric pencil lie below a point: Sylvester's law of inertia.

The number of negative eigenvalues of ``K - mu M`` (M semidefinite) grows by one at every eigenvalue that mu passes,
so the number of x < mu is that number less what is there at mu -> -infinity: the negative and the zero eigenvalues
of K restricted to the massless rows (Parlett, The Symmetric Eigenvalue Problem, SIAM 1998, sections 3.3, 15.3).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import Inertia, SolverName, factorise

#: Neighbours closer than this (relative) belong to one cluster; the counting point stays outside.
GAP = 1e-3


@dataclass(frozen=True, kw_only=True)
class CountResult:
    """Number of eigenvalues x < mu. corrections says what was taken off the negative pivots, in words."""

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
    """Number of eigenvalues ``x < mu`` of ``K phi = x M phi`` by the negative pivots of ``K - mu M``.

    K, M (n, n) symmetric, M positive semidefinite; mu in the units of x. multiplier_rows: rows known to hold Lagrange
    multipliers; rows without mass are found anyway. Never raises for a matrix that cannot be counted: says why.

    >>> K = sp.csr_array(np.diag([1.0, 2.0, 5.0]))
    >>> count_below(K, sp.eye_array(3, format="csr"), 3.0, solver="superlu").expected
    2
    """
    try:
        factor = factorise(_shifted(K, M, mu), symmetry="indefinite", solver=solver, groups=groups)
        inertia, name = factor.inertia(), factor.solver
        factor.release()
        offset, words = at_infinity(K, M, solver=solver, multiplier_rows=multiplier_rows)
    except SolveError as error:
        return CountResult(expected=0, mu=mu, reliable=False, reason=error.what)
    reliable = inertia.reliable and offset.reliable
    return CountResult(
        expected=inertia.negative - offset.negative,
        mu=mu,
        reliable=reliable,
        reason=inertia.reason or offset.reason,
        solver=name,
        negative_pivots=inertia.negative,
        corrections=words,
    )


def at_infinity(
    K: Sparse, M: Sparse, *, solver: SolverName = "auto", multiplier_rows: Ints | None = None
) -> tuple[Inertia, str]:
    """Negative pivots that belong to no finite eigenvalue, and where they come from, in words."""
    massless = massless_rows(M)
    if massless.size == 0:
        return Inertia(negative=0, zero=0, positive=0), ""
    K_NN = sp.csr_array(K[massless][:, massless])
    K_NN.eliminate_zeros()
    idle = np.diff(K_NN.indptr) == 0
    multipliers, rest = massless[idle], np.flatnonzero(~idle)
    inertia = _restricted(K_NN[rest][:, rest], solver)
    others = 0 if multiplier_rows is None else int(np.isin(multiplier_rows, massless[rest]).sum())
    total = int(multipliers.size) + inertia.negative + inertia.zero
    parts = [f"{multipliers.size} multiplier rows"] if multipliers.size else []
    if inertia.negative + inertia.zero:
        note = f" ({others} multiplier rows among them)" if others else ""
        parts.append(f"{inertia.negative + inertia.zero} negative pivots of massless unknowns{note}")
    if rest.size and not inertia.negative:
        parts.append(f"{rest.size} massless unknowns, stiffness definite: nothing to take off")
    counted = Inertia(negative=total, zero=0, positive=0, reliable=inertia.reliable, reason=inertia.reason)
    return counted, "; ".join(parts)


def massless_rows(M: Sparse) -> Ints:
    """Rows of M that hold nothing but zeros."""
    return np.flatnonzero(row_sums(M) == 0)


def find_multipliers(K: Sparse, M: Sparse) -> Ints:
    """Rows that are Lagrange multipliers: no mass, no stiffness among themselves, coupled to the rest."""
    candidates = np.flatnonzero((row_sums(M) == 0) & (K.diagonal() == 0) & (row_sums(K) > 0))
    if candidates.size == 0:
        return candidates
    return candidates[row_sums(K[candidates][:, candidates]) == 0]


def row_sums(A: Sparse) -> Real:
    """Sum of absolute values of every row, shape (n,)."""
    return np.asarray(abs(A).sum(axis=1)).ravel()


def gap_above(x: Real, near: float, *, least: float = GAP) -> float:
    """A point above ``near`` in a gap of the ascending list x: the middle of the first gap wider than ``least``
    (relative to its upper end), else of the widest; above the last entry, a little beyond it.

    >>> gap_above(np.array([1.0, 2.0, 2.000001, 4.0]), 2.0)
    3.0000005
    """
    x = np.sort(np.asarray(x, dtype=float))
    above = x[x > near]
    if above.size == 0:
        return near + 1e-2 * abs(near) if near else 1.0
    lower = np.concatenate([[max(near, *x[x <= near][-1:], -np.inf)], above[:-1]])
    width = (above - lower) / np.maximum(np.abs(above), np.abs(lower))
    wide = np.flatnonzero(width > least)
    at = int(wide[0]) if wide.size else int(np.argmax(width))
    return float((lower[at] + above[at]) / 2)


def _restricted(K_NN: Sparse, solver: SolverName) -> Inertia:
    """Inertia of K on the massless rows; a singular block is moved down by rounding, so zeros count as negative."""
    if K_NN.shape[0] == 0:
        return Inertia(negative=0, zero=0, positive=0)
    try:
        found = _inertia(K_NN, solver)
        if found.reliable:
            return found
    except SolveError:
        pass
    size = np.asarray(abs(K_NN).sum(axis=1)).ravel()
    return _inertia(sp.csr_array(K_NN - sp.diags_array(1e-9 * size)), solver)


def _inertia(A: Sparse, solver: SolverName) -> Inertia:
    factor = factorise(A, symmetry="indefinite", solver=solver)
    found = factor.inertia()
    factor.release()
    return found


def _shifted(K: Sparse, M: Sparse, mu: float) -> Sparse:
    return sp.csr_array(K - mu * M) if mu else K
