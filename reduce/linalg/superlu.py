"""SuperLU in symmetric mode, ordered by nested dissection on the graph of nodes."""

from __future__ import annotations

from typing import Any

import numpy as np
import pymetis
import scipy.sparse as sp
from scipy.sparse.linalg import splu

from modesieve.reduce.arrays import Ints, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import Inertia, Symmetry, residual_of

#: SciPy's SuperLU starts with 30 times the nonzeros of A, counted in 32 bits.
FIRST_GUESS = 30
LARGEST = 2**31 - 1
#: A factor without row exchanges is accepted when a test solve's backward error is below this.
ACCEPTED = 1e-11


class SuperLUFactor:
    """One factorised matrix; symmetric ones keep their pivots on the diagonal if a test solve allows it."""

    def __init__(self, A: Sparse, symmetry: Symmetry, groups: Ints | None = None) -> None:
        check_size(A)
        self.n = int(A.shape[0])
        self.complex = bool(np.issubdtype(A.dtype, np.complexfloating))
        self.symmetric = symmetry != "none"
        self.solver = "SuperLU (nested dissection)" if self.symmetric else "SuperLU"
        self._order = dissection(A, groups) if self.symmetric else np.arange(self.n)
        permuted = _prepare(A, self._order)
        self._lu = _symmetric_lu(permuted, 0.0) if self.symmetric else _lu(permuted, permc_spec="COLAMD")
        if self.symmetric and not residual_of(A, self) < ACCEPTED:
            self._lu = _symmetric_lu(permuted, 1.0)
        self.nonzeros = int(self._lu.nnz)
        self.memory_bytes = (20 if self.complex else 12) * self.nonzeros

    def solve(self, B: Any) -> Any:
        """Solution of ``A X = B``, shape of B kept."""
        if np.iscomplexobj(B) and not self.complex:
            return self.solve(B.real) + 1j * self.solve(B.imag)
        kind = np.complex128 if self.complex else np.float64
        X = np.empty(B.shape, dtype=kind)
        X[self._order] = self._lu.solve(np.ascontiguousarray(B[self._order], dtype=kind))
        return X

    def inertia(self) -> Inertia:
        """Signs of diag(U): Sylvester's law holds when no row was exchanged."""
        if not self.symmetric or self.complex:
            return Inertia(negative=0, zero=0, positive=0, reliable=False, reason="not a real symmetric factorisation")
        pivots = self._lu.U.diagonal()
        kept = np.array_equal(self._lu.perm_r, self._lu.perm_c)
        negative, zero = int(np.count_nonzero(pivots < 0)), int(np.count_nonzero(pivots == 0))
        return Inertia(
            negative=negative,
            zero=zero,
            positive=self.n - negative - zero,
            reliable=kept and zero == 0,
            reason="" if kept else "rows were exchanged for stability",
        )

    def release(self) -> None:
        """Give the memory back."""
        self._lu = None


def check_size(A: Sparse) -> None:
    """Refuse what SciPy's SuperLU cannot hold. Raises SolveError."""
    if FIRST_GUESS * A.nnz > LARGEST:
        raise SolveError(
            "the matrix is too large for SuperLU inside SciPy",
            expected=f"at most {LARGEST // FIRST_GUESS:,} nonzeros (32-bit sizes)",
            got=f"{A.nnz:,} nonzeros",
            remedy="install the extra 'fast' (PARDISO, x86-64)",
        )


def dissection(A: Sparse, groups: Ints | None = None) -> Ints:
    """Nested-dissection order of the rows, shape (n,); rows of one group stay together."""
    pattern = sp.csr_array((np.ones(A.nnz, dtype=np.int8), A.indices, A.indptr), shape=A.shape)
    n = A.shape[0]
    if groups is None:
        groups = np.arange(n)
    _, groups = np.unique(groups, return_inverse=True)
    nodes = int(groups.max()) + 1
    coo = pattern.tocoo()
    rows, columns = groups[coo.row], groups[coo.col]
    off = rows != columns
    rows, columns = np.concatenate([rows[off], columns[off]]), np.concatenate([columns[off], rows[off]])
    graph = sp.csr_array((np.ones(len(rows), dtype=np.int8), (rows, columns)), shape=(nodes, nodes))
    if graph.nnz == 0:
        return np.argsort(groups, kind="stable")
    _, place = pymetis.nested_dissection(adjacency=pymetis.CSRAdjacency(graph.indptr, graph.indices))
    return np.argsort(np.asarray(place)[groups], kind="stable")


def _prepare(A: Sparse, order: Ints) -> Any:
    """The permuted matrix as CSC with the 32-bit indices that SuperLU takes."""
    P = sp.csr_array(A)[order][:, order].tocsc()
    P.sort_indices()
    return sp.csc_array((P.data, P.indices.astype(np.int32), P.indptr.astype(np.int32)), shape=P.shape)


def _symmetric_lu(A: Any, threshold: float) -> Any:
    return _lu(A, permc_spec="NATURAL", diag_pivot_thresh=threshold, options={"SymmetricMode": True})


def _lu(A: Any, **settings: Any) -> Any:
    try:
        return splu(A, **settings)
    except (RuntimeError, MemoryError) as error:
        singular = "singular" in str(error)
        raise SolveError(
            "the matrix is singular" if singular else "SuperLU ran out of memory",
            got=str(error),
            where=f"{A.shape[0]} unknowns, {A.nnz} nonzeros",
            remedy="" if singular else "install the extra 'fast' (PARDISO, x86-64)",
        ) from error
