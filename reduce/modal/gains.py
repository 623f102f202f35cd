"""Every term's gain over frequency as one rational function, the same for both forms of a small system.

A term's squared gain is ``N(t)/D(t)``, t = omega^2, with ``N = A0 + A1 t + A2 t^2`` from its weighted couplings and

    oscillating   D = (x - t)^2 + (d omega + eta x)^2     (second order; a pair has x = |lambda|^2, d = -2 Re lambda)
    real pole     D = lambda^2 + t                        (A1: the square of a direct part)

so that suprema are roots of one quadratic. The norm is Frobenius' (the only one for a rank-one term).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.model import Interface
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem


@dataclass(frozen=True, kw_only=True, eq=False)
class Gains:
    """A0, A1, A2 (q,); oscillating (q,) mask; x, d, eta (q,), for real poles x = -lambda; size (q,): norm(c) norm(b).

    blocks: indices of the terms that are larger blocks; their entries here are nan.
    """

    A0: Real
    A1: Real
    A2: Real
    oscillating: Any
    x: Real
    d: Real
    eta: Real
    size: Real
    blocks: Ints

    def squared(self, t: Real) -> Real:
        """``N/D`` at t (q,), one value per term; inf at an undamped pole."""
        numerator = np.maximum(self.A0 + self.A1 * t + self.A2 * t**2, 0.0)
        swing = (self.x - t) ** 2 + (self.d * np.sqrt(t) + self.eta * self.x) ** 2
        D = np.where(self.oscillating, swing, self.x**2 + t)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(numerator > 0, numerator / D, 0.0)

    def supremum(self, low: float, high: float) -> Real:
        """Largest gain (q,) for ``low <= omega <= high`` (high may be inf); inf at an undamped pole inside."""
        ends = [np.full(len(self.x), low**2)]
        if np.isfinite(high):
            ends.append(np.full(len(self.x), high**2))
        inner = [np.clip(np.where(np.isfinite(t), t, low**2), low**2, high**2) for t in self._stationary()]
        with np.errstate(invalid="ignore"):
            values = [self.squared(t) for t in (*ends, *inner)]
            if not np.isfinite(high):
                values.append(np.where(self.oscillating, self.A2, 0.0))
            if low == 0:
                values.append(self._at_zero())
            return np.sqrt(np.max(values, axis=0))

    def _stationary(self) -> list[Real]:
        """Roots of ``N' D - N D'``, and the undamped pole itself, where D touches 0."""
        s = self.oscillating.astype(float)
        q = np.where(self.oscillating, self.x**2 * (1 + self.eta**2), self.x**2)
        e = np.where(self.oscillating, self.d**2 - 2 * self.x, 1.0)
        a = self.A2 * e - s * self.A1
        b = self.A2 * q - s * self.A0
        c = self.A1 * q - self.A0 * e
        with np.errstate(divide="ignore", invalid="ignore"):
            root = b + np.where(b < 0, -1.0, 1.0) * np.sqrt(np.maximum(b * b - a * c, 0.0))
            return [-root / a, -c / root, np.where(self.oscillating, self.x, 0.0)]

    def _at_zero(self) -> Real:
        """The limit at frequency 0 of rigid-body terms (x = 0): a velocity or acceleration output can be finite."""
        with np.errstate(divide="ignore", invalid="ignore"):
            limit = np.where(self.A0 > 0, np.inf, np.where(self.A1 > 0, self.A1 / self.d**2, 0.0))
        return np.where(self.oscillating & (self.x == 0), limit, 0.0)


def gains(system: SmallSystem, channels: Interface) -> Gains:
    """The gains of every term of ``system`` in weighted channels."""
    a, r = channels.amplitudes, channels.resolutions[:, None]
    if isinstance(system, SecondOrderModal):
        return _second_order(system, a, r)
    return _first_order(system, a, r)


def _second_order(system: SecondOrderModal, a: Real, r: Real) -> Gains:
    b = np.sum((system.b * a) ** 2, axis=1)
    cq, cv, ca = system.cq / r, system.cv / r, system.ca / r
    A0, A2 = b * np.sum(cq**2, axis=0), b * np.sum(ca**2, axis=0)
    A1 = b * (np.sum(cv**2, axis=0) - 2 * np.sum(cq * ca, axis=0))
    x = np.asarray(system.x)
    size = np.sqrt(np.maximum(A0 + A1 * np.abs(x) + A2 * x**2, 0.0))
    return Gains(
        A0=A0, A1=A1, A2=A2, oscillating=np.ones(len(x), dtype=bool), x=x, d=np.asarray(system.d),
        eta=np.asarray(system.eta), size=size, blocks=np.zeros(0, dtype=np.int64),
    )  # fmt: skip


def _first_order(system: FirstOrderModal, a: Real, r: Real) -> Gains:
    q = system.terms
    order = np.diff(system.offsets)
    pairs, blocks = _kinds(system, order)
    A0, A1, x, d, size = (np.full(q, np.nan) for _ in range(5))
    B, C = system.B * a, system.C / r
    one, starts = np.flatnonzero(order == 1), system.offsets[:-1]
    at = starts[one]
    x[one], d[one], A1[one] = [-system.blocks[i][0, 0] for i in one], 0.0, 0.0
    size[one] = np.linalg.norm(C[:, at], axis=0) * np.linalg.norm(B[at], axis=1)
    A0[one] = size[one] ** 2
    at = starts[pairs]
    lam = np.array([complex(system.blocks[i][0, 0], abs(system.blocks[i][0, 1])) for i in pairs])
    sign = np.array([np.sign(system.blocks[i][0, 1]) for i in pairs])
    c = (C[:, at] + 1j * sign * C[:, at + 1]) / np.sqrt(2)
    b = (B[at] - 1j * sign[:, None] * B[at + 1]) / np.sqrt(2)
    x[pairs], d[pairs] = np.abs(lam) ** 2, -2 * lam.real
    size[pairs] = np.linalg.norm(c, axis=0) * np.linalg.norm(b, axis=1)
    A1[pairs] = _real_part_norm(c, b, np.ones(len(pairs)))
    A0[pairs] = _real_part_norm(c, b, -np.conj(lam))
    A2 = np.zeros(q)
    if system.direct is not None:
        through = system.direct * a / r
        A0[one], A1[one], A2[one] = _shifted_pole(_outer(C[:, starts[one]], B[starts[one]]), through[one], x[one])
        P1, P0 = 2 * _outer(c, b).real, -2 * _outer(np.conj(lam) * c, b).real
        A0[pairs], A1[pairs], A2[pairs] = _shifted_pair(P0, P1, through[pairs], x[pairs], d[pairs])
    oscillating = np.zeros(q, dtype=bool)
    oscillating[pairs] = True
    return Gains(A0=A0, A1=A1, A2=A2, oscillating=oscillating, x=x, d=d, eta=np.zeros(q), size=size, blocks=blocks)


def _outer(c: Any, b: Any) -> Any:
    """``c_i b_i^T`` (q, p, m) of c (p, q) and b (q, m)."""
    return c.T[:, :, None] * b[:, None, :]


def _shifted_pole(P: Real, D: Real, rate: Real) -> tuple[Real, Real, Real]:
    """A0, A1, A2 (q,) of ``P/(s + rate) + D``, each P and D (q, p, m)."""
    constant = P + rate[:, None, None] * D
    return _square(constant), _square(D), np.zeros(len(D))


def _shifted_pair(P0: Real, P1: Real, D: Real, x: Real, d: Real) -> tuple[Real, Real, Real]:
    """A0, A1, A2 (q,) of ``(P0 + P1 s)/(s^2 + d s + x) + D``."""
    N0, N1 = P0 + x[:, None, None] * D, P1 + d[:, None, None] * D
    return _square(N0), _square(N1) - 2 * np.einsum("qpm,qpm->q", N0, D), _square(D)


def _square(P: Real) -> Real:
    return np.asarray(np.einsum("qpm,qpm->q", P, P))


def _kinds(system: FirstOrderModal, order: Any) -> tuple[Ints, Ints]:
    """Terms that are complex pairs in the form ``[[re, im], [-im, re]]``, and terms that are any other block."""
    normal = np.array([len(A) == 2 and A[0, 0] == A[1, 1] and A[0, 1] == -A[1, 0] != 0 for A in system.blocks])
    normal = normal.astype(bool).reshape(len(order))
    return np.flatnonzero(normal), np.flatnonzero((order > 1) & ~normal)


def _real_part_norm(c: Any, b: Any, factor: Any) -> Real:
    """Squared Frobenius norm (q,) of ``2 Re(factor_i c_i b_i^T)``, c (p, q), b (q, m), without forming the matrices."""
    fc = factor * c
    plain = np.sum(np.abs(fc) ** 2, axis=0) * np.sum(np.abs(b) ** 2, axis=1)
    return np.maximum(2 * plain + 2 * np.real(np.sum(fc * fc, axis=0) * np.sum(b * b, axis=1)), 0.0)
