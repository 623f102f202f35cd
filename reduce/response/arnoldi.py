"""A block Krylov space of a shifted operator, in which the response at every frequency is a small dense problem.

With ``Z(w) = a P0 + b P1 + sum_i L_i E_i(w) L_i^T`` and ``Op = (P0 - sigma P1)^-1 P1``, d = a sigma + b,

    Z(w) = (P0 - sigma P1) (a + d Op) + sum_i L_i E_i(w) L_i^T,

so on a space V that holds ``(P0 - sigma P1)^-1 [F, L_i] = V [f, g_i]`` and obeys ``Op V = V T + Q S`` the choice
``(a + d T + sum_i g_i E_i(w) L_i^T V) y = f`` leaves the residual ``-d (P0 - sigma P1) Q S y`` and nothing else. T is
an inverse: the low end of the spectrum, which dominates a response, keeps its digits (``V^T K V`` would lose them).
Saad, Numerical Methods for Large Eigenvalue Problems, SIAM 2011, chapters 6 and 8; full orthogonalisation, twice.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import scipy.linalg as sl

from modesieve.reduce.arrays import Complex, Real

#: Columns that shrink to this share under orthogonalisation are rounding and are left out.
ROUNDING = 1e-13
#: Columns that shrink to this share are orthogonalised once more after they are normalised.
CAREFUL = 1e-3
#: Frequencies whose small problems are solved at once.
PIECE = 64


class Shifted(Protocol):
    """The operator at one shift: N unknowns, of which the first n are those of the model."""

    n: int
    N: int
    dtype: Any
    shift: float
    solves: int

    def apply(self, V: Any) -> Any:
        """``(P0 - sigma P1)^-1 P1 V``, shape (N, k)."""

    def inverse(self, R: Any) -> Any:
        """``(P0 - sigma P1)^-1 [R; 0]``, R (n, k), shape (N, k)."""

    def coefficients(self, omega: Real) -> tuple[Complex, Complex]:
        """a and d at the frequencies, each (w,)."""

    def image(self, Q: Any) -> tuple[Any, Any]:
        """B0, B1 (n, q): a residual ``(P0 - sigma P1) Q c`` is ``(B0 + j w B1) c`` in the equations of the model."""


@dataclass(frozen=True, kw_only=True, eq=False)
class LowRank:
    """A term ``L E(w) L^T`` of Z: L (n, r), E(w) (r, r) as a function of frequency.

    of_known: L is ``P1 Phi`` of the known eigenvectors, so that ``(P0 - sigma P1)^-1 L = Phi diag(theta)``.
    """

    L: Real
    E: Callable[[float], Complex]
    of_known: bool = False


@dataclass(frozen=True, kw_only=True, eq=False)
class Known:
    """Real eigenvectors Phi (n, k) with ``Op Phi = Phi diag(theta)``."""

    vectors: Real
    theta: Real


class KrylovResponse:
    """The space, grown block by block, and the answers in it."""

    def __init__(self, operator: Shifted, F: Real, terms: tuple[LowRank, ...], known: Known | None) -> None:
        self.operator, self.terms = operator, terms
        self._V = np.empty((operator.N, 0), dtype=operator.dtype, order="F")
        self._T = np.zeros((0, 0), dtype=operator.dtype)
        self.done = self.held = 0
        self.S = np.zeros((0, 0), dtype=operator.dtype)
        of_known = np.zeros((0, 0)) if known is None else self._take_in(known)
        parts = [F, *(t.L for t in terms if not t.of_known)]
        widths = np.cumsum([A.shape[1] for A in parts])[:-1]
        coordinates = self._start(operator.inverse(np.concatenate(parts, axis=1)))
        self._f, *solved = np.split(coordinates, widths, axis=1)
        self._g = [of_known if t.of_known else solved.pop(0) for t in terms]

    @property
    def V(self) -> Any:
        """The basis for which the relation holds, (N, m)."""
        return self._V[:, : self.done]

    @property
    def X(self) -> Any:
        """The basis in the model's unknowns, (n, m)."""
        return self._V[: self.operator.n, : self.done]

    @property
    def exhausted(self) -> bool:
        return self.held == self.done

    def expand(self) -> None:
        """Apply the operator to the newest block; what is new in the result is the next block."""
        a, b = self.done, self.held
        W = self.operator.apply(self._V[:, a:b])
        H, Q, R = self._new_part(W)
        self._T[:b, a:b] = H
        self.done = b
        self._store(Q)
        self.S = np.zeros((Q.shape[1], b), dtype=self._T.dtype)
        self.S[:, a:b] = R
        self._T[b : b + Q.shape[1], a:b] = R

    def answers(self, omega: Real) -> Complex:
        """Coordinates y of the solution at every frequency, (w, m, inputs)."""
        return np.concatenate([self._answers(omega[i : i + PIECE]) for i in range(0, len(omega), PIECE)])

    def residuals(self, omega: Real, y: Complex) -> tuple[Real, Real]:
        """Norms of the residual of every input, (w, inputs): of ``F - Z x``, and of ``d Q S y`` relative to y.

        The second is the residual under the inverse operator, so the error of x is that times the amplification of a
        resonance at most.
        """
        _, d = self.operator.coefficients(omega)
        c = d[:, None, None] * (self.S @ y)
        B0, B1 = self.operator.image(self._V[:, self.done : self.held])
        outer = np.array([np.linalg.norm(B0 @ ci + 1j * w * (B1 @ ci), axis=0) for w, ci in zip(omega, c, strict=True)])
        size = np.linalg.norm(y, axis=1)
        return outer, np.linalg.norm(c, axis=1) / np.where(size > 0, size, 1.0)

    def _answers(self, omega: Real) -> Complex:
        m, (a, d) = self.done, self.operator.coefficients(omega)
        Z = d[:, None, None] * self._T[:m, :m].astype(complex)
        Z[:, np.arange(m), np.arange(m)] += a[:, None]
        for g, term in zip(self._g, self.terms, strict=True):
            reach = term.L.T @ self.X
            for i, w in enumerate(omega):
                Z[i] += _padded(g, m) @ (term.E(float(w)) @ reach)
        return _solve(Z, _padded(self._f, m))

    # ---- growing ---------------------------------------------------------------------------------------------------

    def _take_in(self, known: Known) -> Any:
        """Begin with known eigenvectors; returns the coordinates of ``Phi diag(theta)``."""
        Q, R = np.linalg.qr(known.vectors)
        k = Q.shape[1]
        self._store(Q)
        self._T[:k, :k] = R @ (known.theta[:, None] * np.linalg.inv(R))
        self.done = k
        self.S = np.zeros((0, k), dtype=self._T.dtype)
        return R * known.theta

    def _start(self, W: Any) -> Any:
        H, Q, R = self._new_part(W)
        self._store(Q)
        self.S = np.zeros((Q.shape[1], self.done), dtype=self._T.dtype)
        return np.concatenate([H, R])

    def _new_part(self, W: Any) -> tuple[Any, Any, Any]:
        """``W = V H + Q R`` with Q orthonormal and orthogonal to V; rounding is left out of Q."""
        V = self._V[:, : self.held]
        size = np.linalg.norm(W, axis=0)
        H = V.conj().T @ W
        W = W - V @ H
        more = V.conj().T @ W
        W, H = W - V @ more, H + more
        Q, R, pivots = sl.qr(W, mode="economic", pivoting=True, check_finite=False)
        order = np.argsort(pivots)
        left = np.linalg.norm(R / np.where(size > 0, size, 1.0)[pivots], axis=1)
        real = left > ROUNDING
        Q, R = Q[:, real], R[np.ix_(real, order)]
        if np.any(left[real] < CAREFUL):
            Q, R, H = _clean(V, Q, R, H)
        return H, Q, R

    def _store(self, Q: Any) -> None:
        need = self.held + Q.shape[1]
        if need > self._V.shape[1]:
            self._grow(max(need, 2 * self._V.shape[1], 16))
        self._V[:, self.held : need] = Q
        self.held = need

    def _grow(self, columns: int) -> None:
        V = np.empty((self.operator.N, columns), dtype=self._V.dtype, order="F")
        T = np.zeros((columns, columns), dtype=self._T.dtype)
        V[:, : self.held] = self._V[:, : self.held]
        T[: len(self._T), : len(self._T)] = self._T
        self._V, self._T = V, T


def _clean(V: Any, Q: Any, R: Any, H: Any) -> tuple[Any, Any, Any]:
    """Orthogonality to V once more: columns that had shrunk carry enlarged rounding."""
    h = V.conj().T @ Q
    Q, R2 = np.linalg.qr(Q - V @ h)
    return Q, R2 @ R, H + h @ R


def _padded(f: Any, m: int) -> Any:
    """Coordinates with zeros for the later vectors; (m, columns)."""
    out = np.zeros((m, f.shape[1]), dtype=f.dtype)
    k = min(m, len(f))
    out[:k] = f[:k]
    return out


def _solve(Z: Complex, f: Any) -> Complex:
    try:
        whole = np.linalg.solve(Z, np.broadcast_to(f.astype(complex), (len(Z), *f.shape)))
        return np.asarray(whole, dtype=np.complex128)
    except np.linalg.LinAlgError:  # an undamped mode exactly on one of the frequencies: that one alone is nan
        out = np.full((len(Z), *f.shape), np.nan, dtype=complex)
        for i, z in enumerate(Z):
            if np.linalg.matrix_rank(z) == len(z):
                out[i] = np.linalg.solve(z, f.astype(complex))
        return out
