"""The full model in the frequency domain: ``Z(w) x = F``, ``G(w) = C(w) x + D``, without forming anything dense.

structure     Z = (1 + j eta sgn w + j w beta) K + (j w alpha - w^2) M + j w D_local + j sgn(w) L + j w U diag(d) U^T
thermal       Z = K + j w E
state space   Z = j w E - A

U = M Phi and d = 2 zeta omega are the counted modes and their damping when the damping is given mode by mode.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import (
    BaseDamping,
    LossFactor,
    ModalRatio,
    Model,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
)


@dataclass(frozen=True, kw_only=True, eq=False)
class Dynamic:
    """``Z(w) = sum_i c_i(w) A_i + j w U diag(d) U^T``.

    parts: the A_i, n by n, real; coefficients(w) gives the c_i, shape (i,); F (n, m); U (n, k) and d (k,), or None.
    outputs: (matrix (p, n), power of j w) pairs that are summed; D (p, m). symmetric: Z equals its transpose.
    pencil: the two parts whose shift-invert space serves, (K, M) for symmetric kinds and (-A, E) else.
    """

    parts: tuple[Any, ...]
    coefficients: Callable[[float], Complex]
    F: Real
    outputs: tuple[tuple[Real, int], ...]
    D: Real
    symmetric: bool
    pencil: tuple[Any, Any]
    U: Real | None = None
    d: Real | None = None
    kept: dict[str, Any] = field(default_factory=dict, repr=False)  # what is computed once

    @property
    def n(self) -> int:
        return int(self.F.shape[0])

    @property
    def is_dense(self) -> bool:
        return not all(sp.issparse(A) for A in self.parts)

    def matrix(self, omega: float) -> Any:
        """Z(w) without its low-rank part, complex."""
        c = self.coefficients(omega)
        total = c[0] * self.parts[0]
        for factor, A in zip(c[1:], self.parts[1:], strict=True):
            if factor != 0:
                total = total + factor * A
        return total

    def apply(self, omega: float, X: Complex) -> Complex:
        """``Z(w) X`` with the full matrices."""
        out = np.zeros(X.shape, dtype=complex)
        for factor, A in zip(self.coefficients(omega), self.parts, strict=True):
            if factor != 0:
                out += factor * times(A, X)
        return out + self.low_rank(omega, X)

    def low_rank(self, omega: float, X: Complex) -> Complex | float:
        """``j w U diag(d) U^T X``, 0 where there is no such part."""
        if self.U is None or self.d is None:
            return 0.0
        return 1j * omega * (self.U @ (self.d[:, None] * (self.U.T @ X)))

    def response(self, omega: float, X: Complex) -> Complex:
        """``C(w) X + D``, shape (p, m)."""
        out = self.D.astype(complex)
        for C, power in self.outputs:
            out = out + (1j * omega) ** power * (C @ X)
        return out

    def norm(self, omega: float) -> float:
        """A lower bound of the 2-norm of Z(w), so that a backward error is never flattered: its largest diagonal entry,
        or the norm of a row of its largest part less those of the others."""
        c = self.coefficients(omega)
        diagonal, rows = self._sizes
        entries = np.abs(sum(factor * d for factor, d in zip(c, diagonal, strict=True)))
        weighted = np.abs(c)[:, None] * rows
        return float(max(entries.max(initial=0.0), (2 * weighted.max(axis=0) - weighted.sum(axis=0)).max(initial=0.0)))

    def size(self, omega: float) -> float:
        """The size of the parts of Z(w) before they cancel."""
        return float((np.abs(self.coefficients(omega)) @ self._sizes[1]).max(initial=0.0))

    @property
    def _sizes(self) -> tuple[list[Real], Real]:
        """Diagonals of the parts, and 2-norms of their rows (parts, n); computed once."""
        if "sizes" not in self.kept:
            rows = np.array([np.sqrt(_squares(A)) for A in self.parts])
            self.kept["sizes"] = ([np.asarray(A.diagonal()) for A in self.parts], rows)
        sizes: tuple[list[Real], Real] = self.kept["sizes"]
        return sizes


def _squares(A: Any) -> Any:
    return np.asarray((A.multiply(A) if sp.issparse(A) else A * A).sum(axis=1)).ravel()


def times(A: Any, X: Any) -> Any:
    """``A X``; real A and complex X as one real product, which is twice as fast as a complex one."""
    if not np.iscomplexobj(X) or np.iscomplexobj(A):
        return A @ X
    k = X.shape[1]
    both = A @ np.concatenate([X.real, X.imag], axis=1)
    return both[:, :k] + 1j * both[:, k:]


def dynamic_of(model: Model, modes: Any = None, pairs: Any = None) -> Dynamic:
    """The frequency-domain form of a model. ``modes`` or ``pairs`` (counted real modes) are needed for modal damping.

    Raises ChoiceError when the damping is given mode by mode and no real modes are.
    """
    if isinstance(model, Structure):
        return _structure(model, modes, pairs)
    if isinstance(model, Thermal):
        return _thermal(model)
    return _state_space(model)


def _structure(model: Structure, modes: Any, pairs: Any) -> Dynamic:
    base, local = model.damping.base, model.damping
    parts = [model.K, model.M]
    extra: list[Callable[[float], complex]] = []
    if local.viscous is not None:
        parts.append(local.viscous)
        extra.append(lambda w: 1j * w)
    if local.stiffness_loss is not None:
        parts.append(local.stiffness_loss)
        extra.append(lambda w: 1j * float(np.sign(w)))
    eta = base.eta if isinstance(base, LossFactor) else 0.0
    alpha, beta = (base.alpha, base.beta) if isinstance(base, Rayleigh) else (0.0, 0.0)

    def coefficients(w: float) -> Complex:
        first = [1 + 1j * eta * np.sign(w) + 1j * w * beta, 1j * w * alpha - w**2]
        return np.array([*first, *(c(w) for c in extra)], dtype=complex)

    U, d = _modal_part(model, modes, pairs)
    kinds = ((model.Cq, 0), (model.Cv, 1), (model.Ca, 2))
    return Dynamic(
        parts=tuple(parts),
        coefficients=coefficients,
        F=_given(model.F),
        outputs=tuple((C, power) for C, power in kinds if C is not None),
        D=_given(model.Du),
        symmetric=True,
        pencil=(model.K, model.M),
        U=U,
        d=d,
    )


def _thermal(model: Thermal) -> Dynamic:
    return Dynamic(
        parts=(model.K, model.E),
        coefficients=lambda w: np.array([1.0, 1j * w], dtype=complex),
        F=_given(model.F),
        outputs=((_given(model.C), 0),),
        D=_given(model.D),
        symmetric=True,
        pencil=(model.K, model.E),
    )


def _state_space(model: StateSpace) -> Dynamic:
    n = model.n
    E = (sp.eye_array(n, format="csr") if sp.issparse(model.A) else np.eye(n)) if model.E is None else model.E
    return Dynamic(
        parts=(model.A, E),
        coefficients=lambda w: np.array([-1.0, 1j * w], dtype=complex),
        F=_given(model.B),
        outputs=((_given(model.C), 0),),
        D=_given(model.D),
        symmetric=False,
        pencil=(-model.A, E),
    )


def _given(array: Real | None) -> Real:
    if array is None:
        raise ChoiceError("the model has no load or no output", expected="both", remedy="add them to the model file")
    return array


# ---- damping given mode by mode ------------------------------------------------------------------------------------


def _modal_part(model: Structure, modes: Any, pairs: Any) -> tuple[Real | None, Real | None]:
    """``M Phi`` and ``2 zeta omega`` of the counted modes."""
    if not model.damping.is_modal:
        return None, None
    found = _real_modes(modes, pairs)
    if found is None:
        raise ChoiceError(
            "the damping is given mode by mode, so the full model needs its counted modes",
            expected="modes with their real vectors",
            got="none",
            remedy="find the modes first (they must hold their vectors)",
        )
    x, phi, d = found
    d = viscous(model.damping.base, x) if d is None else d
    return np.asarray(model.M @ phi), d


def _real_modes(modes: Any, pairs: Any) -> tuple[Real, Real, Real | None] | None:
    if modes is not None and modes.vectors is not None and not np.iscomplexobj(modes.vectors):
        x = getattr(modes.system, "x", None)
        if x is not None:
            return np.asarray(x), np.asarray(modes.vectors), np.asarray(modes.system.d)
    if pairs is None:
        pairs = getattr(getattr(modes, "workspace", None), "pairs", None)
    return None if pairs is None else (pairs.x, pairs.vectors, None)


def viscous(base: BaseDamping, x: Real) -> Real:
    """``2 zeta omega`` (k,) in 1/s of the modes x = omega^2; nothing on rigid-body modes, which are not counted.

    >>> viscous(ModalRatio(ratio=0.01), np.array([0.0, 100.0])).tolist()
    [0.0, 0.2]
    """
    omega = np.sqrt(np.maximum(x, 0.0))
    flexible = x > 1e-9 * float(np.max(x, initial=0.0))
    zeta = np.zeros(len(x))
    match base:
        case ModalRatio(ratio=ratio):
            zeta[flexible] = ratio
        case RatioByFrequency(omega=table, ratio=ratio):
            zeta[flexible] = np.interp(omega[flexible], table, ratio)
        case RatioByMode(ratio=ratio):
            place = np.minimum(np.arange(np.count_nonzero(flexible)), len(ratio) - 1)
            zeta[flexible] = np.asarray(ratio)[place]
    return 2 * zeta * omega
