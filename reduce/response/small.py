"""Small systems in modal coordinates: what modes, hubs and reduced models are made of.

Two forms, both real and both evaluated as a sum of terms, so that dropping a term is dropping a mode:

second order   G(s) = D + X/(1 + j eta_X) + sum_i c_i(s) b_i^T / (x_i (1 + j eta_i sgn w) + s d_i + s^2),
               c_i(s) = cq_i + s cv_i + s^2 ca_i
first order    G(s) = D + sum_i C_i (s I - A_i)^-1 B_i + D_i, A_i a real block (1 x 1: real pole, 2 x 2: complex pair,
               larger: a group of eigenvalues that only makes sense together)
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
from scipy.linalg import block_diag

from modesieve.reduce.arrays import Complex, Ints, Real, frozen


@dataclass(frozen=True, kw_only=True, eq=False)
class SecondOrderModal:
    """Real modes in modal coordinates, M = I.

    x (k,) = omega_i^2 in rad^2/s^2; d (k,) viscous coefficient (2 zeta_i omega_i) in 1/s; eta (k,) loss factor;
    b (k, m); cq, cv, ca (p, k); D (p, m) feedthrough; X (p, m) static remainder, divided by ``1 + j eta_X sgn w``.
    """

    x: Real
    d: Real
    eta: Real
    b: Real
    cq: Real
    cv: Real
    ca: Real
    D: Real
    X: Real
    eta_X: float = 0.0

    def __post_init__(self) -> None:
        for name in ("x", "d", "eta", "b", "cq", "cv", "ca", "D", "X"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=np.float64)))

    @property
    def terms(self) -> int:
        return len(self.x)

    @property
    def states(self) -> int:
        """Number of states of the first-order form: two a mode."""
        return 2 * len(self.x)

    @property
    def p(self) -> int:
        return int(self.D.shape[0])

    @property
    def m(self) -> int:
        return int(self.D.shape[1])

    @property
    def poles(self) -> Complex:
        """Poles (2k,) of the viscous form, in 1/s; a loss factor counts as zeta = eta/2."""
        half = self._viscous / 2
        root = np.sqrt((half**2 - self.x).astype(complex))
        return np.concatenate([-half + root, -half - root])

    @property
    def _viscous(self) -> Real:
        return self.d + self.eta * np.sqrt(np.maximum(self.x, 0.0))

    @np.errstate(divide="ignore", invalid="ignore")
    def term_gain(self, omega: Real) -> Complex:
        """``h_i(j w)``, shape (w, k). Infinite where an undamped mode sits exactly on a frequency."""
        w = np.asarray(omega, dtype=float)[:, None]
        return 1.0 / (self.x * (1 + 1j * self.eta * np.sign(w)) + 1j * w * self.d - w**2)

    def output_at(self, omega: Real) -> Complex:
        """``c_i(j w)``, shape (w, p, k)."""
        w = np.asarray(omega, dtype=float)[:, None, None]
        return self.cq + 1j * w * self.cv - w**2 * self.ca

    def through(self, omega: Real) -> Complex:
        """The part that belongs to no mode: ``D + X/(1 + j eta_X sgn w)``, shape (w, p, m)."""
        w = np.asarray(omega, dtype=float)[:, None, None]
        return self.D + self.X / (1 + 1j * self.eta_X * np.sign(w))

    @np.errstate(divide="ignore", invalid="ignore")
    def response(self, omega: Real) -> Complex:
        """``G(j w)``, shape (w, p, m); not finite where an undamped pole sits exactly on a frequency."""
        weighted = self.output_at(omega) * self.term_gain(omega)[:, None, :]
        return self.through(omega) + weighted @ self.b

    @np.errstate(divide="ignore", invalid="ignore")
    def term_response(self, omega: Real, term: int) -> Complex:
        """Contribution of one term, shape (w, p, m)."""
        c = self.output_at(omega)[:, :, term] * self.term_gain(omega)[:, term, None]
        return c[:, :, None] * self.b[term]

    def select(self, keep: Ints) -> SecondOrderModal:
        """The same system with the given terms only; D and X stay as they are."""
        keep = np.asarray(keep, dtype=int)
        parts: dict[str, Any] = {name: getattr(self, name)[keep] for name in ("x", "d", "eta", "b")}
        parts |= {name: getattr(self, name)[:, keep] for name in ("cq", "cv", "ca")}
        return replace(self, **parts)

    def state_space(self) -> tuple[Real, Real, Real, Real]:
        """Real first-order form (A, B, C, D), states ``[q_1, q_1', q_2, q_2', ...]``; loss factors as zeta = eta/2."""
        k, d = len(self.x), self._viscous
        A = block_diag(*[np.array([[0.0, 1.0], [-xi, -di]]) for xi, di in zip(self.x, d, strict=True)])
        A = A.reshape(2 * k, 2 * k)
        B = np.zeros((2 * k, self.m))
        B[1::2] = self.b
        C = np.zeros((self.p, 2 * k))
        C[:, 0::2] = self.cq - self.ca * self.x
        C[:, 1::2] = self.cv - self.ca * d
        return A, B, C, self.D + self.X + self.ca @ self.b


@dataclass(frozen=True, kw_only=True, eq=False)
class FirstOrderModal:
    """Real block modal form: ``x_i' = A_i x_i + B_i u``, ``y = sum (C_i x_i + D_i u) + D u``.

    blocks: the real square A_i, in 1/s; a complex pair is ``[[re, im], [-im, re]]``; B (r, m) and C (p, r) stack the
    blocks' rows and columns in order; D (p, m). direct (terms, p, m): the D_i that belong to the terms and go with
    them, as those of velocity and acceleration outputs; None where there are none.
    """

    blocks: tuple[Real, ...]
    B: Real
    C: Real
    D: Real
    direct: Real | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "blocks", tuple(frozen(np.asarray(a, dtype=np.float64)) for a in self.blocks))
        for name in ("B", "C", "D") if self.direct is None else ("B", "C", "D", "direct"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=np.float64)))

    @property
    def terms(self) -> int:
        return len(self.blocks)

    @property
    def states(self) -> int:
        return int(self.B.shape[0])

    @property
    def p(self) -> int:
        return int(self.D.shape[0])

    @property
    def m(self) -> int:
        return int(self.D.shape[1])

    @cached_property
    def offsets(self) -> Ints:
        """First state of every block, and the total at the end, shape (terms + 1,)."""
        return np.concatenate([[0], np.cumsum([len(a) for a in self.blocks])]).astype(np.int64)

    def states_of(self, term: int) -> slice:
        return slice(int(self.offsets[term]), int(self.offsets[term + 1]))

    @property
    def poles(self) -> Complex:
        """Poles (r,) in 1/s, block by block."""
        parts = [np.linalg.eigvals(a).astype(complex) if len(a) > 1 else a[0].astype(complex) for a in self.blocks]
        return np.concatenate(parts) if parts else np.zeros(0, dtype=complex)

    def through(self, omega: Real) -> Complex:
        """The part that belongs to no mode: D at every frequency, shape (w, p, m)."""
        return np.broadcast_to(self.D.astype(complex), (len(omega), *self.D.shape))

    @np.errstate(divide="ignore", invalid="ignore")
    def resolvent(self, omega: Real, term: int) -> Complex:
        """``(j w I - A_i)^-1 B_i``, shape (w, r_i, m). Infinite at an eigenvalue on the axis."""
        A, B = self.blocks[term], self.B[self.states_of(term)]
        s = 1j * np.asarray(omega, dtype=float)
        if len(A) == 1:
            return B[None] / (s - A[0, 0])[:, None, None]
        if len(A) == 2:
            (a, b), (c, d) = A
            det = (s - a) * (s - d) - b * c
            adj = np.empty((len(s), 2, 2), dtype=complex)
            adj[:, 0, 0], adj[:, 0, 1], adj[:, 1, 0], adj[:, 1, 1] = s - d, b, c, s - a
            return (adj / det[:, None, None]) @ B
        Z = s[:, None, None] * np.eye(len(A)) - A
        out = np.linalg.solve(Z, np.broadcast_to(B.astype(complex), (len(s), *B.shape)))
        return np.asarray(out, dtype=np.complex128)

    @np.errstate(divide="ignore", invalid="ignore")
    def term_response(self, omega: Real, term: int) -> Complex:
        """Contribution of one term, shape (w, p, m)."""
        moving = self.C[:, self.states_of(term)] @ self.resolvent(omega, term)
        return moving if self.direct is None else moving + self.direct[term]

    @property
    def feedthrough(self) -> Real:
        """``D + sum_i D_i``, shape (p, m): what answers an input at once.

        The D_i of a velocity output cancel over all terms; what rounding leaves of them is nothing.
        """
        if self.direct is None:
            return self.D
        total, size = self.direct.sum(axis=0), np.abs(self.direct).sum(axis=0)
        return self.D + np.where(np.abs(total) > 1e-10 * size, total, 0.0)

    @np.errstate(divide="ignore", invalid="ignore")
    def response(self, omega: Real) -> Complex:
        """``G(j w)``, shape (w, p, m); not finite where an undamped pole sits exactly on a frequency."""
        single = np.array([len(a) == 1 for a in self.blocks], dtype=bool)
        rows = self.offsets[:-1][single]
        G: Complex = np.array(np.broadcast_to(self.feedthrough, (len(omega), *self.D.shape)), dtype=np.complex128)
        if rows.size:
            lam = np.array([self.blocks[i][0, 0] for i in np.flatnonzero(single)])
            gain = 1.0 / (1j * np.asarray(omega, dtype=float)[:, None] - lam)
            G += (self.C[:, rows] * gain[:, None, :]) @ self.B[rows]
        for term in (int(i) for i in np.flatnonzero(~single)):
            G += self.C[:, self.states_of(term)] @ self.resolvent(omega, term)
        return G

    def select(self, keep: Ints) -> FirstOrderModal:
        """The same system with the given terms only; D stays as it is."""
        keep = np.asarray(keep, dtype=int)
        spans = [np.arange(self.offsets[i], self.offsets[i + 1]) for i in keep]
        rows = np.concatenate([np.zeros(0, dtype=int), *spans]).astype(int)
        direct = None if self.direct is None else self.direct[keep]
        return replace(
            self, blocks=tuple(self.blocks[i] for i in keep), B=self.B[rows], C=self.C[:, rows], direct=direct
        )

    def state_space(self) -> tuple[Real, Real, Real, Real]:
        """(A, B, C, D) with A block diagonal."""
        A = block_diag(*self.blocks) if self.blocks else np.zeros((0, 0))
        return A, self.B, self.C, self.feedthrough


SmallSystem: TypeAlias = SecondOrderModal | FirstOrderModal
