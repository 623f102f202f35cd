"""Sparse factorisations behind one small interface: factorise, solve blocks of right-hand sides, count signs.

PARDISO (through pypardiso, where MKL can be installed) and SuperLU with nested dissection (pymetis) in symmetric mode.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, Protocol, TypeAlias

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Ints, Sparse
from modesieve.reduce.errors import SolveError

Symmetry: TypeAlias = Literal["definite", "indefinite", "none"]
SolverName: TypeAlias = Literal["auto", "superlu", "pardiso"]


@dataclass(frozen=True, kw_only=True)
class Inertia:
    """Numbers of negative, zero and positive eigenvalues of a symmetric matrix; reason says why not reliable."""

    negative: int
    zero: int
    positive: int
    reliable: bool = True
    reason: str = ""


@dataclass(frozen=True, kw_only=True)
class Prediction:
    """What a factorisation will need. label: "from the solver's own analysis" or "estimate"; memory in bytes."""

    solver: str
    nonzeros: int
    memory_bytes: int
    free_bytes: int
    label: str
    fits: bool
    reason: str = ""


class Factor(Protocol):
    """A factorised matrix. ``solver`` names the method for reports; memory in bytes."""

    solver: str
    n: int
    nonzeros: int
    memory_bytes: int

    @property
    def alive(self) -> bool:
        """False after release."""

    def solve(self, B: Any) -> Any:
        """Solution of ``A X = B`` for B (n,) or (n, k), real or complex."""

    def inertia(self) -> Inertia:
        """Signs of the pivots (Sylvester's law of inertia)."""

    def release(self) -> None:
        """Give the memory back; the factor cannot be used afterwards."""


def factorise(
    A: Sparse, *, symmetry: Symmetry = "none", solver: SolverName = "auto", groups: Ints | None = None
) -> Factor:
    """Factorise the square sparse matrix A (n, n), real or complex.

    symmetry: "definite" (symmetric positive definite; refused if a pivot says otherwise and the solver can tell),
    "indefinite" (symmetric, for complex A without conjugation) or "none".
    groups (n,): the number of each row's node, so that the ordering may work on the smaller graph of nodes.
    Raises SolveError for a singular matrix or when the memory is foreseen not to suffice.

    >>> factor = factorise(sp.csr_array(np.diag([2.0, -4.0])), symmetry="indefinite", solver="superlu")
    >>> factor.solve(np.array([2.0, 4.0])).tolist(), factor.inertia().negative
    ([1.0, -1.0], 1)
    """
    from modesieve.reduce.linalg.pardiso import PardisoFactor
    from modesieve.reduce.linalg.superlu import SuperLUFactor

    if chosen(solver) == "pardiso":
        return PardisoFactor(A, symmetry)
    return SuperLUFactor(A, symmetry, groups)


def predict(
    A: Sparse, *, symmetry: Symmetry = "none", solver: SolverName = "auto", groups: Ints | None = None
) -> Prediction:
    """Fill and memory that `factorise` would need, compared with what is free; nothing is factorised."""
    from modesieve.reduce.linalg.pardiso import predict_pardiso
    from modesieve.reduce.linalg.superlu import predict_superlu

    if chosen(solver) == "pardiso":
        return predict_pardiso(A, symmetry)
    return predict_superlu(A, symmetry, groups)


def chosen(solver: SolverName) -> Literal["superlu", "pardiso"]:
    """The solver that will run. Raises SolveError when PARDISO is asked for and not installed."""
    from modesieve.reduce.linalg.pardiso import pardiso_available

    if solver == "superlu":
        return "superlu"
    if pardiso_available():
        return "pardiso"
    if solver == "pardiso":
        raise SolveError(
            "the PARDISO solver is not installed",
            expected="the package pypardiso and MKL",
            remedy="install the extra 'fast' (x86-64), or let the program choose: it uses SuperLU instead",
        )
    return "superlu"


def residual_of(A: Sparse, factor: Factor, seed: int = 0) -> float:
    """Relative backward error of one test solve, ``norm(b - A x) / (norm(A) norm(x) + norm(b))`` in the inf norm."""
    A = sp.csr_array(A)
    rng = np.random.default_rng(seed)
    b = A @ rng.standard_normal(A.shape[0])
    x = factor.solve(b)
    # not abs(A): that sorts and merges the entries of the caller's matrix in place
    rows = np.bincount(np.repeat(np.arange(len(b)), np.diff(A.indptr)), np.abs(A.data), len(b))
    size = float(rows.max()) * float(np.abs(x).max()) + float(np.abs(b).max())
    return float(np.abs(b - A @ x).max()) / size if size else 0.0
