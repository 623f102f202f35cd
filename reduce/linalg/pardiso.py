"""PARDISO inside MKL, called directly: the matrix is handed over once and never hashed again.

pypardiso finds and loads the library; its own class hashes the matrix at every solve and takes real matrices only.
"""

from __future__ import annotations

import ctypes
import sys
from functools import cache
from importlib.metadata import PackageNotFoundError, distribution, version
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import Inertia, Prediction, Symmetry
from modesieve.reduce.linalg.memory import free_bytes, in_words

ANALYSE, FACTORISE, SOLVE, RELEASE = 11, 22, 33, -1
NAME = "PARDISO (MKL)"
MATRIX_TYPE = {
    ("definite", False): 2,
    ("indefinite", False): -2,
    ("none", False): 11,
    ("definite", True): 6,
    ("indefinite", True): 6,
    ("none", True): 13,
}
MEANING = {
    -1: "inconsistent input",
    -2: "not enough memory",
    -3: "reordering failed",
    -4: "zero pivot: the matrix is singular, or not definite where it should be",
    -7: "diagonal matrix is singular",
    -8: "32-bit integers overflow",
    -9: "not enough memory",
}


@cache
def _pardiso() -> Any:
    """The library's routine, None where it cannot be loaded."""
    library = _from_wheel() or _from_pypardiso()
    if library is None:
        return None
    routine = library["pardiso"]  # by item: an own object with own argument types
    routine.argtypes = [ctypes.c_void_p] * 16
    routine.restype = None
    return routine


def _from_wheel() -> Any:
    """MKL from the files of its installed package: pypardiso walks the whole Python installation for it (a second)."""
    try:
        version("pypardiso")
        found = [f for f in distribution("mkl").files or () if f.name.startswith(("libmkl_rt.so", "mkl_rt."))]
        return ctypes.CDLL(str(found[0].locate())) if found else None
    except (PackageNotFoundError, OSError):
        return None


def _from_pypardiso() -> Any:
    try:
        from pypardiso import PyPardisoSolver

        return PyPardisoSolver().libmkl
    except (ImportError, OSError, AttributeError):
        return None


def pardiso_available() -> bool:
    """True when pypardiso and MKL are installed."""
    return _pardiso() is not None


class PardisoFactor:
    """One factorised matrix inside MKL. Symmetric matrices hand over their upper triangle, diagonal always stored."""

    def __init__(self, A: Sparse, symmetry: Symmetry) -> None:
        self._open(A, symmetry)
        self._factorise()
        if self.mtype == -2 and self.perturbed:
            self._again_with_matching()

    @classmethod
    def analysed(cls, A: Sparse, symmetry: Symmetry) -> PardisoFactor:
        """Ordering and symbolic factorisation only; for predictions."""
        self = cls.__new__(cls)
        self._open(A, symmetry)
        return self

    def _open(self, A: Sparse, symmetry: Symmetry) -> None:
        self.n = int(A.shape[0])
        self.solver = NAME
        self._complex = bool(np.issubdtype(A.dtype, np.complexfloating))
        self.mtype = MATRIX_TYPE[symmetry, self._complex]
        self._pt = np.zeros(64, dtype=np.int64)
        self._iparm = _parameters(symmetry)
        self._A = _arrays(A, upper=self.mtype not in (11, 13))
        self._alive = True
        self._analyse()

    def _analyse(self) -> None:
        self._call(ANALYSE)
        # the counts come back as signed 32-bit integers and may have wrapped once
        self.nonzeros = int(np.uint32(self._iparm[17].view(np.uint32)))
        self.memory_bytes = 1024 * int(max(self._iparm[14], int(self._iparm[15]) + int(self._iparm[16])))

    def _factorise(self) -> None:
        free = free_bytes()
        if self.memory_bytes > free:
            self.release()
            raise SolveError(
                "the factorisation would not fit into memory",
                expected=f"about {in_words(self.memory_bytes)} (the solver's own analysis)",
                got=f"{in_words(free)} free",
                where=f"{self.n} unknowns, {NAME}",
                remedy="use a machine with more memory, or a coarser model",
            )
        self._call(FACTORISE)
        self.perturbed = int(self._iparm[13])

    def _again_with_matching(self) -> None:
        # Zero diagonals (multiplier rows): a symmetric weighted matching finds 2 x 2 pivots. Scaling and matching are
        # congruences, so the signs still count. Not the default: it orders worse.
        self._call(RELEASE)
        self._pt[:] = 0
        self._iparm = _parameters("indefinite")
        self._iparm[10] = self._iparm[12] = 1
        self._analyse()
        self._factorise()

    @property
    def alive(self) -> bool:
        """False after release."""
        return self._alive

    def solve(self, B: Any) -> Any:
        """Solution of ``A X = B``, shape of B kept, columns contiguous."""
        B = np.asarray(B)
        if np.iscomplexobj(B) and not self._complex:
            return _by_parts(self.solve, B)
        rhs = np.asfortranarray(B, dtype=np.complex128 if self._complex else np.float64)
        X = np.zeros_like(rhs, order="F")
        if rhs.size:
            self._call(SOLVE, rhs, X)
        if not np.isfinite(X.sum()):
            raise SolveError("the solver returned values that are not numbers", where=self.solver)
        return X

    def inertia(self) -> Inertia:
        """Pivot signs as PARDISO counts them; reliable only if no pivot had to be perturbed."""
        if self.mtype == 2:
            return Inertia(negative=0, zero=0, positive=self.n)
        if self.mtype != -2:
            return Inertia(negative=0, zero=0, positive=0, reliable=False, reason="not a real symmetric factorisation")
        positive, negative = int(self._iparm[21]), int(self._iparm[22])
        zero = self.n - positive - negative
        reason = f"{self.perturbed} pivots were perturbed" if self.perturbed else ""
        reason = reason or (f"{zero} pivots are zero" if zero else "")
        return Inertia(negative=negative, zero=zero, positive=positive, reliable=not reason, reason=reason)

    def release(self) -> None:
        """Free MKL's memory."""
        if self._alive:
            self._alive = False
            self._call(RELEASE)
            self._A = (self._A[0], self._A[1][:0], self._A[2][:0])

    def __del__(self) -> None:
        if getattr(self, "_alive", False) and not sys.is_finalizing():
            self.release()

    def _call(self, phase: int, B: Any = None, X: Any = None) -> None:
        if phase == SOLVE and not self._alive:
            raise SolveError("the factor was released", where=self.solver)
        indptr, indices, data = self._A
        columns = 1 if B is None or B.ndim == 1 else B.shape[1]
        error = ctypes.c_int32(0)
        integers = [ctypes.c_int32(v) for v in (1, 1, self.mtype, phase, self.n, columns, 0)]
        maxfct, mnum, mtype, phase_, n, nrhs, silent = (ctypes.addressof(v) for v in integers)
        unused = np.zeros(1)
        b, x = (unused if V is None else V for V in (B, X))
        _pardiso()(
            self._pt.ctypes.data, maxfct, mnum, mtype, phase_, n, data.ctypes.data, indptr.ctypes.data,
            indices.ctypes.data, unused.ctypes.data, nrhs, self._iparm.ctypes.data, silent,
            b.ctypes.data, x.ctypes.data, ctypes.addressof(error),
        )  # fmt: skip
        if error.value and phase != RELEASE:
            if phase != SOLVE:
                self.release()
            raise SolveError(
                "the PARDISO factorisation failed" if phase != SOLVE else "the PARDISO solve failed",
                got=f"error {error.value}: {MEANING.get(error.value, 'see the MKL manual')}",
                where=f"{self.n} unknowns",
            )


