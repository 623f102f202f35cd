"""SuperLU in symmetric mode, ordered by nested dissection on the graph of nodes."""

from __future__ import annotations

from typing import Any

import numpy as np
import pymetis
import scipy.sparse as sp
from scipy.sparse.linalg import splu

from modesieve.reduce.arrays import Ints, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import Inertia, Prediction, Symmetry, residual_of
from modesieve.reduce.linalg.fill import factor_nonzeros
from modesieve.reduce.linalg.memory import free_bytes, in_words

#: SciPy's SuperLU starts with 30 times the nonzeros of A, counted in 32 bits.
FIRST_GUESS = 30
LARGEST = 2**31 - 1
#: A factor without row exchanges is accepted when a test solve's backward error is below this.
ACCEPTED = 1e-11
SYMMETRIC, GENERAL = "SuperLU (nested dissection)", "SuperLU"


class SuperLUFactor:
    """One factorised matrix; symmetric ones keep their pivots on the diagonal if a test solve allows it."""

    def __init__(self, A: Sparse, symmetry: Symmetry, groups: Ints | None = None) -> None:
        check_size(A)
        self.n = int(A.shape[0])
        self.complex = bool(np.issubdtype(A.dtype, np.complexfloating))
        self.symmetric = symmetry != "none"
        self.solver = SYMMETRIC if self.symmetric else GENERAL
        self._order = dissection(A, groups)
        self._inertia: Inertia | None = None
        permuted = _prepare(A, self._order)
        self._sound = True
        if self.symmetric:
            self._factorise_symmetric(A, permuted)
        else:
            self._lu = _lu(permuted, permc_spec="NATURAL", diag_pivot_thresh=0.1)
        self.nonzeros = int(self._lu.nnz)
        self.memory_bytes = (20 if self.complex else 12) * self.nonzeros

    def _factorise_symmetric(self, A: Sparse, permuted: Any) -> None:
        try:
            self._lu = _symmetric_lu(permuted, 0.0)
            self._sound = residual_of(A, self) < ACCEPTED
        except SolveError:
            self._sound = False
        if not self._sound:
            self._lu = _symmetric_lu(permuted, 1.0)

    @property
    def alive(self) -> bool:
        """False after release."""
        return self._lu is not None

    def solve(self, B: Any) -> Any:
        """Solution of ``A X = B``, shape of B kept."""
        B = np.asarray(B)
        if self._lu is None:
            raise SolveError("the factor was released", where=self.solver)
        if np.iscomplexobj(B) and not self.complex:
            return self.solve(B.real) + 1j * self.solve(B.imag)
        kind = np.complex128 if self.complex else np.float64
        X = np.empty(B.shape, dtype=kind, order="F")
        if B.size:
            X[self._order] = self._lu.solve(np.asfortranarray(B[self._order], dtype=kind))
        return X

    def inertia(self) -> Inertia:
        """Signs of diag(U): Sylvester's law holds when no row was exchanged."""
        if not self.symmetric or self.complex:
            return Inertia(negative=0, zero=0, positive=0, reliable=False, reason="not a real symmetric factorisation")
        if self._inertia is None:
            self._inertia = self._count_signs()
        return self._inertia

    def _count_signs(self) -> Inertia:
        kept = self._sound and np.array_equal(self._lu.perm_r, self._lu.perm_c)
        if not kept:
            reason = "rows were exchanged for stability, or the test solve was not accurate"
            return Inertia(negative=0, zero=0, positive=0, reliable=False, reason=reason)
        pivots = self._lu.U.diagonal()
        negative, zero = int(np.count_nonzero(pivots < 0)), int(np.count_nonzero(pivots == 0))
        return Inertia(
            negative=negative,
            zero=zero,
            positive=self.n - negative - zero,
            reliable=zero == 0,
            reason=f"{zero} pivots are zero" if zero else "",
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


def predict_superlu(A: Sparse, symmetry: Symmetry, groups: Ints | None) -> Prediction:
    """Fill of L and U in the order that would be used; exact for L of a symmetric pattern, less SuperLU's padding."""
    graph = node_graph(A, groups)
    nonzeros = 2 * factor_nonzeros(*graph) - A.shape[0]
    free = free_bytes()
    memory = (20 if np.issubdtype(A.dtype, np.complexfloating) else 12) * nonzeros
    reasons = [
        f"needs {in_words(memory)}, {in_words(free)} are free" if memory > free else "",
        f"{A.nnz:,} nonzeros are too many for 32-bit sizes" if FIRST_GUESS * A.nnz > LARGEST else "",
        "the factor is too large for 32-bit sizes" if nonzeros > LARGEST else "",
    ]
    reason = "; ".join(r for r in reasons if r)
    return Prediction(
        solver=SYMMETRIC if symmetry != "none" else GENERAL,
        nonzeros=nonzeros,
        memory_bytes=memory,
        free_bytes=free,
        label="estimate",
        fits=not reason,
        reason=reason,
    )


def node_graph(A: Sparse, groups: Ints | None) -> tuple[Any, Ints, Ints]:
    """The symmetric graph of nodes without loops (CSR), the number of rows of every node, and the nodes' order."""
    graph, member = _graph(A, groups)
    return graph, np.bincount(member, minlength=graph.shape[0]), _node_order(graph)


def dissection(A: Sparse, groups: Ints | None = None) -> Ints:
    """Nested-dissection order of the rows, shape (n,); rows of one group stay together.

    A row with a zero diagonal (a multiplier) comes after its neighbours, so that its pivot is not zero.
    """
    graph, member = _graph(A, groups)
    place = np.empty(graph.shape[0])
    place[_node_order(graph)] = np.arange(graph.shape[0])
    key = place[member]
    late = np.flatnonzero(A.diagonal() == 0)
    if late.size:
        key = _after_neighbours(sp.csr_array(A), key, late)
    return np.argsort(key, kind="stable")


def _after_neighbours(A: Sparse, key: Any, late: Ints) -> Any:
    ordinary = np.ones(len(key), dtype=bool)
    ordinary[late] = False
    out = key.copy()
    for row in late:
        neighbours = A.indices[A.indptr[row] : A.indptr[row + 1]]
        out[row] = np.max(key[neighbours[ordinary[neighbours]]], initial=key[row]) + 0.5
    return out


def _graph(A: Sparse, groups: Ints | None) -> tuple[Any, Ints]:
    n = A.shape[0]
    member = np.arange(n) if groups is None else np.unique(np.asarray(groups), return_inverse=True)[1]
    nodes = int(member.max()) + 1
    A = sp.csr_array(A)
    rows, columns = np.repeat(member, np.diff(A.indptr)), member[A.indices]
    off = rows != columns
    ones = np.ones(int(np.count_nonzero(off)), dtype=bool)  # bool: summing duplicates cannot overflow
    half = sp.csr_array((ones, (rows[off], columns[off])), shape=(nodes, nodes))
    return sp.csr_array(half + half.T), member


def _node_order(graph: Any) -> Ints:
    if graph.nnz == 0:
        return np.arange(graph.shape[0])
    order, _ = pymetis.nested_dissection(adjacency=pymetis.CSRAdjacency(graph.indptr, graph.indices))
    return np.asarray(order, dtype=np.int64)


def _prepare(A: Sparse, order: Ints) -> Any:
    """The permuted matrix as CSC with the 32-bit indices that SuperLU takes."""
    A = sp.csr_array(A)
    # Indexing sorts the rows of its operand in place, and that may be the caller's matrix.
    P = (A if A.has_sorted_indices else A.sorted_indices())[order][:, order].tocsc()
    P.sort_indices()
    return sp.csc_array((P.data, P.indices.astype(np.int32), P.indptr.astype(np.int32)), shape=P.shape)


def _symmetric_lu(A: Any, threshold: float) -> Any:
    return _lu(A, permc_spec="NATURAL", diag_pivot_thresh=threshold, options={"SymmetricMode": True})


def _lu(A: Any, *, permc_spec: str, diag_pivot_thresh: float, options: dict[str, Any] | None = None) -> Any:
    try:
        return splu(A, permc_spec=permc_spec, diag_pivot_thresh=diag_pivot_thresh, options=options or {})
    except (RuntimeError, MemoryError) as error:
        singular = "singular" in str(error)
        raise SolveError(
            "the matrix is singular" if singular else "SuperLU ran out of memory",
            got=str(error),
            where=f"{A.shape[0]} unknowns, {A.nnz} nonzeros",
            remedy="" if singular else "install the extra 'fast' (PARDISO, x86-64)",
        ) from error
