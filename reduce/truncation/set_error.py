"""The error of a kept *set*: what single-mode scores cannot see, because contributions overlap and cancel.

H2: with ``Q_ij`` the H2 inner product of terms i and j, the squared error of dropping a set is ``d^T Q d`` with d its
0/1 indicator (for single poles ``Q_ij = tr(R_i R_j^H)/(-lambda_i - conj(lambda_j))``; Vuillemin, Maillard and
Poussot-Vassal, arXiv 2009.11540). Band: the largest singular value of the summed contributions over the band.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.linalg import solve_continuous_lyapunov

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import frobenius, largest_singular_value
from modesieve.reduce.response.small import SecondOrderModal, SmallSystem

_PIECE = 1 << 23


class SetError(Protocol):
    """Error of dropping sets of units. A unit is what stays together: a mode, a pair, a block."""

    @property
    def units(self) -> int: ...

    def of(self, dropped: Real) -> Real:
        """Errors (s,) of sets given as rows of 0/1 indicators of what is dropped, (s, u)."""


@dataclass(frozen=True, kw_only=True, eq=False)
class QuadraticError:
    """``sqrt(d^T Q d)``; Q (u, u) symmetric."""

    Q: Real

    @property
    def units(self) -> int:
        return len(self.Q)

    def of(self, dropped: Real) -> Real:
        d = np.atleast_2d(np.asarray(dropped, dtype=float))
        return np.sqrt(np.maximum(np.einsum("si,ij,sj->s", d, self.Q, d, optimize=True), 0.0))


@dataclass(frozen=True, kw_only=True, eq=False)
class BandError:
    """``max over w of norm(base(w) + sum_dropped T_i(w)) / scale(w)``.

    T (u, w, p, m) weighted contributions, base (w, p, m) what is wrong whatever is kept, scale (w,) the reference.
    """

    T: Complex
    base: Complex
    scale: Real

    @property
    def units(self) -> int:
        return len(self.T)

    def of(self, dropped: Real) -> Real:
        d = np.atleast_2d(np.asarray(dropped, dtype=float))
        shape = self.base.shape
        size = int(np.prod(shape))
        step = max(1, _PIECE // max(size, 1))
        flat = self.T.reshape(len(self.T), -1)
        parts = [self._worst((d[i : i + step] @ flat).reshape(-1, *shape) + self.base) for i in range(0, len(d), step)]
        return np.concatenate(parts) if parts else np.zeros(0)

    def _worst(self, E: Complex) -> Real:
        """Largest singular values only where the Frobenius norm, an upper bound, can still win."""
        bound = frobenius(E) / self.scale
        if min(E.shape[2:]) == 1:
            return np.asarray(bound.max(axis=1, initial=0.0))
        least = bound.max(axis=1, initial=0.0) / np.sqrt(min(E.shape[2:]))
        tall = bound >= least[:, None]
        values = np.zeros_like(bound)
        values[tall] = largest_singular_value(E[tall]) / np.broadcast_to(self.scale, bound.shape)[tall]
        return np.asarray(values.max(axis=1, initial=0.0))


def h2_error(system: SmallSystem, units: list[Ints], amplitudes: Real, resolutions: Real) -> QuadraticError:
    """The H2 inner products of ``units`` (lists of term indices), weighted channels.

    Raises ChoiceError where a unit's H2 norm is infinite: undamped, integrating or unstable modes, feedthrough of
    acceleration outputs.
    """
    terms = np.concatenate(units) if units else np.zeros(0, dtype=int)
    only = system.select(terms)
    worst = only.poles.real.max(initial=-np.inf)
    if worst >= 0:
        raise ChoiceError(
            "the H2 error is undefined",
            expected="damping in every mode that may be dropped",
            got=f"Re = {worst:.3g} 1/s",
        )
    if isinstance(only, SecondOrderModal) and np.any(only.ca):
        raise ChoiceError(
            "the H2 error is undefined",
            expected="displacement or velocity outputs",
            got="acceleration outputs: a dropped mode leaves a feedthrough error",
        )
    A, B, C, _ = only.state_space()
    P = solve_continuous_lyapunov(A, -(B * amplitudes) @ (B * amplitudes).T)
    C = C / resolutions[:, None]
    gram = (C.T @ C) * P
    owner = np.repeat(np.arange(len(units)), [sum(_states(system, int(t)) for t in unit) for unit in units])
    hot = np.zeros((len(units), len(owner)))
    hot[owner, np.arange(len(owner))] = 1
    Q = hot @ gram @ hot.T
    return QuadraticError(Q=(Q + Q.T) / 2)


def _states(system: SmallSystem, term: int) -> int:
    return 2 if isinstance(system, SecondOrderModal) else len(system.blocks[term])


def band_error(
    system: SmallSystem,
    units: list[Ints],
    omega: Real,
    amplitudes: Real,
    resolutions: Real,
    *,
    static: bool = False,
    base: Complex | None = None,
    scale: Real | None = None,
) -> BandError:
    """The band's contributions of ``units``, weighted.

    static: dropped terms leave their static part in place (h_i - h_i(0)). base (w, p, m) weighted: an error that is
    there whatever is kept (the tail's, for instance). scale (w,): the reference, 1 if not given.
    """
    weight = amplitudes[None, :] / resolutions[:, None]
    shape = (len(omega), *weight.shape)
    T = np.zeros((len(units), *shape), dtype=complex)
    for u, unit in enumerate(units):
        for t in unit:
            T[u] += system.term_response(omega, int(t)) * weight
            if static:
                T[u] -= system.term_response(np.zeros(1), int(t)) * weight
    return BandError(
        T=T,
        base=np.zeros(shape, dtype=complex) if base is None else base,
        scale=np.ones(len(omega)) if scale is None else scale,
    )
