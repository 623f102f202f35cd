"""The low end of ``K phi = x M phi``, K symmetric, M symmetric positive semidefinite, by shift-invert block Lanczos.

Grimes, Lewis and Simon, SIAM J. Matrix Anal. Appl. 15 (1994) 228-272: the operator ``(K - sigma M)^-1 M`` is symmetric
in the M inner product and its largest eigenvalues ``1/(x - sigma)`` belong to the modes nearest the shift. Blocks, full
reorthogonalisation and a thick restart (Wu and Simon, SIAM J. Matrix Anal. Appl. 22 (2000) 602-616).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from modesieve.reduce.arrays import DENSE_LIMIT, Ints, Real, Sparse
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.linalg.count import CountResult, count_below, gap_above
from modesieve.reduce.linalg.factor import Factor, SolverName
from modesieve.reduce.linalg.goal import Goal
from modesieve.reduce.linalg.pairs import SymmetricPairs
from modesieve.reduce.linalg.search import BLOCK_COUNTED, Search, refuse_too_many
from modesieve.reduce.progress import Listener, tell

#: Up to this many unknowns every pair is computed densely.
SMALL = 300
#: How often the gap is searched again, and how often another counting point is tried, before the count is given up.
PASSES = 3


def lowest_pairs(
    K: Sparse,
    M: Sparse,
    *,
    count: int | None = None,
    below: float | None = None,
    sigma: float | None = None,
    start: Real | None = None,
    factor: Factor | None = None,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    seed: int = 0,
    progress: Listener = None,
    memory_bytes: int | None = None,
) -> SymmetricPairs:
    """The ``count`` lowest eigenpairs, or all with ``x < below``, of ``K phi = x M phi``.

    K, M (n, n) symmetric sparse, M positive semidefinite (massless unknowns), K may be singular (rigid bodies) or
    indefinite (unstable modes, multiplier rows). sigma: the shift, chosen here if None (0 for supported bodies,
    slightly negative for free ones); factor: a live factor of ``K - sigma M``. start (n, m): loads, whose modes
    converge first. What has converged is returned with a status when the work is interrupted or does not converge.

    Raises SolveError when no factorisation succeeds, ChoiceError for more pairs than unknowns.

    >>> import scipy.sparse as sp
    >>> K = sp.diags_array([2.0, 1.0, 3.0], format="csr")
    >>> lowest_pairs(K, sp.eye_array(3, format="csr"), count=2, solver="superlu").x.round(12).tolist()
    [1.0, 2.0]
    """
    goal = Goal(count=count, below=below)
    search = Search(K, M, start=start, solver=solver, groups=groups, seed=seed, progress=progress, memory=memory_bytes)
    if factor is not None:
        search.use(factor, sigma or 0.0)
    elif sigma is not None:
        search.shift(sigma)
    pairs = search.run_dense() if _is_dense(search.n, goal, SMALL) else search.run(goal)
    return pairs.first(int(np.count_nonzero(pairs.x < below)) if below is not None else count or len(pairs))


def all_pairs(K: Sparse, M: Sparse, *, solver: SolverName = "auto") -> SymmetricPairs:
    """Every finite eigenpair of a small pencil, densely."""
    return Search(K, M, solver=solver).run_dense()


def certified_pairs(
    K: Sparse,
    M: Sparse,
    *,
    count: int | None = None,
    below: float | None = None,
    sigma: float | None = None,
    start: Real | None = None,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    multiplier_rows: Ints | None = None,
    seed: int = 0,
    progress: Listener = None,
    memory_bytes: int | None = None,
    dense_limit: int | None = None,
) -> tuple[SymmetricPairs, CountResult]:
    """`lowest_pairs` and a count by Sylvester's law of inertia; every x below the counting point mu is in the list.

    At least ``count`` pairs and all with ``x < below``, on to the next gap, in which mu lies. When every finite pair is
    known the count says so (mu is inf). On a disagreement the range is searched again, deflated against what is found;
    if it persists, status is "miscounted" and the count's numbers are left as they are. dense_limit: models up to this
    size are solved whole by LAPACK and returned whole.
    """
    goal = Goal(count=count, below=below)
    search = Search(
        K, M, start=start, solver=solver, groups=groups, seed=seed, progress=progress, memory=memory_bytes,
        block=BLOCK_COUNTED,
    )  # fmt: skip
    if sigma is not None:
        search.shift(sigma)
    if search.n <= (dense_limit or 0) or goal.everything:
        _refuse_large(search.n, goal)
        pairs = search.run_dense()
        return pairs, _uncounted(pairs, np.inf)
    refuse_too_many(count, search.n)
    pairs, mu = _cut(search.run_dense() if _is_dense(search.n, goal, SMALL) else search.run(goal), goal)
    if pairs.status != "converged" or not np.isfinite(mu):
        return pairs, _uncounted(pairs, mu)
    tell(progress, "count", 0, 1, f"modes below {mu:.6g}")
    result = _count(K, M, pairs, mu, solver, groups, multiplier_rows)
    for attempt in range(PASSES):
        if not result.reliable or len(pairs) >= result.expected:
            break
        pairs = _search_again(search, pairs, result, seed + 1 + attempt)
    tell(progress, "count", 1, 1)
    return _agree(replace(pairs, factorisations=pairs.factorisations + 1), result), result


def _is_dense(n: int, goal: Goal, limit: int) -> bool:
    return n <= limit or (n <= DENSE_LIMIT and (goal.count or 0) > n // 5)


def _refuse_large(n: int, goal: Goal) -> None:
    if goal.everything and n > DENSE_LIMIT:
        raise ChoiceError(
            "all modes of a model of this size cannot be computed",
            expected=f"a count or a limit for more than {DENSE_LIMIT} unknowns",
            got=f"{n} unknowns",
        )


def _cut(pairs: SymmetricPairs, goal: Goal) -> tuple[SymmetricPairs, float]:
    """The list up to the gap that meets the goal, and the counting point in it; inf when everything is known."""
    x = np.append(pairs.x, pairs.next_x) if np.isfinite(pairs.next_x) else pairs.x
    near = goal.near(pairs.x)
    if not np.any(x > near):
        return pairs, np.inf
    mu = gap_above(x, near)
    return pairs.first(int(np.count_nonzero(pairs.x < mu))), mu


def _count(
    K: Sparse, M: Sparse, pairs: SymmetricPairs, mu: float, solver: SolverName, groups: Ints | None, rows: Ints | None
) -> CountResult:
    """The count at mu, or elsewhere in the same gap where a pivot happens to vanish there."""
    result = count_below(K, M, mu, solver=solver, groups=groups, multiplier_rows=rows)
    low = float(pairs.x[-1]) if len(pairs) else mu - abs(mu)
    for share in (0.381966, 0.763932)[: 0 if result.reliable else PASSES]:
        other = count_below(K, M, low + share * (mu - low), solver=solver, groups=groups, multiplier_rows=rows)
        if other.reliable:
            return other
    return result


def _uncounted(pairs: SymmetricPairs, mu: float) -> CountResult:
    if pairs.status == "converged" and pairs.complete:
        return CountResult(
            expected=len(pairs), mu=np.inf, reliable=True, reason="all finite modes", solver=pairs.solver
        )
    reason = pairs.message or "the list does not end in a gap"
    return CountResult(expected=len(pairs), mu=mu, reliable=False, reason=reason, solver=pairs.solver)


def _search_again(search: Search, pairs: SymmetricPairs, result: CountResult, seed: int) -> SymmetricPairs:
    more = search.again(Goal(count=result.expected), pairs, seed)
    return more.first(int(np.count_nonzero(more.x < result.mu)))


def _agree(pairs: SymmetricPairs, result: CountResult) -> SymmetricPairs:
    if not result.reliable:
        return replace(pairs, status="uncounted", message=f"no count: {result.reason}")
    if len(pairs) == result.expected:
        return pairs
    message = f"{result.expected} modes lie below {result.mu:.6g} and {len(pairs)} were found: no guarantee holds"
    return replace(pairs, status="miscounted", message=message)
