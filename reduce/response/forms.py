"""Which Krylov space serves which model: parts of Z that touch few unknowns become low-rank terms, a wide imaginary
stiffness makes the pencil complex, a wide viscous matrix (or both together with other damping) is linearised."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Complex, Real, Sparse
from modesieve.reduce.linalg import shift_and_factor
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.model import LossFactor, Model, Rayleigh, Structure, Thermal
from modesieve.reduce.response.arnoldi import Known, LowRank, Shifted
from modesieve.reduce.response.dynamic import Dynamic
from modesieve.reduce.response.shifted import ShiftedPencil, linearised_at, pencil_at

#: A local matrix with at most this many rows is a low-rank term.
FEW = 40
#: Shift of a free body as a share of the band's far end.
NEAR = 1e-2
#: Columns at one shift of a first-order model (three shifts of about sixty solves met four decades, measured).
ENOUGH = 100
#: A known eigenvector with a larger residual would spoil the relation that the answers rest on.
GOOD_VECTOR = 1e-7


@dataclass(frozen=True, kw_only=True, eq=False)
class Form:
    """How to make the operator at a shift (None: the first one), and at which shift a frequency is near.

    terms: low-rank parts of Z; known_at: eigenvectors for a shift, or None. enough: columns after which another shift
    is cheaper than going on, once a quarter of the frequencies is answered (first-order kinds over many decades).
    """

    first: Callable[[], Shifted]
    at: Callable[[float], Shifted]
    near: Callable[[float], float]
    terms: tuple[LowRank, ...]
    known_at: Callable[[float], Known | None]
    enough: int = 1 << 30


def form_of(model: Model, dynamic: Dynamic, omega: Real, modes: Any, pairs: Any, solver: SolverName) -> Form:
    """The form for a model; omega (w,) positive frequencies to come, for the first shift of non-symmetric kinds."""
    if isinstance(model, Structure):
        return _structure(model, dynamic, omega, modes, pairs, solver)
    if isinstance(model, Thermal):
        return _first_order(dynamic, omega, modes, pairs, solver)
    start = float(np.exp(np.mean(np.log(omega)))) if len(omega) else 1.0
    P0, P1 = dynamic.pencil

    def at(shift: float) -> Shifted:
        return pencil_at(dynamic, P0, P1, lambda w: (1.0, 1j * w), shift, solver)

    return Form(first=lambda: at(-start), at=at, near=lambda w: -w, terms=(), known_at=lambda _: None, enough=ENOUGH)


def _first_order(dynamic: Dynamic, omega: Real, modes: Any, pairs: Any, solver: SolverName) -> Form:
    P0, P1 = dynamic.pencil

    def weights(w: float) -> tuple[complex, complex]:
        return 1.0, 1j * w

    return Form(
        first=lambda: _first_pencil(dynamic, weights, modes, float(omega.max()), solver),
        at=lambda shift: pencil_at(dynamic, P0, P1, weights, shift, solver),
        near=lambda w: -w,
        terms=(),
        known_at=_known(modes, pairs),
        enough=ENOUGH + (0 if modes is None else len(modes)),
    )


def _structure(model: Structure, dynamic: Dynamic, omega: Real, modes: Any, pairs: Any, solver: SolverName) -> Form:
    local, base = model.damping, model.damping.base
    D, L = local.viscous, local.stiffness_loss
    plain = not isinstance(base, (LossFactor, Rayleigh)) or (isinstance(base, Rayleigh) and base.beta == 0)
    if (D is not None and not _is_small(D)) or (L is not None and not _is_small(L) and not plain):
        return _linearised(model, dynamic, omega, solver)
    terms = [_few(A, factor) for A, factor in ((D, _viscous), (L, _imaginary)) if A is not None and _is_small(A)]
    if L is not None and not _is_small(L):
        return _complex_pencil(model, dynamic, L, tuple(terms) + _modal(dynamic, known=False), omega, solver)

    def weights(w: float) -> tuple[complex, complex]:
        c = dynamic.coefficients(w)
        return complex(c[0]), complex(c[1])

    known = _known(modes, pairs)
    has_known = known(-1.0) is not None
    return Form(
        first=lambda: _first_pencil(dynamic, weights, modes, float(omega.max()) ** 2, solver),
        at=lambda shift: pencil_at(dynamic, model.K, model.M, weights, shift, solver),
        near=lambda w: w**2,
        terms=tuple(terms) + _modal(dynamic, known=has_known),
        known_at=known,
    )


def _complex_pencil(
    model: Structure, dynamic: Dynamic, L: Sparse, terms: tuple[LowRank, ...], omega: Real, solver: SolverName
) -> Form:
    P0 = sp.csr_array(model.K + 1j * L)

    def weights(w: float) -> tuple[complex, complex]:
        return 1.0, complex(dynamic.coefficients(w)[1])

    def at(shift: float) -> Shifted:
        return pencil_at(dynamic, P0, model.M, weights, shift, solver)

    return Form(
        first=lambda: at(_chosen_shift(model, float(omega.max()) ** 2, solver)),
        at=at,
        near=lambda w: w**2,
        terms=terms,
        known_at=lambda _: None,
    )


def _linearised(model: Structure, dynamic: Dynamic, omega: Real, solver: SolverName) -> Form:
    base, D, L = model.damping.base, model.damping.viscous, model.damping.stiffness_loss
    eta = base.eta if isinstance(base, LossFactor) else 0.0
    K = model.K if eta == 0 and L is None else sp.csr_array(model.K * (1 + 1j * eta))
    K = K if L is None else sp.csr_array(K + 1j * L)
    total = sp.csr_array(model.K.shape) if D is None else D
    if isinstance(base, Rayleigh):
        total = sp.csr_array(total + base.alpha * model.M + base.beta * model.K)

    def at(shift: float) -> Shifted:
        return linearised_at(K, total, model.M, shift, solver)

    return Form(
        first=lambda: at(-np.sqrt(abs(_chosen_shift(model, float(omega.max()) ** 2, solver)))),
        at=at,
        near=lambda w: -w,
        terms=_modal(dynamic, known=False),
        known_at=lambda _: None,
    )


# ---- the first shift -----------------------------------------------------------------------------------------------


def _first_pencil(dynamic: Dynamic, weights: Any, modes: Any, far: float, solver: SolverName) -> Shifted:
    """The factor that the modes were found with, else a new one at a shift chosen by the program.

    far: the farthest point of the band on the axis of x. The relation that the answers rest on carries the rounding
    ``eps far/abs(sigma)`` of rigid-body modes, so a shift that is very small against the band is replaced.
    """
    P0, P1 = dynamic.pencil
    live = getattr(modes, "workspace", None)
    factor, shift = getattr(live, "factor", None), getattr(live, "sigma", None)
    if factor is None or shift is None or getattr(factor, "n", 0) != dynamic.n or not factor.alive:
        made = shift_and_factor(P0, P1, solver=solver)
        factor, shift = made.factor, made.sigma
    if shift and abs(shift) < 1e-3 * far:
        made = shift_and_factor(P0, P1, -NEAR * far, solver=solver)
        factor, shift = made.factor, made.sigma
    return ShiftedPencil(P0, P1, weights, float(shift), factor.solve, factor.solver)


def _chosen_shift(model: Structure, far: float, solver: SolverName) -> float:
    """0 for a supported body, else a share of the band below 0."""
    made = shift_and_factor(model.K, model.M, solver=solver)
    made.factor.release()
    return min(made.sigma, -NEAR * far) if made.sigma else 0.0


# ---- low-rank terms and known vectors ------------------------------------------------------------------------------


def _viscous(w: float) -> complex:
    return 1j * w


def _imaginary(w: float) -> complex:
    return 1j * float(np.sign(w))


def _is_small(A: Sparse) -> bool:
    return len(_rows(A)) <= FEW


def _rows(A: Sparse) -> Any:
    return np.unique(np.concatenate([A.tocoo().row, A.tocoo().col])) if A.nnz else np.zeros(0, dtype=int)


def _few(A: Sparse, factor: Callable[[float], complex]) -> LowRank:
    rows = _rows(A)
    L = np.zeros((A.shape[0], len(rows)))
    L[rows, np.arange(len(rows))] = 1.0
    core = A[rows][:, rows].toarray()
    return LowRank(L=L, E=lambda w: factor(w) * core)


def _modal(dynamic: Dynamic, *, known: bool) -> tuple[LowRank, ...]:
    if dynamic.U is None or dynamic.d is None:
        return ()
    core: Complex = np.diag(dynamic.d).astype(complex)
    return (LowRank(L=dynamic.U, E=lambda w: 1j * w * core, of_known=known),)


def _known(modes: Any, pairs: Any) -> Callable[[float], Known | None]:
    """Real eigenvectors of the symmetric pencil, where all of them are good."""
    found = _vectors(modes, pairs)

    def at(shift: float) -> Known | None:
        if found is None or np.any(found[0] == shift):
            return None
        return Known(vectors=found[1], theta=1 / (found[0] - shift))

    return at


def _vectors(modes: Any, pairs: Any) -> tuple[Real, Real] | None:
    if modes is not None and modes.vectors is not None and np.isrealobj(modes.vectors):
        x = getattr(modes.system, "x", None)
        x = -np.asarray(modes.eigenvalue).real if x is None else np.asarray(x)
        residual, vectors = np.asarray(modes.residual), np.asarray(modes.vectors)
    else:
        pairs = pairs if pairs is not None else getattr(getattr(modes, "workspace", None), "pairs", None)
        if pairs is None:
            return None
        x, residual, vectors = pairs.x, pairs.residuals, pairs.vectors
    good = len(x) and vectors.shape[1] == len(x) and float(residual.max()) < GOOD_VECTOR
    return (x, vectors) if good else None
