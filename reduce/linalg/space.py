"""A growing M-orthonormal Krylov space of ``(K - sigma M)^-1 M`` with its projected operator and thick restart."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import eigh

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.linalg.dense import orthonormalise
from modesieve.reduce.linalg.factor import Factor

#: Below this share of its size before, what is left of a column is treated with care (one by one, dropped if rounding).
CAREFUL = 1e-4


@dataclass(frozen=True, kw_only=True, eq=False)
class Ritz:
    """Ritz values theta (m,) of the inverse operator, their coefficients Y (m, m), and residual coefficients C, with
    ``Op V Y = V Y theta + Q C``; estimate (m,) is the M-norm of the residual."""

    theta: Real
    Y: Real
    C: Real
    estimate: Real


class KrylovSpace:
    """``Op V = V T + Q S`` with V (n, m) M-orthonormal, T symmetric, Q the newest block, not yet multiplied."""

    def __init__(self, M: Sparse, factor: Factor, block: int, rng: np.random.Generator) -> None:
        self.M, self.factor, self.block, self.rng = M, factor, block, rng
        n = M.shape[0]
        self._V = np.empty((n, 4 * block), order="F")
        self._T = np.zeros((4 * block, 4 * block))
        self.done = 0  # columns of V that were multiplied
        self.held = 0  # columns of V with Q at the end
        self.S = np.zeros((0, 0))
        self.solves = 0
        self._MQ = np.zeros((n, 0))

    @property
    def V(self) -> Real:
        """The multiplied basis (n, m)."""
        return self._V[:, : self.done]

    @property
    def everything(self) -> Real:
        """The basis with the newest block."""
        return self._V[:, : self.held]

    @property
    def exhausted(self) -> bool:
        """True when the space is invariant and nothing new could be found: it holds every finite mode."""
        return self.held == self.done

    def solve(self, B: Real) -> Real:
        self.solves += B.shape[1]
        return self.factor.solve(B)

    def start(self, W: Real | None = None) -> None:
        """The first block: the columns of W (already in the range of the operator) filled up with random ones."""
        fresh = self.block - (0 if W is None else W.shape[1])
        parts = [] if W is None else [W]
        if fresh > 0:
            parts.append(self._random(fresh))
        self._append(np.concatenate(parts, axis=1))

    def seed(self, vectors: Real, theta: Real) -> None:
        """Begin with known eigenvectors, so that only new ones are looked for; a random block follows."""
        k = vectors.shape[1]
        self._room(k)
        self._V[:, :k] = vectors
        self._T[:k, :k] = np.diag(theta)
        self.done = self.held = k
        self._append(self._random(self.block))
        self.S = np.zeros((self.held - k, k))

    def expand(self) -> None:
        """Multiply the newest block by the operator, orthogonalise, take the rest as the next block."""
        a, b = self.done, self.held
        W, MW, H, size = self._orthogonalise(np.asfortranarray(self.solve(self._MQ)))
        self.done = b
        Q, R, more = self._normalise(W, MW, size)
        H += more @ R
        self._T[:b, a:b] = H
        self._T[a:b, :b] = H.T
        self._T[a:b, a:b] = (H[a:b] + H[a:b].T) / 2
        self._store(Q)
        short = min(self.block - Q.shape[1], self.M.shape[0] - self.held)
        if short > 0:  # directions that were nothing but rounding make room for random ones
            MQ = self._MQ
            self._append(self._random(short))
            self._MQ = np.concatenate([MQ, self._MQ], axis=1)
        self.S = np.zeros((self.held - b, b))
        self.S[: len(R), a:b] = R

    def ritz(self) -> Ritz:
        """Ritz pairs of the multiplied space."""
        m = self.done
        theta, Y = eigh(self._T[:m, :m])
        C = self.S @ Y
        return Ritz(theta=theta, Y=Y, C=C, estimate=np.linalg.norm(C, axis=0))

    def vectors(self, ritz: Ritz, which: Any) -> Real:
        """``Op V y / theta`` for the chosen pairs: purified, and free of a further solve (Nour-Omid, Parlett, Ericsson
        and Jensen, Math. Comp. 48 (1987) 663-673)."""
        Q = self._V[:, self.done : self.held]
        return self.V @ ritz.Y[:, which] + Q @ (ritz.C[:, which] / ritz.theta[which])

    def restart(self, ritz: Ritz, keep: Any) -> None:
        """Keep the chosen Ritz vectors and the newest block."""
        k, fresh = len(keep), self.held - self.done
        self._V[:, :k] = self.V @ ritz.Y[:, keep]
        self._V[:, k : k + fresh] = self._V[:, self.done : self.held].copy()
        self._T[:] = 0
        self._T[:k, :k] = np.diag(ritz.theta[keep])
        self.S = ritz.C[:, keep]
        self.done, self.held = k, k + fresh

    def _random(self, count: int) -> Real:
        return self.solve(self.M @ self.rng.standard_normal((self.M.shape[0], count)))

    def _orthogonalise(self, W: Real) -> tuple[Real, Real, Real, Real]:
        """W without the basis (twice is enough), MW but for rounding, the coefficients, and the M-norms before."""
        V = self.everything
        MW = self.M @ W
        size = _norms(W, MW)
        H = V.T @ MW
        W = W - V @ H
        MW = self.M @ W
        again = V.T @ MW
        return W - V @ again, MW, H + again, size

    def _normalise(self, W: Real, MW: Real, size: Real) -> tuple[Real, Real, Real]:
        """``W = (Q + V h) R``, Q M-orthonormal and orthogonal to V; what is rounding of ``size`` is dropped.

        Sets MQ. Two Gram matrices where all columns are sound.
        """
        if np.all(_norms(W, MW) > CAREFUL * size):
            Q, _, R = orthonormalise(W, MW)
            Q, self._MQ, R2 = orthonormalise(Q, self.M @ Q)
            if np.linalg.svd(R2 @ R, compute_uv=False)[-1] > CAREFUL * float(size.max(initial=0.0)):
                return Q, R2 @ R, np.zeros((self.held, W.shape[1]))
        Q, R, h = self._normalise_with_care(W, size)
        self._MQ = self.M @ Q
        return Q, R, h

    def _normalise_with_care(self, W: Real, size: Real) -> tuple[Real, Real, Real]:
        """Column by column inside the block: a Gram matrix would enlarge rounding where a column all but vanishes, as
        it does when an input's static response is itself a mode."""
        Q, R = np.zeros((W.shape[0], 0)), np.zeros((0, W.shape[1]))
        for j in range(W.shape[1]):
            w, c = _without(W[:, j : j + 1], Q, self.M)
            length = float(_norms(w, self.M @ w)[0])
            R[:, j] = c[:, 0]
            if length > 1e-12 * float(size[j]):
                R = np.vstack([R, np.zeros((1, W.shape[1]))])
                R[-1, j] = length
                Q = np.hstack([Q, w / length])
        h = self.everything.T @ (self.M @ Q)
        Q, _ = _without(Q - self.everything @ h, self.everything, self.M)
        return Q / _norms(Q, self.M @ Q), R, h

    def _append(self, W: Real) -> None:
        """Add what is new in W as (part of) the next block."""
        W, MW, _, size = self._orthogonalise(np.asfortranarray(W))
        Q, _, _ = self._normalise(W, MW, size)
        self._store(Q)

    def _store(self, Q: Real) -> None:
        k = Q.shape[1]
        self._room(self.held + k)
        self._V[:, self.held : self.held + k] = Q
        self.held += k

    def _room(self, columns: int) -> None:
        have = self._V.shape[1]
        if columns <= have:
            return
        want = max(columns, have + max(have // 2, 8 * self.block))
        V, T = np.empty((self._V.shape[0], want), order="F"), np.zeros((want, want))
        V[:, : self.held] = self._V[:, : self.held]
        T[:have, :have] = self._T
        self._V, self._T = V, T


def _norms(W: Real, MW: Real) -> Real:
    """M-norms of the columns of W."""
    return np.sqrt(np.maximum(np.einsum("ij,ij->j", W, MW), 0.0))


def _without(W: Real, basis: Real, M: Sparse) -> tuple[Real, Real]:
    """W made M-orthogonal to ``basis``, twice, and the coefficients taken out."""
    total = np.zeros((basis.shape[1], W.shape[1]))
    for _ in range(2):
        c = basis.T @ (M @ W)
        W, total = W - basis @ c, total + c
    return W, total
