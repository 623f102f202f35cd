"""Eigenpairs of a symmetric pencil as requested, with the proof that none is missing."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import DENSE_LIMIT, Ints, Real, Sparse
from modesieve.reduce.linalg import CountResult, SymmetricPairs, certified_pairs, count_below
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.modal.records import Certificate
from modesieve.reduce.modal.request import WHOLE_LIMIT, Request, too_many
from modesieve.reduce.progress import Listener


@dataclass(frozen=True, kw_only=True, eq=False)
class Certified:
    """Pairs up to the counting point and their certificate (below_omega still in units of x)."""

    pairs: SymmetricPairs
    certificate: Certificate


def find_pairs(
    K: Sparse,
    M: Sparse,
    wanted: Request,
    edge_x: float | None,
    *,
    start: Real | None = None,
    groups: Ints | None = None,
    solver: SolverName = "auto",
    seed: int = 0,
    progress: Listener = None,
) -> Certified:
    """The pairs that ``wanted`` asks for; edge_x: its edge as an eigenvalue x.

    Raises ChoiceError for more modes than exist.
    """
    n = K.shape[0]
    everything = wanted.wants_all or (wanted.count is None and n <= WHOLE_LIMIT)
    count = n if everything else wanted.count
    below = None if count is not None else edge_x
    pairs, counted = certified_pairs(
        K, M, count=count, below=below, start=start, groups=groups, solver=solver, seed=seed, progress=progress
    )
    if wanted.count is not None and pairs.complete and len(pairs.x) < wanted.count:
        raise too_many(wanted.count, len(pairs.x))
    if pairs.status == "converged" and np.isinf(counted.mu):
        return Certified(pairs=pairs, certificate=_all(K, M, pairs, solver))
    return Certified(pairs=pairs, certificate=_counted(counted, pairs))


def finite_modes(K: Sparse, M: Sparse, pairs: SymmetricPairs, solver: SolverName) -> int:
    """How many finite eigenvalues there are, told independently of the list.

    The numerical rank of M, scaled to unit diagonal, for small pencils; for large ones the count just above the list.
    """
    d = np.sqrt(np.maximum(M.diagonal(), 0.0))
    at = np.flatnonzero(d > 0)
    if np.count_nonzero(M.data) == np.count_nonzero(M.diagonal()):
        return int(at.size)
    if M.shape[0] > DENSE_LIMIT:
        return count_below(K, M, 2 * float(np.abs(pairs.x).max(initial=1.0)), solver=solver).expected
    scaled = M[at][:, at].toarray() / d[at] / d[at][:, None]
    values = np.linalg.eigvalsh(scaled)
    return int(np.count_nonzero(values > 8 * len(at) * np.finfo(float).eps * values[-1]))


def _all(K: Sparse, M: Sparse, pairs: SymmetricPairs, solver: SolverName) -> Certificate:
    found, expected = len(pairs.x), finite_modes(K, M, pairs, solver)
    reason = "every finite mode: as many as the rank of the mass (capacity) matrix"
    if expected != found:
        reason = f"{expected} finite modes exist by the rank of the mass (capacity) matrix, {found} were found"
    return Certificate(
        complete="all" if expected == found else "no",
        expected=expected,
        found=found,
        shift=pairs.sigma,
        solver=_name(pairs),
        reason=reason,
    )


def _counted(counted: CountResult, pairs: SymmetricPairs) -> Certificate:
    """Complete when the inertia count at the counting point equals the length of the list."""
    found = int(np.count_nonzero(pairs.x < counted.mu))
    agrees = pairs.status == "converged" and counted.reliable and counted.expected == found == len(pairs.x)
    reason = "inertia count" + (f", {counted.corrections}" if counted.corrections else "")
    if counted.reliable and counted.expected != found:
        reason = f"the inertia count gives {counted.expected} modes below the counting point, {found} were found"
    elif not agrees:
        reason = pairs.message or f"the count cannot be trusted: {counted.reason}"
    return Certificate(
        complete="counted" if agrees else "no",
        below_omega=counted.mu if agrees else None,
        expected=counted.expected if counted.reliable else None,
        found=found,
        negative_pivots=counted.negative_pivots,
        shift=pairs.sigma,
        solver=counted.solver or _name(pairs),
        reason=reason,
    )


def _name(pairs: SymmetricPairs) -> str:
    return str(pairs.factor.solver) if pairs.factor is not None else ""
