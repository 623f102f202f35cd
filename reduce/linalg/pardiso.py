"""PARDISO through pypardiso's loaded library, called directly: the matrix is handed over once, not hashed per solve."""

from __future__ import annotations

import ctypes
import sys
from functools import cache
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import Inertia, Symmetry

ANALYSE, FACTORISE, SOLVE, RELEASE = 11, 22, 33, -1
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
    -9: "not enough memory",
}


@cache
def _library() -> Any:
    """pypardiso's handle on the MKL library, None where it cannot be loaded."""
    try:
        from pypardiso import PyPardisoSolver

        return PyPardisoSolver()
    except (ImportError, OSError):
        return None


def pardiso_available() -> bool:
    """True when pypardiso and MKL are installed."""
    return _library() is not None


class PardisoFactor:
    """One factorised matrix inside MKL. Symmetric matrices hand over their upper triangle, diagonal always stored."""

    def __init__(self, A: Sparse, symmetry: Symmetry) -> None:
        self.n = int(A.shape[0])
        self._complex = np.issubdtype(A.dtype, np.complexfloating)
        self.mtype = MATRIX_TYPE[symmetry, self._complex]
        self.solver = "PARDISO (MKL)"
        self._pt = np.zeros(64, dtype=np.int64)
        self._iparm = _parameters(symmetry)
        self._A = _one_based(A, upper=self.mtype not in (11, 13))
        self._alive = True
        self._call(ANALYSE)
        self._call(FACTORISE)
        self.nonzeros = int(self._iparm[17])
        self.memory_bytes = 1024 * int(max(self._iparm[14], self._iparm[15] + self._iparm[16]))
        self.perturbed = int(self._iparm[13])

    def solve(self, B: Any) -> Any:
        """Solution of ``A X = B``, shape of B kept."""
        kind = np.complex128 if self._complex else np.float64
        if not self._complex and np.iscomplexobj(B):
            return self.solve(B.real) + 1j * self.solve(B.imag)
        rhs = np.asfortranarray(B, dtype=kind)
        X = np.zeros_like(rhs, order="F")
        self._call(SOLVE, rhs, X)
        if not np.isfinite(X.sum()):
            raise SolveError("the solver returned values that are not numbers", where=self.solver)
        return X

    def inertia(self) -> Inertia:
        """Pivot signs as PARDISO counts them; reliable only if no pivot had to be perturbed."""
        if self.mtype == 2:
            return Inertia(negative=0, zero=0, positive=self.n)
        if self.mtype != -2:
            return Inertia(negative=0, zero=0, positive=0, reliable=False, reason="not a symmetric factorisation")
        positive, negative = int(self._iparm[21]), int(self._iparm[22])
        reason = f"{self.perturbed} pivots were perturbed" if self.perturbed else ""
        zero = self.n - positive - negative
        return Inertia(
            negative=negative, zero=zero, positive=positive, reliable=not reason and zero == 0, reason=reason
        )

    def release(self) -> None:
        """Free MKL's memory."""
        if self._alive:
            self._alive = False
            self._call(RELEASE)

    def __del__(self) -> None:
        if getattr(self, "_alive", False) and not sys.is_finalizing():
            self.release()

    def _call(self, phase: int, B: Any = None, X: Any = None) -> None:
        indptr, indices, data = self._A
        columns = 1 if B is None or B.ndim == 1 else B.shape[1]
        error, unused = ctypes.c_int32(0), np.zeros(1, dtype=np.int32)
        integer = [ctypes.c_int32(v) for v in (1, 1, self.mtype, phase, self.n, columns, 0)]
        maxfct, mnum, mtype, phase_, n, nrhs, message = map(ctypes.byref, integer)
        int32, void = ctypes.POINTER(ctypes.c_int32), ctypes.c_void_p
        _library()._mkl_pardiso(
            self._pt.ctypes.data_as(ctypes.POINTER(ctypes.c_int64)), maxfct, mnum, mtype, phase_, n,
            data.ctypes.data_as(void), indptr.ctypes.data_as(int32), indices.ctypes.data_as(int32),
            unused.ctypes.data_as(int32), nrhs, self._iparm.ctypes.data_as(int32), message,
            None if B is None else B.ctypes.data_as(void), None if X is None else X.ctypes.data_as(void),
            ctypes.byref(error),
        )  # fmt: skip
        if error.value:
            raise SolveError(
                "the PARDISO factorisation failed",
                got=f"error {error.value}: {MEANING.get(error.value, 'see the MKL manual')}",
                where=f"{self.n} unknowns",
            )


def _parameters(symmetry: Symmetry) -> Any:
    iparm = np.zeros(64, dtype=np.int32)
    iparm[0] = 1  # no defaults
    iparm[1] = 2  # nested dissection
    iparm[9] = 13 if symmetry == "none" else 8  # pivot perturbation 10^-k
    iparm[10] = iparm[12] = 1 if symmetry == "none" else 0  # scaling and matching: would change what the pivots count
    iparm[17] = -1  # report nonzeros
    iparm[20] = 1  # 1 x 1 and 2 x 2 pivots
    iparm[23] = 0
    return iparm


def _one_based(A: Sparse, *, upper: bool) -> tuple[Any, Any, Any]:
    A = sp.csr_array(A)
    if upper:
        A = _upper_with_diagonal(A)
    A.sort_indices()
    kind = np.complex128 if np.issubdtype(A.dtype, np.complexfloating) else np.float64
    if A.nnz >= 2**31 - 1:
        raise SolveError("the matrix is too large for 32-bit indices", got=f"{A.nnz} nonzeros")
    return A.indptr.astype(np.int32) + 1, A.indices.astype(np.int32) + 1, np.ascontiguousarray(A.data, dtype=kind)


def _upper_with_diagonal(A: Sparse) -> Sparse:
    """Upper triangle with every diagonal entry stored, zeros too (PARDISO refuses to miss one)."""
    U = sp.triu(A, format="csr")
    missing = np.ones(A.shape[0], dtype=bool)
    rows = np.repeat(np.arange(A.shape[0]), np.diff(U.indptr))
    missing[rows[rows == U.indices]] = False
    at = np.flatnonzero(missing)
    if at.size == 0:
        return sp.csr_array(U)
    coo = U.tocoo()
    data = np.concatenate([coo.data, np.zeros(at.size, dtype=U.dtype)])
    index = (np.concatenate([coo.row, at]), np.concatenate([coo.col, at]))
    return sp.csr_array(sp.coo_array((data, index), shape=A.shape))
