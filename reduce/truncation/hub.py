"""The hub: one reference model that knows how wrong it is, so that every small model can be held against it.

The hub H is the Galerkin model of the full model G on all computed modes and a few tail levels. With the residuals
``r = F - Z V z`` and ``r' = C^T - Z^T V z'`` of its primal and dual problems (free of the computed modes) and norms in
``K_s^-1``, ``K_s = K - sigma M``,

    norm(G - H) <= q(w) norm(r) norm(r'),   q(w) = sup over x >= x_c of abs(f(x)),   f(x) = (x - sigma)/(a x + b),
    norm(G - H) <= abs(c(w)) norm(r'^T K_s^-1 r) + rho(w) norm(r) norm(r'),

whichever is smaller; c and rho are centre and radius of a disc that holds f(x) for all x >= x_c. The product of the
residuals is known, and only the spread of f is paid for with their norms: distant ports, whose residuals have little in
common, are not charged as if they were one. For any other model R, whatever it is made of,

    abs(norm(G - R) - norm(H - R)) <= norm(G - H).

The first form is the Cauchy-Schwarz step of a posteriori bounds for reduced linear systems (e.g. Antoulas,
Approximation of Large-Scale Dynamical Systems, SIAM 2005); the supremum over the uncomputed part needs a complete list
of modes below x_c (Sylvester's law of inertia).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Real, frozen
from modesieve.reduce.model import BaseDamping
from modesieve.reduce.response.norms import frobenius, largest_singular_value
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal
from modesieve.reduce.truncation.rest import Rest

#: Frequencies treated at once: keeps the temporaries of wide systems small.
_PIECE = 256


@dataclass(frozen=True, kw_only=True, eq=False)
class Hub:
    """All computed modes and the tail, with what its error bound needs.

    system: the computed modes' terms first (`computed` of them), then the tail's. levels: tail levels it holds.
    x_c: every eigenvalue below it is computed (rad^2/s^2 for structures, 1/s thermal; inf: all are). sigma: the shift.
    load_rest (r, m), output_rest (3, r, p), tail_rest (r, t): residuals in an orthonormal basis of K_s^-1, for the
    load, the three kinds of output and the tail vectors: ``r = load_rest - d(w) tail_rest z`` with d = a sigma + b.
    load_energy (m, m), output_energy (3 p, 3 p): ``W_B = F^T K_s^-1 F - sum_S b_i b_i^T/(x_i - sigma)`` and the same of
    the stacked output rows: the energy of everything uncomputed, before any tail vector.
    amplitudes (m,), resolutions (p,): the weights of the largest singular value. direct (p, m): the model's own
    feedthrough; massless (p, m): what massless unknowns answer, over a(w). floating (k,): mask of the computed terms
    that are rigid-body or integrating modes; every small model keeps them as they are, so they bring no rounding of
    their own. relative_rounding: how much of the model's size every bound is widened by. damping: the base damping,
    whose rule pseudo-modes of small models follow. solves: right-hand sides it took.
    """

    system: SmallSystem
    computed: int
    levels: int
    x_c: float
    sigma: float
    rest: Rest
    load_rest: Real
    output_rest: Real
    tail_rest: Real
    amplitudes: Real
    resolutions: Real
    direct: Real
    massless: Real
    load_energy: Real
    output_energy: Real
    floating: Any = ()
    relative_rounding: float = 1e-12
    damping: BaseDamping = None
    solves: int = 0

    def __post_init__(self) -> None:
        for name in ("load_rest", "output_rest", "tail_rest", "amplitudes", "resolutions"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=float)))
        for name in ("direct", "massless", "load_energy", "output_energy"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=float)))

    @cached_property
    def terms(self) -> Diagonal:
        """The hub's terms as one list."""
        return diagonal(self.system)

    @property
    def tail_x(self) -> Real:
        """Eigenvalues of the tail's pseudo-modes, all at or above x_c."""
        return self.terms.x[self.computed :]

    @cached_property
    def _loose(self) -> Any:
        mask = np.zeros(self.terms.terms, dtype=bool)
        mask[: len(self.floating)] = self.floating
        return mask

    def elastic(self) -> SmallSystem:
        """The hub without rigid-body and integrating modes."""
        return self.system.select(np.flatnonzero(~self._loose))

    def response(self, omega: Real) -> Complex:
        """``H(j w)``, (w, p, m), physical units."""
        return self.system.response(omega)

    def weigh(self, G: Complex | Real) -> Complex | Real:
        """Weighted entries ``G_kl amplitude_l / resolution_k``."""
        return G * (self.amplitudes[None, :] / self.resolutions[:, None])

    def residuals(self, omega: Real) -> tuple[Complex, Complex]:
        """Residuals of every input (w, r, m) and every output (w, r, p) in the orthonormal basis of K_s^-1."""
        w = np.asarray(omega, dtype=float)
        tail = self.terms.select(np.arange(self.computed, self.terms.terms))
        a, b = self.rest.coefficients(w)
        d = (a * self.sigma + b)[:, None]
        with np.errstate(divide="ignore", invalid="ignore"):
            gain = d / (a[:, None] * tail.x + b[:, None])
            load = self.load_rest - (self.tail_rest * gain[:, None, :]) @ tail.b
            C = tail.cq + 1j * w[:, None, None] * tail.cv - (w**2)[:, None, None] * tail.ca
            q, v, ac = self.output_rest
            free = q + 1j * w[:, None, None] * v - (w**2)[:, None, None] * ac
            out = free - (self.tail_rest * gain[:, None, :]) @ np.swapaxes(C, 1, 2)
        return load, out

    def bound(self, omega: Real) -> tuple[Real, Real]:
        """Bound of ``G - H``, rounding included: largest singular value, weighted (w,), and every entry (w, p, m)."""
        pieces = [self._bound(part) for part in _pieces(np.asarray(omega, dtype=float))]
        return np.concatenate([t for t, _ in pieces]), np.concatenate([e for _, e in pieces])

    def error(self, omega: Real) -> Real:
        """``e_H(w)`` of the largest singular value of the weighted error, rounding included, (w,)."""
        return self.bound(omega)[0]

    def entry_error(self, omega: Real) -> Real:
        """``e_H(w)`` of every entry in physical units, rounding included, (w, p, m)."""
        return self.bound(omega)[1]

    def rounding(self, omega: Real) -> Real:
        """What every entry's bound is widened by, (w, p, m): ``relative_rounding`` times the model's size there.

        The size adds the terms' magnitudes without cancellation, ``sqrt(sum c_k^2 g) sqrt(sum b_l^2 g)`` with
        ``g = abs(h) (1 + abs(x h) max(1, x/x_c))``: a term is as sensitive as it is close to its resonance, and high
        pseudo-modes know their eigenvalue to ``eps x/x_c`` only.
        """
        with np.errstate(divide="ignore", invalid="ignore"):
            gain = np.abs(gains(self.terms, omega))
        return self.widening(gain, omega)

    def widening(self, gain: Real, omega: Real) -> Real:
        """`rounding` for gains ``abs(h_i)`` (w, k) and frequencies (w,) that may be suprema over intervals."""
        terms, w = self.terms, np.asarray(omega, dtype=float)[:, None, None]
        with np.errstate(invalid="ignore", over="ignore"):
            gain = np.where(self._loose, 0.0, gain * (1 + np.abs(terms.x * gain) * np.maximum(1.0, terms.x / self.x_c)))
            C = np.abs(terms.cq) + np.abs(w * terms.cv) + np.abs(w**2 * terms.ca)
            rows = np.sqrt(np.einsum("wpk,wk->wp", C**2, gain))
            columns = np.sqrt(gain @ terms.b**2)
            size = rows[:, :, None] * columns[:, None, :] + np.abs(terms.D) + np.abs(terms.X)
        return self.relative_rounding * _no_nan(size)

    def defect(self, omega: Real) -> Real:
        """Magnitude of what the hub's constant parts miss of ``direct + massless/a(w)``, (w, p, m).

        Zero unless massless unknowns answer with stiffness-proportional damping, which no constant can follow.
        """
        a, _ = self.rest.coefficients(omega)
        return np.abs(self.direct + self.massless / a[:, None, None] - self.system.through(omega))

    def _bound(self, omega: Real) -> tuple[Real, Real]:
        total, entry = self.galerkin(omega)
        widening = self.rounding(omega) + self.defect(omega)
        return total + frobenius(self.weigh(widening)), entry + widening

    def galerkin(self, omega: Real) -> tuple[Real, Real]:
        """The bound without rounding, for at most a few hundred frequencies: weighted (w,) and entries (w, p, m)."""
        load, out = self.residuals(omega)
        q = self.rest.supremum(omega, self.x_c, self.sigma)
        centre, radius = self.rest.disc(omega, self.x_c, self.sigma)
        with np.errstate(invalid="ignore", over="ignore"):
            size = _column_norms(out)[:, :, None] * _column_norms(load)[:, None, :]
            seen = np.abs(centre)[:, None, None] * np.abs(np.swapaxes(out, 1, 2) @ load)
            entry = np.fmin(q[:, None, None] * size, seen + radius[:, None, None] * size)
            load, out = load * self.amplitudes, out / self.resolutions
            whole = largest_singular_value(load) * largest_singular_value(out)
            through = np.abs(centre) * largest_singular_value(np.swapaxes(out, 1, 2) @ load)
            total = np.fmin(q * whole, through + radius * whole)
        return _no_nan(total), _no_nan(entry)


def gains(terms: Diagonal, omega: Real) -> Complex:
    """``h_i(j w)`` of every term, (w, k)."""
    w = np.asarray(omega, dtype=float)[:, None]
    if terms.order == 1:
        return 1.0 / (1j * w + terms.x)
    return 1.0 / (terms.x * (1 + 1j * terms.eta * np.sign(w)) + 1j * w * terms.d - w**2)


def _column_norms(R: Complex) -> Real:
    return np.asarray(np.sqrt(np.sum(np.abs(R) ** 2, axis=1)))


def _no_nan(values: Real) -> Real:
    """A term that is exactly at a pole makes 0 * inf: the bound there is infinite, not undefined."""
    return np.where(np.isnan(values), np.inf, values)


def _pieces(omega: Real) -> list[Real]:
    count = max(1, -(-len(omega) // _PIECE))
    return np.array_split(omega, count)
