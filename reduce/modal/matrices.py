"""Tests of sparse matrices with bounded memory: symmetry, definiteness, empty rows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from modesieve.reduce.arrays import Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg import factorise

#: Entries compared at once.
_PIECE = 4_000_000
#: Groups of unknowns up to this size are decided by their eigenvalues.
_SMALL = 600
#: What is added to a diagonal (relative) before signs are counted, so that zero eigenvalues count as positive.
_LIFT = 1e-10


@dataclass(frozen=True, kw_only=True)
class Asymmetry:
    """Largest difference of mirrored entries, relative to the geometric mean of their diagonal entries (or to the
    larger of the two), at (row, column), 0-based; count: pairs that differ by more than 1e-8; triangular: "lower" or
    "upper" where the other triangle is empty."""

    worst: float = 0.0
    row: int = 0
    column: int = 0
    value: float = 0.0
    mirrored: float = 0.0
    count: int = 0
    triangular: str = ""


def asymmetry(A: Sparse) -> Asymmetry:
    """How far the sparse square A is from symmetric; one transposed copy, compared piece by piece."""
    T = A.T.tocsr()
    T.sort_indices()
    same = np.array_equal(A.indptr, T.indptr) and np.array_equal(A.indices, T.indices)
    if same and np.array_equal(A.data, T.data):
        return Asymmetry()
    size = np.sqrt(np.abs(A.diagonal()))
    worst, count = Asymmetry(), 0
    step = max(1, _PIECE * A.shape[0] // max(A.nnz, 1))
    for start in range(0, A.shape[0], step):
        here, several = _piece(A, T, size, start, min(start + step, A.shape[0]))
        worst, count = (here if here.worst > worst.worst else worst), count + several
    return Asymmetry(
        worst=worst.worst,
        row=worst.row,
        column=worst.column,
        value=worst.value,
        mirrored=worst.mirrored,
        count=count // 2,
        triangular=_triangle(A),
    )


def _piece(A: Sparse, T: Sparse, size: Any, start: int, stop: int) -> tuple[Asymmetry, int]:
    rows, mirror = A[start:stop], T[start:stop]
    D = (rows - mirror).tocoo()
    if D.nnz == 0:
        return Asymmetry(), 0
    scale = size[D.row + start] * size[D.col]
    larger = abs(rows).maximum(abs(mirror)).tocsr()[D.row, D.col]
    share = np.abs(D.data) / np.where(np.maximum(scale, larger) > 0, np.maximum(scale, larger), 1.0)
    at = int(np.argmax(share))
    i, j = int(D.row[at]), int(D.col[at])
    found = Asymmetry(worst=float(share[at]), row=i + start, column=j, value=rows[i, j], mirrored=mirror[i, j])
    return found, int(np.count_nonzero(share > 1e-8))


def _triangle(A: Sparse) -> str:
    coo = A.tocoo()
    there = coo.data != 0
    lower, upper = np.any(there & (coo.row > coo.col)), np.any(there & (coo.row < coo.col))
    return "lower" if lower and not upper else "upper" if upper and not lower else ""


def zero_rows(A: Any) -> Any:
    """0-based rows that hold nothing but zeros."""
    return np.flatnonzero(np.asarray(abs(A).sum(axis=1)).ravel() == 0)


massless_rows = zero_rows


def negative_eigenvalues(M: Sparse) -> int:
    """How many eigenvalues of a symmetric M are below 0 (beyond rounding of a semidefinite matrix).

    Diagonal dominance settles most matrices; small groups of coupled unknowns are decided by their eigenvalues, large
    ones by the signs of the pivots of M with a slightly lifted diagonal.
    """
    d = M.diagonal()
    off = np.asarray(abs(M).sum(axis=1)).ravel() - np.abs(d)
    if np.all(d >= off * (1 - 1e-14)):
        return 0
    active = np.flatnonzero((off > 0) | (d != 0))
    A = sp.csr_array(M[active][:, active])
    _, group = connected_components(A, directed=False)
    order = np.argsort(group, kind="stable")
    ends = np.cumsum(np.bincount(group))
    total, large = 0, []
    for start, stop in zip(np.concatenate([[0], ends[:-1]]), ends, strict=True):
        at = order[start:stop]
        if len(at) == 1:
            total += int(A.diagonal()[at[0]] < 0) if len(ends) == 1 else int(d[active[at[0]]] < 0)
        elif len(at) <= _SMALL:
            total += _negative_dense(A[at][:, at].toarray())
        else:
            large.append(at)
    return total + sum(_negative_sparse(sp.csr_array(A[at][:, at])) for at in large)


def _negative_dense(M: Any) -> int:
    size = np.sqrt(np.maximum(np.abs(np.diag(M)), np.abs(M).max() * 1e-12))
    values = np.linalg.eigvalsh(M / size / size[:, None])
    return int(np.count_nonzero(values < -len(M) * 8 * np.finfo(float).eps * np.abs(values).max()))


def _negative_sparse(M: Sparse) -> int:
    d = np.abs(M.diagonal())
    lifted = M + sp.diags_array(_LIFT * np.maximum(d, _LIFT * d.max()))
    try:
        inertia = factorise(sp.csr_array(lifted), symmetry="indefinite").inertia()
    except SolveError:
        return int(np.count_nonzero(M.diagonal() < 0))
    return inertia.negative if inertia.reliable else int(np.count_nonzero(M.diagonal() < 0))


def definiteness(A: Sparse) -> str:
    """In words: positive definite, positive semidefinite, or indefinite with the number of negative eigenvalues."""
    negative = negative_eigenvalues(A)
    if negative == A.shape[0]:
        return "negative definite"
    if negative:
        return f"indefinite: {negative} negative eigenvalue{'s' * (negative > 1)}"
    empty = len(zero_rows(A))
    if empty:
        return f"positive semidefinite: {empty} empty row{'s' * (empty > 1)}"
    return "positive definite" if _regular(A) else "positive semidefinite: singular"


def _regular(A: Sparse) -> bool:
    """True when a solve recovers a known vector, so no eigenvalue is zero."""
    r = np.column_stack([np.ones(A.shape[0]), np.random.default_rng(0).standard_normal(A.shape[0])])
    try:
        x = factorise(A, symmetry="indefinite").solve(A @ r)
    except SolveError:
        return False
    return bool(np.linalg.norm(x - r) <= 1e-4 * np.linalg.norm(r))
