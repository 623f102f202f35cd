"""Eigenpairs with a count: the list is complete below a point, or it says that it is not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.linalg.count import CountResult, count_below, gap_above
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.linalg.lanczos import Goal, Search, SymmetricPairs, _goal
from modesieve.reduce.progress import Listener, tell

#: How often the gap is searched again before the certificate is withdrawn.
PASSES = 3


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
) -> tuple[SymmetricPairs, CountResult]:
    """`lowest_pairs` and a count by Sylvester's law of inertia; every x below the counting point mu is in the list.

    At least ``count`` pairs, or all with ``x < below``, and on to the next gap, in which mu lies. When every finite
    pair is known the count says so (mu is inf). On a disagreement the range is searched again, deflated against what
    is found; if it persists, status is "miscounted" and the count's numbers are left as they are.
    """
    goal = _goal(K, count, below)
    search = Search(K, M, start=start, solver=solver, groups=groups, seed=seed, progress=progress, memory=memory_bytes)
    pairs = search.run(goal, sigma=sigma)
    pairs, mu = _cut(pairs, goal)
    if pairs.status != "converged" or not np.isfinite(mu):
        return pairs, _uncounted(pairs, mu)
    tell(progress, "count", message=f"modes below {mu:.6g}")
    result = count_below(K, M, mu, solver=solver, groups=groups, multiplier_rows=multiplier_rows)
    for attempt in range(PASSES):
        if not result.reliable or len(pairs) >= result.expected:
            break
        pairs = _search_again(search, pairs, mu, result.expected, seed + 1 + attempt)
    return _agree(pairs, result), result


def _cut(pairs: SymmetricPairs, goal: Goal) -> tuple[SymmetricPairs, float]:
    """The list up to the gap that meets the goal, and the counting point in it; inf when everything is known."""
    x = np.append(pairs.x, pairs.next_x) if np.isfinite(pairs.next_x) else pairs.x
    if goal.below is not None:
        near = goal.below
    else:
        near = float(pairs.x[min(goal.count or 1, len(pairs)) - 1]) if len(pairs) else -np.inf
    if not np.any(x > near):
        return pairs, np.inf
    mu = gap_above(x, near)
    return pairs.first(int(np.count_nonzero(pairs.x < mu))), mu


def _uncounted(pairs: SymmetricPairs, mu: float) -> CountResult:
    name = pairs.factor.solver if pairs.factor is not None else ""
    if pairs.status == "converged" and pairs.complete:
        return CountResult(expected=len(pairs), mu=np.inf, reliable=True, reason="every finite mode", solver=name)
    reason = pairs.message or "the list does not end in a gap"
    return CountResult(expected=len(pairs), mu=mu, reliable=False, reason=reason, solver=name)


def _search_again(search: Search, pairs: SymmetricPairs, mu: float, expected: int, seed: int) -> SymmetricPairs:
    more = search.again(Goal(count=expected), pairs, seed)
    return more.first(int(np.count_nonzero(more.x < mu)))


def _agree(pairs: SymmetricPairs, result: CountResult) -> SymmetricPairs:
    if not result.reliable:
        return replace(pairs, status="uncounted", message=f"no count: {result.reason}")
    if len(pairs) == result.expected:
        return pairs
    message = f"{result.expected} modes lie below {result.mu:.6g} and {len(pairs)} were found: no guarantee holds"
    return replace(pairs, status="miscounted", message=message)
