"""Eigenpairs of a symmetric pencil, complete and counted."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

import numpy as np

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.linalg.count import CountResult, count_below, counting_point, gap_above, row_sums
from modesieve.reduce.linalg.dense_pairs import dense_pairs
from modesieve.reduce.linalg.factor import Factor, SolverName
from modesieve.reduce.linalg.lanczos import BlockLanczos
from modesieve.reduce.linalg.shift import Shifted, shift_and_factor
from modesieve.reduce.progress import Listener, tell

#: A pair has converged when its residual under the operator is below this share of theta; the true one is then checked.
CONVERGED = 1e-10
#: Memory for the basis unless the caller says otherwise.
BASIS_BYTES = 3 * 2**30
#: Models up to this size are solved whole by LAPACK.
ALL_LIMIT = 1000


@dataclass(frozen=True, kw_only=True, eq=False)
class SymmetricPairs:
    """Eigenpairs in ascending x. vectors (n, k) are M-orthonormal; residuals as `residuals` gives them.

    factor: the live factor of ``K - sigma M`` (None after a dense solve). basis: further M-orthonormal Krylov vectors.
    whole: every finite mode is here. negative: eigenvalues below sigma by the pivots of the shifted factor.
    """

    x: Real
    vectors: Real
    residuals: Real
    sigma: float = 0.0
    factor: Factor | None = None
    basis: Real | None = None
    whole: bool = False
    negative: int = 0
    solver: str = ""
    solves: int = 0
    factorisations: int = 0
    seconds: float = 0.0
    status: str = "converged"
    message: str = ""


def residuals(K: Sparse, M: Sparse, x: Real, vectors: Real) -> Real:
    """True relative residuals ``norm(K phi - x M phi) / (norm(K phi) + abs(x) norm(M phi))``, shape (k,).

    Where that denominator is itself rounding (a zero mode), the residual is relative to ``norm(abs(K) abs(phi))``.
    """
    KV, MV = K @ vectors, M @ vectors
    norm = np.linalg.norm
    size = norm(KV, axis=0) + np.abs(x) * norm(MV, axis=0)
    rounding = norm(abs(K) @ np.abs(vectors), axis=0)
    size = np.where(size > 1e3 * np.finfo(float).eps * rounding, size, rounding)
    return norm(KV - MV * x, axis=0) / np.where(size > 0, size, 1.0)


def finite_modes(M: Sparse) -> int:
    """Number of finite eigenvalues that a dense solve must find: the numerical rank of M, scaled to unit diagonal."""
    d = np.sqrt(np.maximum(M.diagonal(), 0.0))
    at = np.flatnonzero(d > 0)
    if np.count_nonzero(M.data) == np.count_nonzero(M.diagonal()):
        return int(at.size)
    scaled = M[at][:, at].toarray() / d[at] / d[at][:, None]
    values = np.linalg.eigvalsh(scaled)
    return int(np.count_nonzero(values > len(at) * 8 * np.finfo(float).eps * values[-1]))


def all_pairs(K: Sparse, M: Sparse) -> SymmetricPairs:
    """Every finite eigenpair of a small pencil."""
    began = time.perf_counter()
    x, vectors = dense_pairs(K, M, finite_modes(M))
    return SymmetricPairs(
        x=x,
        vectors=vectors,
        residuals=residuals(K, M, x, vectors),
        whole=True,
        solver="LAPACK, all modes",
        seconds=time.perf_counter() - began,
    )


def lowest_pairs(
    K: Sparse,
    M: Sparse,
    *,
    count: int | None = None,
    below: float | None = None,
    shifted: Shifted | None = None,
    start: Real | None = None,
    known: SymmetricPairs | None = None,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    seed: int = 0,
    progress: Listener = None,
    memory_bytes: int = BASIS_BYTES,
) -> SymmetricPairs:
    """At least the ``count`` lowest eigenpairs, or all with ``x < below`` and one beyond.

    shifted: a live factor to use, else the shift is chosen and factored here. start (n, s): right-hand sides whose
    solutions begin the first block. known: pairs that are taken in as they are (a second pass looks for what they lack).
    A solve that does not converge returns the converged part with its status.
    """
    began = time.perf_counter()
    made = shifted is None
    if shifted is None:
        shifted = shift_and_factor(K, M, solver=solver, groups=groups, hint=below)
    n, d = K.shape[0], 0 if known is None else len(known.x)
    wanted = count if count is not None else 30 + d
    block = _block_size(n)
    run = BlockLanczos(M, shifted.factor, block, _capacity(n, wanted, block, memory_bytes), seed)
    V = np.zeros((n, 0)) if known is None else known.vectors
    theta = np.zeros(0) if known is None else 1 / (known.x - shifted.sigma)
    run.start(np.zeros((n, 0)) if start is None else _through_mass(start, M, shifted), V, theta)
    converged = _iterate(run, shifted.sigma, count, below, progress)
    pairs = _collect(run, K, shifted, converged)
    return replace(pairs, factorisations=shifted.factorisations if made else 0, seconds=time.perf_counter() - began)


def _through_mass(start: Real, M: Sparse, shifted: Shifted) -> Real:
    """The block to which M is applied first: static solutions (one solve each) rather than the loads themselves."""
    return shifted.factor.solve(start)


def _block_size(n: int) -> int:
    """Eight right-hand sides cost a large factor about as much as two or three single ones (measured)."""
    return max(1, min(8 if n > 2000 else 4, n // 4))


def _capacity(n: int, wanted: int, block: int, memory_bytes: int) -> int:
    """Vectors that fit the allowance; never fewer than a restart needs."""
    need = wanted + 6 * block
    return int(min(n, max(need, min(memory_bytes // (8 * n), 3 * need))))


def _iterate(run: BlockLanczos, sigma: float, count: int | None, below: float | None, progress: Listener) -> bool:
    """Step until the wanted pairs have converged; False when the restarts run out first."""
    for _ in range(60):
        while run.room() and not run.exhausted:
            run.step()
            converged = _leading(run)
            tell(progress, "modes", converged, count or 0, f"{run.solves} solves")
            if _enough(run, converged, sigma, count, below):
                return True
        if run.exhausted:
            return True
        run.restart(run.capacity - 3 * run.block if run.capacity > 6 * run.block else run.capacity // 2)
        if run.size >= run.n:
            return True
    return False


def _leading(run: BlockLanczos) -> int:
    """How many leading Ritz pairs have converged without a gap."""
    theta, _, size = run.ritz()
    open_ = np.flatnonzero(size > CONVERGED * np.abs(theta))
    return int(open_[0]) if open_.size else len(theta)


def _enough(run: BlockLanczos, converged: int, sigma: float, count: int | None, below: float | None) -> bool:
    theta = run.ritz()[0][:converged]
    x = np.sort(sigma + 1 / theta[theta > 0])
    if count is not None and len(x) <= count:
        return False
    least = count if below is None or count is None else max(count, int(np.count_nonzero(x < below)))
    if below is not None and count is None:
        least = int(np.count_nonzero(x < below))
        if least == len(x):
            return False
    return gap_above(x, max(least or 1, 1)) is not None


def _collect(run: BlockLanczos, K: Sparse, shifted: Shifted, converged: bool) -> SymmetricPairs:
    theta, S, _ = run.ritz()
    k = _leading(run)
    vectors = run.vectors(theta[:k], S[:, :k])
    vectors = vectors / run._lengths(vectors)
    order = np.argsort(1 / theta[:k], kind="stable")
    x = (shifted.sigma + 1 / theta[:k])[order]
    vectors = np.asfortranarray(vectors[:, order])
    return SymmetricPairs(
        x=x,
        vectors=vectors,
        residuals=residuals(K, run.M, x, vectors),
        sigma=shifted.sigma,
        factor=shifted.factor,
        basis=run.Q[:, : run.size] @ S[:, k:],
        whole=run.exhausted,
        negative=shifted.negative,
        solver=f"block Lanczos, {shifted.factor.solver}",
        solves=run.solves,
        status="converged" if converged else "not converged",
        message="" if converged else f"{k} pairs converged before the restarts ran out",
    )


# ---- with the count ------------------------------------------------------------------------------------------------


def certified_pairs(
    K: Sparse,
    M: Sparse,
    *,
    count: int | None = None,
    below: float | None = None,
    solver: SolverName = "auto",
    start: Real | None = None,
    groups: Ints | None = None,
    seed: int = 0,
    progress: Listener = None,
    dense_limit: int = ALL_LIMIT,
) -> tuple[SymmetricPairs, CountResult]:
    """The lowest pairs up to a counting point in a gap, and the count there.

    At least ``count`` pairs, or every pair with ``x < below``; the list ends at the counting point ``mu`` and is
    complete when ``count.expected == len(pairs.x)`` and the count is reliable. Models up to ``dense_limit`` unknowns
    are solved whole. On a disagreement a second pass with another random start looks for what is missing.
    """
    if K.shape[0] <= dense_limit:
        pairs = all_pairs(K, M)
        return pairs, _count_all(K, M, pairs)
    pairs = lowest_pairs(
        K, M, count=count, below=below, solver=solver, groups=groups, start=start, seed=seed, progress=progress
    )
    for attempt in range(3):
        if pairs.whole:
            return pairs, _count_all(K, M, pairs)
        cut, result = _cut_and_count(K, M, pairs, count, below, solver, groups, progress)
        if result.expected <= len(cut.x) or attempt == 2 or not result.reliable:
            return cut, result
        pairs = _again(K, M, pairs, count, below, seed + 1 + attempt, progress)
    raise AssertionError("unreachable")


def _cut_and_count(
    K: Sparse,
    M: Sparse,
    pairs: SymmetricPairs,
    count: int | None,
    below: float | None,
    solver: SolverName,
    groups: Ints | None,
    progress: Listener,
) -> tuple[SymmetricPairs, CountResult]:
    """Drop what lies above the counting point; its vectors join the Krylov basis."""
    least = count if count is not None else int(np.count_nonzero(pairs.x < (below or 0.0)))
    kept = gap_above(pairs.x, min(least, len(pairs.x)))
    if kept is None:
        return pairs, CountResult(expected=-1, mu=np.nan, reliable=False, reason="no gap after the computed modes")
    mu = counting_point(pairs.x, kept)
    tell(progress, "count", 0, 1)
    result = count_below(K, M, mu, solver=solver, groups=groups)
    tell(progress, "count", 1, 1)
    rest = pairs.vectors[:, kept:]
    basis = rest if pairs.basis is None else np.hstack([rest, pairs.basis])
    return (
        replace(
            pairs,
            x=pairs.x[:kept],
            vectors=pairs.vectors[:, :kept],
            residuals=pairs.residuals[:kept],
            basis=basis,
            factorisations=pairs.factorisations + 1,
        ),
        result,
    )


def _again(
    K: Sparse, M: Sparse, pairs: SymmetricPairs, count: int | None, below: float | None, seed: int, progress: Listener
) -> SymmetricPairs:
    assert pairs.factor is not None
    shifted = Shifted(factor=pairs.factor, sigma=pairs.sigma, factorisations=0, negative=pairs.negative)
    more = lowest_pairs(
        K, M, count=count, below=below, shifted=shifted, known=replace(pairs), seed=seed, progress=progress
    )
    return replace(
        more,
        solves=pairs.solves + more.solves,
        factorisations=pairs.factorisations + 1,
        seconds=pairs.seconds + more.seconds,
    )


def _count_all(K: Sparse, M: Sparse, pairs: SymmetricPairs) -> CountResult:
    """Where all modes are known their number is the rank of M; nothing needs to be counted."""
    massless = int(np.count_nonzero(row_sums(M) == 0))
    return CountResult(
        expected=len(pairs.x),
        mu=np.inf,
        reliable=True,
        reason="all finite modes",
        solver=pairs.solver,
        corrections=f"{massless} massless unknowns" if massless else "",
    )