def predict_pardiso(A: Sparse, symmetry: Symmetry) -> Prediction:
    """PARDISO's own symbolic analysis of A."""
    analysed = PardisoFactor.analysed(A, symmetry)
    nonzeros, memory = analysed.nonzeros, analysed.memory_bytes
    analysed.release()
    free = free_bytes()
    fits = memory <= free
    reason = "" if fits else f"needs {in_words(memory)}, {in_words(free)} are free"
    label = "from the solver's own analysis"
    return Prediction(
        solver=NAME, nonzeros=nonzeros, memory_bytes=memory, free_bytes=free, label=label, fits=fits, reason=reason
    )


def _by_parts(solve: Any, B: Any) -> Any:
    """A complex right-hand side of a real matrix: real and imaginary part side by side in one real block."""
    columns = B.reshape(len(B), -1)
    k = columns.shape[1]
    both = solve(np.concatenate([columns.real, columns.imag], axis=1))
    return (both[:, :k] + 1j * both[:, k:]).reshape(B.shape)


def _parameters(symmetry: Symmetry) -> Any:
    iparm = np.zeros(64, dtype=np.int32)
    iparm[0] = 1  # no defaults
    iparm[1] = 2  # nested dissection
    iparm[9] = 13  # a pivot below 1e-13 of the matrix is perturbed (8, the default, gives up digits of stiff models)
    iparm[10] = iparm[12] = 1 if symmetry == "none" else 0  # scaling and matching
    iparm[17] = -1  # report nonzeros
    iparm[20] = 1  # 1 x 1 and 2 x 2 pivots
    iparm[34] = 1  # indices from 0
    return iparm


def _arrays(A: Sparse, *, upper: bool) -> tuple[Any, Any, Any]:
    A = _upper_with_diagonal(sp.csr_array(A)) if upper else _with_diagonal(sp.csr_array(A))
    if not A.has_sorted_indices:
        A = A.sorted_indices()
    if A.nnz >= 2**31 - 1:
        raise SolveError("the matrix is too large for 32-bit indices", got=f"{A.nnz} nonzeros")
    kind = np.complex128 if np.issubdtype(A.dtype, np.complexfloating) else np.float64
    return A.indptr.astype(np.int32), A.indices.astype(np.int32), np.ascontiguousarray(A.data, dtype=kind)


def _upper_with_diagonal(A: Sparse) -> Sparse:
    return _with_diagonal(sp.csr_array(sp.triu(A, format="csr")))


def _with_diagonal(A: Sparse) -> Sparse:
    """The same matrix with every diagonal entry stored, zeros too (PARDISO must not miss one)."""
    rows = np.repeat(np.arange(A.shape[0]), np.diff(A.indptr))
    missing = np.ones(A.shape[0], dtype=bool)
    missing[rows[rows == A.indices]] = False
    at = np.flatnonzero(missing)
    if at.size == 0:
        return A
    data = np.concatenate([A.data, np.zeros(at.size, dtype=A.dtype)])
    index = (np.concatenate([rows, at]), np.concatenate([A.indices, at]))
    return sp.csr_array(sp.coo_array((data, index), shape=A.shape))
