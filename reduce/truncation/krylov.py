"""Tail vectors of a symmetric pencil: the static answers to all ports and their successors, without the computed modes.

Vectors are M-orthogonal to every computed mode and orthonormal in the K inner product, where the pencil is read upside
down, ``M y = mu K y`` with ``mu = 1/x``: statics then stay exact to the last digits however high a pseudo-mode lies,
and a massless direction is simply ``mu = 0``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.truncation.pencil import Pencil

#: A direction is new when it is at least this much of the vector it came from; what is lost is the square of it.
_NEW = 1e-7
_NOISE = 1e-12


class Shifted(Protocol):
    """A factor of ``K - sigma M``, as the modal stage leaves it."""

    sigma: float

    def solve(self, rhs: Real) -> Real:
        """``(K - sigma M)^-1 rhs`` for rhs (n, q)."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Deflation:
    """The computed modes that every tail vector must be free of: phi (n, k) M-orthonormal, and M phi."""

    phi: Real
    mass_phi: Real

    def vectors(self, U: Real) -> Real:
        """``U - phi phi^T M U``, twice: one pass leaves a rest where U lies almost in the span."""
        for _ in range(2):
            U = U - self.phi @ (self.mass_phi.T @ U)
        return U

    def loads(self, R: Real) -> Real:
        """``R - M phi phi^T R``."""
        for _ in range(2):
            R = R - self.mass_phi @ (self.phi.T @ R)
        return R


def deflation(M: Sparse, phi: Real) -> Deflation:
    return Deflation(phi=phi, mass_phi=np.asarray(M @ phi))


@dataclass(frozen=True, kw_only=True, eq=False)
class Tail:
    """T (n, t) K-orthonormal and free of the modes; image (n, t) = (K - sigma M)^-1 M T; start (n, q) =
    (K - sigma M)^-1 of the deflated ports (all their columns); solves: right-hand sides used; levels: levels made."""

    T: Real
    image: Real
    start: Real
    solves: int
    levels: int


def tail_vectors(pencil: Pencil, ports: Real, away: Deflation, shifted: Shifted, levels: int) -> Tail:
    """Block Lanczos in the K inner product from the elastic static answers to ``ports`` (n, q)."""
    R = away.loads(ports)
    start = away.vectors(shifted.solve(R)) if R.shape[1] else np.zeros_like(R)
    # What the ports excite of the uncomputed modes, against all they excite: below rounding there is no tail at all.
    real = _norms(R) > 1e-13 * _norms(ports)
    static, solves = _statics(pencil, R[:, real], start[:, real], away, shifted)
    solves += R.shape[1]
    T, image = np.zeros((pencil.n, 0)), np.zeros((pencil.n, 0))
    block = static
    for _ in range(levels):
        new = _orthonormal(pencil.K, block, T)
        if new.shape[1] == 0:
            break  # the whole rest is spanned
        new = away.vectors(new)
        block = away.vectors(shifted.solve(np.asarray(pencil.M @ new)))
        solves += new.shape[1]
        T, image = np.hstack([T, new]), np.hstack([image, block])
    return Tail(T=T, image=image, start=start, solves=solves, levels=levels)


def _statics(pencil: Pencil, R: Real, u: Real, away: Deflation, shifted: Shifted) -> tuple[Real, int]:
    """``K^-1 R`` on the complement of the modes, from the shifted factor: ``u <- u + (K - sigma M)^-1 (R - K u)``.

    The error shrinks by abs(sigma)/(x_c - sigma) a step; stops where it no longer does. Returns u and the solves used.
    """
    solves, last = 0, np.inf
    if R.shape[1] == 0 or shifted.sigma == 0.0:
        return u, 0
    for _ in range(40):
        du = away.vectors(shifted.solve(away.loads(R - pencil.K @ u)))
        u = u + du
        solves += R.shape[1]
        step = float(np.max(_norms(du) / np.maximum(_norms(u), np.finfo(float).tiny)))
        if step < 1e-14 or (step < 1e-11 and step > 0.3 * last):
            return u, solves
        last = step
    raise SolveError(
        "the elastic static solution does not converge from the shifted factor",
        expected="a shift well below the first uncomputed eigenvalue",
        got=f"sigma = {shifted.sigma:.6g}, last correction {last:.1e} of the solution",
        remedy="compute more modes, or use a smaller shift",
    )


def _norms(U: Real) -> Real:
    return np.asarray(np.sqrt(np.einsum("ij,ij->j", U, U)))


def _orthonormal(K: Sparse, block: Real, T: Real) -> Real:
    """New K-orthonormal directions of ``block`` beside T; columns that bring nothing new are left out."""
    size = np.sqrt(np.maximum(np.einsum("ij,ij->j", block, np.asarray(K @ block)), 0.0))
    Y = block[:, size > 0] / size[size > 0]
    KT = np.asarray(K @ T)
    for threshold in (_NEW, 1e-2):
        for _ in range(2):
            Y = Y - T @ (KT.T @ Y)
        Y = _whiten(Y, np.asarray(K @ Y), threshold)
    return Y


def _whiten(Y: Real, KY: Real, threshold: float) -> Real:
    """Orthonormal basis of span(Y) in the inner product whose image of Y is KY (Gram eigenvectors, scaled)."""
    if Y.shape[1] == 0:
        return Y
    gram = Y.T @ KY
    value, vector = np.linalg.eigh((gram + gram.T) / 2)
    keep = value > threshold**2
    return np.asarray(Y @ (vector[:, keep] / np.sqrt(value[keep])))


def residual_coordinates(K: Sparse, M: Sparse, sigma: float, T: Real, columns: Real) -> Real:
    """Coordinates (r, q) of ``columns`` less their part in span(T), in a basis orthonormal for ``K_s = K - sigma M``.

    The part in span(T) is what a Galerkin condition removes; leaving it out here rather than cancelling it keeps all
    digits. Directions are added in rounds, so that nothing above 1e-14 of a column is lost to the Gram matrix.
    """

    def apply(U: Real) -> Real:
        return np.asarray(K @ U - sigma * (M @ U))

    T = _whiten(T, apply(T), 1e-3)
    KT = apply(T)
    scale = np.sqrt(np.maximum(np.einsum("ij,ij->j", columns, apply(columns)), 0.0))
    scale = np.where(scale > 0, scale, 1.0)
    W = columns / scale
    for _ in range(3):
        W = W - T @ (KT.T @ W)
    rest, parts, basis, image = W, [], T, KT
    for _ in range(4):
        size = np.sqrt(np.maximum(np.einsum("ij,ij->j", rest, apply(rest)), 0.0))
        big = size > 1e-14
        if not big.any():
            break
        Q = rest[:, big] / size[big]
        for threshold in (_NEW, 1e-2):
            for _ in range(2):
                Q = Q - basis @ (image.T @ Q)
            Q = _whiten(Q, apply(Q), threshold)
        KQ = apply(Q)
        part = KQ.T @ rest
        rest = rest - Q @ part
        parts.append(part)
        basis, image = np.hstack([basis, Q]), np.hstack([image, KQ])
    out = np.vstack(parts) if parts else np.zeros((0, columns.shape[1]))
    return np.asarray(out * scale)
