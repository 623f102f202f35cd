"""Shift-invert block Lanczos for ``K phi = x M phi``: the basis, the projected operator and its Ritz pairs.

Grimes, Lewis and Simon, SIAM J. Matrix Anal. Appl. 15 (1994) 228-272: the operator ``(K - sigma M)^-1 M`` is symmetric
in the M inner product and its largest eigenvalues ``theta = 1/(x - sigma)`` belong to the modes nearest the shift.
Blocks, full reorthogonalisation, thick restart (Wu and Simon, SIAM J. Matrix Anal. Appl. 22 (2000) 602-616).
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import eigh

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.linalg.factor import Factor


class BlockLanczos:
    """``Op Q = Q T + ahead border`` with ``Q^T M Q = I``; Q grows by one block a step."""

    def __init__(self, M: Sparse, factor: Factor, block: int, capacity: int, seed: int) -> None:
        self.M, self.factor, self.block = M, factor, block
        self.rng = np.random.default_rng(seed)
        self.n = int(M.shape[0])
        self.capacity = min(capacity, self.n)
        self.Q = np.empty((self.n, self.capacity), order="F")
        self.T = np.zeros((self.capacity, self.capacity))
        self.size = 0
        self.ahead = np.zeros((self.n, 0))
        self.border = np.zeros((0, 0))
        self.solves = 0
        self.exhausted = False  # the basis spans every finite mode

    def start(self, vectors: Real, known: Real, theta: Real) -> None:
        """Begin with ``Op vectors`` filled with random ones, so that unexcited modes are found too.

        known (n, d): M-orthonormal eigenvectors with eigenvalues theta of the operator, taken in as they are.
        """
        self.size = known.shape[1]
        self.Q[:, : self.size] = known
        self.T[: self.size, : self.size] = np.diag(theta)
        fill = self.rng.standard_normal((self.n, max(self.block - vectors.shape[1], 1)))
        self._look_ahead(self._apply(np.hstack([vectors, fill])))

    def step(self) -> None:
        """Take the block ahead into the basis and apply the operator to it."""
        if self.ahead.shape[1] == 0:
            self._look_ahead(self._apply(self.rng.standard_normal((self.n, self.block))))
            if self.ahead.shape[1] == 0:
                self.exhausted = True
                return
        b, k = self.ahead.shape[1], self.size
        self.Q[:, k : k + b] = self.ahead
        self.size = k + b
        W = self._apply(self.ahead)
        before = self._lengths(W)
        W, C = self._against(W, self.Q[:, : self.size])
        self.T[: self.size, k : k + b] = C
        self.T[k : k + b, : self.size] = C.T
        self.ahead, R = self._orthonormal(W * (self._lengths(W) > 1e-13 * before))
        self.ahead, _ = self._against(self.ahead, self.Q[:, : self.size])
        self.border = np.zeros((self.ahead.shape[1], self.size))
        self.border[:, k : k + b] = R
        self._trim()

    def room(self) -> bool:
        return self.size + max(self.ahead.shape[1], 1) <= self.capacity

    def ritz(self) -> tuple[Real, Real, Real]:
        """Ritz values theta by descending ``abs``, coefficients in Q, and their residuals in the M norm."""
        theta, S = eigh(self.T[: self.size, : self.size])
        order = np.argsort(-np.abs(theta), kind="stable")
        theta, S = theta[order], S[:, order]
        return theta, S, np.linalg.norm(self.border @ S, axis=0)

    def vectors(self, theta: Real, S: Real) -> Real:
        """Ritz vectors with one more step of the operator, for free: it removes what a semidefinite M cannot see.

        ``Op Q s / theta = Q s + ahead border s / theta`` (Nour-Omid, Parlett, Ericsson and Jensen 1987).
        """
        V = self.Q[:, : self.size] @ S
        return V + self.ahead @ (self.border @ S / theta) if self.ahead.shape[1] else V

    def restart(self, keep: int) -> None:
        """Thick restart: the ``keep`` leading Ritz vectors stay, and so does the block ahead."""
        theta, S, _ = self.ritz()
        keep = min(keep, self.size)
        self.Q[:, :keep] = self.Q[:, : self.size] @ S[:, :keep]
        border = self.border @ S[:, :keep]
        self.T[:] = 0.0
        self.T[:keep, :keep] = np.diag(theta[:keep])
        self.size, self.border = keep, border

    # ---- inner workings ----

    def _apply(self, W: Real) -> Real:
        self.solves += W.shape[1]
        return self.factor.solve(self.M @ W)

    def _look_ahead(self, W: Real) -> None:
        before = self._lengths(W)
        W, _ = self._against(W, self.Q[:, : self.size])
        self.ahead, _ = self._orthonormal(W * (self._lengths(W) > 1e-11 * before))
        self.border = np.zeros((self.ahead.shape[1], self.size))
        self._trim()

    def _trim(self) -> None:
        """Never look further than there are unknowns left."""
        left = self.n - self.size
        self.ahead, self.border = self.ahead[:, :left], self.border[:left]

    def _against(self, W: Real, basis: Real) -> tuple[Real, Real]:
        """W made M-orthogonal to ``basis`` (twice is enough), and the coefficients taken out."""
        total = np.zeros((basis.shape[1], W.shape[1]))
        for _ in range(2):
            C = basis.T @ (self.M @ W)
            W = W - basis @ C
            total += C
        return W, total

    def _orthonormal(self, W: Real) -> tuple[Real, Real]:
        """M-orthonormal basis of the columns of W and R with ``W = basis R``; dependent columns are dropped.

        Column by column, each orthogonalised twice: a Gram matrix would lose directions below 1e-8.
        """
        basis, R, before = np.zeros((self.n, 0)), np.zeros((0, W.shape[1])), self._lengths(W)
        for j in range(W.shape[1]):
            w, c = self._against(W[:, j : j + 1], basis)
            length = self._lengths(w)[0]
            R[:, j] = c[:, 0]
            if length > 1e-12 * before[j]:
                R = np.vstack([R, np.zeros((1, W.shape[1]))])
                R[-1, j] = length
                basis = np.hstack([basis, w / length])
        return basis, R

    def _lengths(self, W: Real) -> Real:
        """M norms of the columns."""
        return np.sqrt(np.maximum(np.einsum("ij,ij->j", W, self.M @ W), 0.0))
