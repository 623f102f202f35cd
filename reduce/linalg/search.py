"""One search for the low end of a symmetric pencil: the shift, the Krylov space, and what it took."""

from __future__ import annotations

import time
from dataclasses import replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.linalg import shift as shifts
from modesieve.reduce.linalg.count import at_infinity
from modesieve.reduce.linalg.dense import all_pairs
from modesieve.reduce.linalg.factor import Factor, SolverName
from modesieve.reduce.linalg.goal import Found, Goal, converged, everything, examine
from modesieve.reduce.linalg.memory import free_bytes
from modesieve.reduce.linalg.pairs import SymmetricPairs, eigenvalues, residuals, residuals_and_floor
from modesieve.reduce.linalg.shift import Shifted
from modesieve.reduce.linalg.space import KrylovSpace, Ritz
from modesieve.reduce.progress import Listener, tell

#: M-norm of the inverse operator's residual, relative, at which a pair counts as converged.
CONVERGED = 1e-10
#: True relative residual that is asked of every pair, unless rounding in K phi alone exceeds it (times FLOOR).
RESIDUAL = 1e-9
FLOOR = 30
#: Largest memory of the basis, unless the caller says otherwise.
BASIS_BYTES = 3 * 2**30
#: Columns multiplied at once. Eight find any multiplicity up to eight in one pass; four need a fifth fewer solves for a
#: long list (measured), and are safe where a count follows.
BLOCK, BLOCK_COUNTED = 8, 4

MESSAGES = {
    "converged": "",
    "interrupted": "interrupted; what had converged is returned",
    "stalled": "not all pairs converged within the limit of solves; what had converged is returned",
    "memory": "the basis does not fit into the memory allowed; what had converged is returned",
    "residuals": "some true residuals stay above the tolerance",
}


class Search:
    """Holds the pencil, the factor and the space while pairs are looked for."""

    def __init__(
        self,
        K: Sparse,
        M: Sparse,
        *,
        start: Real | None = None,
        solver: SolverName = "auto",
        groups: Ints | None = None,
        seed: int = 0,
        progress: Listener = None,
        memory: int | None = None,
        block: int = BLOCK,
    ) -> None:
        self.K, self.M, self.n = K, M, int(K.shape[0])
        self.start, self.solver, self.groups, self.seed, self.progress = start, solver, groups, seed, progress
        self.rng = np.random.default_rng(seed)
        self.memory = memory or min(BASIS_BYTES, free_bytes() // 2)
        self.block = min(block, self.n)
        self.factorisations = self.solves = 0
        self.sigma = 0.0
        self.factor: Any = None
        self.below_sigma: int | None = None
        self.space: KrylovSpace | None = None
        self.began = time.perf_counter()

    # ---- the whole way ---------------------------------------------------------------------------------------------

    def run(self, goal: Goal) -> SymmetricPairs:
        """Expand until the goal is met; the shift is chosen first if it was not given."""
        if self.factor is None:
            self.shift()
        self._begin()
        return self.extend(goal)

    def run_dense(self) -> SymmetricPairs:
        """Every finite pair by LAPACK."""
        if self.factor is None:
            self.shift()
        x, vectors = all_pairs(self.K, self.M, self.sigma, self.factor.solve)
        self.solves += len(x)
        name = f"LAPACK, all modes ({self.factor.solver})"
        worst = residuals(self.K, self.M, x, vectors)
        return replace(self._record(x, vectors, worst, np.inf), solver=name, basis=None)

    def again(self, goal: Goal, found: SymmetricPairs, seed: int) -> SymmetricPairs:
        """A second pass with new random vectors, deflated against what is found."""
        self.rng, self.block = np.random.default_rng(seed), min(BLOCK, self.n)
        self._open()
        self._space.seed(found.vectors, 1 / (found.x - self.sigma))
        return self.extend(goal, least=2)

    def extend(self, goal: Goal, *, least: int = 0) -> SymmetricPairs:
        """Expand the space until the goal is met on true residuals, interrupted, or hopeless."""
        tolerance = CONVERGED
        try:
            while True:
                ritz, found = self._expand_until(goal, tolerance, least)
                pairs, sound = self._pairs(ritz, found)
                status = found.status if sound or found.status != "converged" else "residuals"
                if status != "residuals" or tolerance < 1e-14 or self._space.exhausted:
                    break
                tolerance, least = tolerance / 1e3, 0
        except KeyboardInterrupt:
            ritz = self._space.ritz()
            pairs, _ = self._pairs(ritz, converged(ritz, self.sigma, tolerance))
            status = "interrupted"
        return replace(pairs, status=status, message=MESSAGES[status])

    @property
    def _space(self) -> KrylovSpace:
        if self.space is None:
            raise RuntimeError("the search has not begun")
        return self.space

    # ---- shift -----------------------------------------------------------------------------------------------------

    def use(self, factor: Factor, sigma: float) -> None:
        """Work with a live factor of ``K - sigma M``."""
        self.sigma, self.factor = sigma, factor

    def shift(self, sigma: float | None = None, hint: float | None = None) -> Shifted:
        """Factorise at sigma; without one at 0, or a little below 0 where K is singular or indefinite."""
        tell(self.progress, "factorise", message=f"{self.n} unknowns")
        if sigma is not None:
            self._use(shifts.at(self.K, self.M, sigma, self.solver, self.groups))
        else:
            supported = shifts.supported(self.K, self.M, self.solver, self.groups, self.seed)
            if supported is not None:
                self._use(supported)
            else:
                self.factorisations += 1
                self._free_body(1e-2 * hint if hint else shifts.first_guess(self.K, self.M))
        return Shifted(
            factor=self.factor,
            sigma=self.sigma,
            factorisations=self.factorisations,
            negative=self.below_sigma or 0,
        )

    def _free_body(self, size: float) -> None:
        """A negative shift a hundredth of the first flexible eigenvalue, found by a short search at a first guess."""
        for _ in range(4):
            self._use(shifts.at(self.K, self.M, -size, self.solver, self.groups))
            flexible = self._first_flexible()
            if flexible is None or 1e-4 * flexible <= size <= 0.1 * flexible:
                return
            size = 1e-2 * flexible
        self._use(shifts.at(self.K, self.M, -size, self.solver, self.groups))

    def _first_flexible(self) -> float | None:
        self._begin()
        for _ in range(4):
            if self._space.exhausted:
                break
            self._space.expand()
        theta = self._space.ritz().theta
        x = self.sigma + 1 / theta[theta > 1e-12 * np.abs(theta).max(initial=0.0)]
        flexible = x[x > 1e-3 * abs(self.sigma)]
        return float(flexible.min()) if flexible.size else None

    def _use(self, shifted: Shifted) -> None:
        if self.factor is not None:
            self.factor.release()
        if self.space is not None:
            self.solves += self.space.solves
        self.sigma, self.factor, self.space = shifted.sigma, shifted.factor, None
        self.factorisations += shifted.factorisations
        self.solves += shifted.solves
        self.below_sigma = self._count_below_sigma()

    def _count_below_sigma(self) -> int | None:
        """Eigenvalues below the shift where the factor counts for free; None where it does not."""
        if "PARDISO" not in self.factor.solver:
            return None
        inertia = self.factor.inertia()
        offset, _ = at_infinity(self.K, self.M, solver=self.solver)
        return inertia.negative - offset.negative if inertia.reliable and offset.reliable else None

    # ---- the space -------------------------------------------------------------------------------------------------

    def _open(self) -> None:
        if self.space is not None:
            self.solves += self.space.solves
        self.space = KrylovSpace(self.M, self.factor, self.block, self.rng)

    def _begin(self) -> None:
        if self.space is None:
            self._open()
            self._space.start(self._inputs())

    def _inputs(self) -> Real | None:
        """The response to the loads, at most three quarters of a block: random mixtures where there are more."""
        room = (3 * self.block) // 4
        if self.start is None or self.start.shape[1] == 0 or room == 0:
            return None
        F = np.asarray(self.start)
        if F.shape[1] > room:
            F = F @ self.rng.standard_normal((F.shape[1], room))
        return np.asarray(self._space.solve(F))

    def _expand_until(self, goal: Goal, tolerance: float, least: int) -> tuple[Ritz, Found]:
        space = self._space
        capacity = max(int(self.memory // (8 * self.n)), 6 * self.block)
        while not (space.exhausted and space.done):
            space.expand()
            least -= 1
            if space.done < (goal.count or 0) + self.block and space.held + self.block <= capacity:
                continue  # too few columns to hold the goal
            ritz = space.ritz()
            found = examine(ritz, self.sigma, goal, tolerance, self.below_sigma)
            tell(self.progress, "modes", len(found.which), goal.count or 0, f"{space.solves} solves")
            if found.done and least <= 0:
                return ritz, found
            if space.solves > 100 * (goal.count or 100) + 50 * self.block + 20 * len(found.which):
                return ritz, replace(found, status="stalled")
            if space.held + self.block > capacity and not self._restart(ritz, found, capacity):
                return ritz, replace(found, status="memory")
        ritz = space.ritz()
        return ritz, everything(ritz, self.sigma)

    def _restart(self, ritz: Ritz, found: Found, capacity: int) -> bool:
        keep = max(capacity // 2, len(found.which) + 2 * self.block)
        if keep > capacity - 2 * self.block:
            return False
        order = np.argsort(-np.abs(ritz.theta))
        self._space.restart(ritz, order[:keep])
        return True

    # ---- from Ritz pairs to eigenpairs -----------------------------------------------------------------------------

    def _pairs(self, ritz: Ritz, found: Found) -> tuple[SymmetricPairs, bool]:
        theta, vectors = ritz.theta[found.which], self._space.vectors(ritz, found.which)
        vectors = self._normal(vectors)
        largest = float(np.abs(ritz.theta).max(initial=0.0))
        x = eigenvalues(self.K, self.sigma, theta, largest, vectors)
        order = np.argsort(x, kind="stable")
        x, vectors = x[order], vectors[:, order]
        relative, bad = self._judge(x, vectors)
        if bad.any() and found.done:
            x, vectors = self._improve(x, vectors, bad)
            relative, bad = self._judge(x, vectors)
        pairs = self._record(x, vectors, relative, found.next_x)
        return replace(pairs, basis=self._space.everything), not bad.any()

    def _judge(self, x: Real, vectors: Real) -> tuple[Real, Any]:
        relative, floor = residuals_and_floor(self.K, self.M, x, vectors)
        return relative, relative > np.maximum(RESIDUAL, FLOOR * floor)

    def _improve(self, x: Real, vectors: Real, bad: Any) -> tuple[Real, Real]:
        """One inverse iteration for the columns whose residual holds rounding of larger theta.

        The first blocks carry ``eps theta_max``; a solve with the vector itself carries ``eps theta`` only. The basis
        is made M-orthonormal again by one symmetric step, which leaves clusters where they are.
        """
        at = np.flatnonzero(bad)
        vectors[:, at] = self._space.solve(self.M @ vectors[:, at]) * (x[at] - self.sigma)
        vectors = self._normal(vectors)
        G = vectors.T @ (self.M @ vectors)
        vectors = vectors @ (1.5 * np.eye(len(x)) - 0.5 * G)
        theta = 1 / (x - self.sigma)
        x = eigenvalues(self.K, self.sigma, theta, float(np.abs(theta).max()), vectors)
        return x, vectors

    def _normal(self, vectors: Real) -> Real:
        size = np.einsum("ij,ij->j", vectors, self.M @ vectors)
        return vectors / np.sqrt(np.maximum(size, 1e-300))

    def _record(self, x: Real, vectors: Real, relative: Real, next_x: float) -> SymmetricPairs:
        return SymmetricPairs(
            x=x,
            vectors=vectors,
            residuals=relative,
            sigma=self.sigma,
            factor=self.factor,
            next_x=next_x,
            complete=not np.isfinite(next_x) and not np.isnan(next_x),
            negative=self.below_sigma or 0,
            solver=f"block Lanczos, {self.factor.solver}",
            solves=self.solves + (self.space.solves if self.space else 0),
            factorisations=self.factorisations,
            seconds=time.perf_counter() - self.began,
        )


def shift_and_factor(
    K: Sparse,
    M: Sparse,
    sigma: float | None = None,
    *,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    hint: float | None = None,
) -> Shifted:
    """Factor ``K - sigma M``. Without a given sigma: 0, or a small negative one where K is singular or indefinite.

    hint: the first flexible eigenvalue as far as known, in the units of x.
    Raises SolveError when no factorisation succeeds.
    """
    return Search(K, M, solver=solver, groups=groups).shift(sigma, hint)


def refuse_too_many(count: int | None, n: int) -> None:
    """Raises ChoiceError for more pairs than unknowns."""
    if count is not None and count > n:
        raise ChoiceError("that many modes do not exist", expected=f"at most {n}, one per unknown", got=str(count))
