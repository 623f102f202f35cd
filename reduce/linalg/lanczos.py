"""Shift-invert block Lanczos for ``K phi = x M phi``, K symmetric, M symmetric positive semidefinite.

Grimes, Lewis and Simon, SIAM J. Matrix Anal. Appl. 15 (1994) 228-272: the operator ``(K - sigma M)^-1 M`` is symmetric
in the M inner product and its largest eigenvalues ``1/(x - sigma)`` belong to the modes nearest the shift. Blocks, full
reorthogonalisation and a thick restart (Wu and Simon, SIAM J. Matrix Anal. Appl. 22 (2000) 602-616).
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import DENSE_LIMIT, Ints, Real, Sparse
from modesieve.reduce.errors import ChoiceError, SolveError
from modesieve.reduce.linalg import shift as shifts
from modesieve.reduce.linalg.count import GAP, at_infinity
from modesieve.reduce.linalg.dense import EPS, all_pairs
from modesieve.reduce.linalg.factor import Factor, SolverName
from modesieve.reduce.linalg.memory import free_bytes
from modesieve.reduce.linalg.space import KrylovSpace, Ritz
from modesieve.reduce.progress import Listener, tell

#: M-norm of the inverse operator's residual, relative, at which a pair counts as converged.
CONVERGED = 1e-11
#: True relative residual that is asked of every pair, unless rounding in K phi alone exceeds it.
RESIDUAL = 1e-9
#: Largest memory of the basis, unless the caller says otherwise.
BASIS_BYTES = 3 * 2**30
#: Up to this many unknowns every pair is computed densely.
SMALL = 300
BLOCK = 8


@dataclass(frozen=True, kw_only=True, eq=False)
class SymmetricPairs:
    """Eigenpairs in ascending x. vectors (n, k) are M-orthonormal.

    residuals (k,): see `residuals`. factor: the live factor of ``K - sigma M``. basis: the M-orthonormal Krylov space
    that the vectors were taken from, for a full response (None from the dense path). next_x: estimate of the first
    eigenvalue beyond the list, inf when the list holds every finite one (``complete``).
    solves counts right-hand sides. status: "converged", or in a word why not; message says more.
    """

    x: Real
    vectors: Real
    residuals: Real
    sigma: float
    factor: Factor | None = field(repr=False)
    basis: Real | None = field(default=None, repr=False)
    next_x: float = np.inf
    complete: bool = False
    solves: int = 0
    factorisations: int = 0
    seconds: float = 0.0
    status: str = "converged"
    message: str = ""

    def __len__(self) -> int:
        return len(self.x)

    def first(self, k: int) -> SymmetricPairs:
        """The first k pairs only."""
        if k >= len(self.x):
            return self
        cut = {"x": self.x[:k], "vectors": self.vectors[:, :k], "residuals": self.residuals[:k]}
        return replace(self, **cut, next_x=float(self.x[k]), complete=False)


@dataclass(frozen=True, kw_only=True)
class Goal:
    """What is asked: at least ``count`` pairs, or every x < ``below``; both end in a gap."""

    count: int | None = None
    below: float | None = None


def lowest_pairs(
    K: Sparse,
    M: Sparse,
    *,
    count: int | None = None,
    below: float | None = None,
    sigma: float | None = None,
    start: Real | None = None,
    factor: Factor | None = None,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    seed: int = 0,
    progress: Listener = None,
    memory_bytes: int | None = None,
) -> SymmetricPairs:
    """The ``count`` lowest eigenpairs, or all with ``x < below``, of ``K phi = x M phi``.

    K, M (n, n) symmetric sparse, M positive semidefinite (massless unknowns), K may be singular (rigid bodies) or
    indefinite (unstable modes, multiplier rows). sigma: the shift, chosen here if None (0 for supported bodies, slightly
    negative for free ones); factor: a live factor of ``K - sigma M``. start (n, m): loads, whose modes converge first.
    What has converged is returned with a status when the work is interrupted or does not converge.

    Raises SolveError when no factorisation succeeds, ChoiceError for a request that makes no sense.

    >>> import scipy.sparse as sp
    >>> K = sp.diags_array([2.0, 1.0, 3.0], format="csr")
    >>> lowest_pairs(K, sp.eye_array(3, format="csr"), count=2, solver="superlu").x.round(12).tolist()
    [1.0, 2.0]
    """
    goal = _goal(K, count, below)
    search = Search(K, M, start=start, solver=solver, groups=groups, seed=seed, progress=progress, memory=memory_bytes)
    pairs = search.run(goal, sigma=sigma, factor=factor)
    wanted = min(count, len(pairs)) if count is not None else int(np.count_nonzero(pairs.x < _number(below)))
    return pairs.first(wanted)


def residuals(K: Sparse, M: Sparse, x: Real, vectors: Real) -> Real:
    """True relative residuals ``norm(K phi - x M phi) / (norm(K phi) + abs(x) norm(M phi))``, shape (k,).

    Where both terms are no more than rounding (a zero mode) the reference is ``norm(abs(K) abs(phi))`` instead.
    """
    return _residuals(K, M, x, vectors)[0]


def _residuals(K: Sparse, M: Sparse, x: Real, vectors: Real) -> tuple[Real, Real]:
    """Relative residuals, and the part of them that rounding in ``K phi`` explains."""
    if vectors.shape[1] == 0:
        return np.zeros(0), np.zeros(0)
    KV, MV = K @ vectors, M @ vectors
    norm = np.linalg.norm
    spread = norm(abs(K) @ np.abs(vectors), axis=0)
    size = norm(KV, axis=0) + np.abs(x) * norm(MV, axis=0)
    size = np.where(size > 1e4 * EPS * spread, size, np.maximum(spread, 1e-300))
    return norm(KV - MV * x, axis=0) / size, EPS * spread / size


class Search:
    """One search for the low end of a pencil: the shift, the space, and what it took."""

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
    ) -> None:
        self.K, self.M, self.n = K, M, int(K.shape[0])
        self.start, self.solver, self.groups, self.seed, self.progress = start, solver, groups, seed, progress
        self.rng = np.random.default_rng(seed)
        self.memory = memory or min(BASIS_BYTES, free_bytes() // 2)
        self.block = min(BLOCK, self.n)
        self.factorisations = self.solves = 0
        self.sigma = 0.0
        self.factor: Any = None
        self.below_sigma: int | None = None
        self.space: KrylovSpace | None = None
        self.began = time.perf_counter()

    # ---- the whole way ---------------------------------------------------------------------------------------------

    def run(self, goal: Goal, *, sigma: float | None = None, factor: Factor | None = None) -> SymmetricPairs:
        """Shift, factorise, expand until the goal is met."""
        self._shift(sigma, factor)
        if self._dense(goal):
            return self._all()
        self._begin()
        return self.extend(goal)

    def again(self, goal: Goal, found: SymmetricPairs, seed: int) -> SymmetricPairs:
        """A second pass with new random vectors, deflated against what is found."""
        self.rng = np.random.default_rng(seed)
        self._open()
        assert self.space is not None
        self.space.seed(found.vectors, 1 / (found.x - self.sigma))
        return self.extend(goal, least=2)

    def extend(self, goal: Goal, *, least: int = 0) -> SymmetricPairs:
        """Expand the space until the goal is met on true residuals, interrupted, or hopeless."""
        tolerance, steps, status = CONVERGED, 0, "converged"
        try:
            while True:
                ritz, found = self._expand_until(goal, tolerance, least - steps)
                steps = least
                pairs, sound = self._pairs(ritz, found)
                if sound or tolerance < 1e-15 or found.status != "converged":
                    status = found.status if sound or found.status != "converged" else "residuals"
                    break
                tolerance /= 100
        except KeyboardInterrupt:
            ritz = self._space.ritz()
            pairs, _ = self._pairs(ritz, converged(ritz, self.sigma, tolerance))
            status = "interrupted"
        return replace(pairs, status=status, message=MESSAGES[status])

    @property
    def _space(self) -> KrylovSpace:
        assert self.space is not None
        return self.space

    # ---- shift -----------------------------------------------------------------------------------------------------

    def _shift(self, sigma: float | None, factor: Factor | None) -> None:
        if factor is not None:
            self.sigma, self.factor = float(sigma or 0.0), factor
            return
        tell(self.progress, "factorise", message=f"{self.n} unknowns")
        if sigma is not None:
            self._use(shifts.at(self.K, self.M, sigma, self.solver, self.groups))
            return
        supported = shifts.supported(self.K, self.M, self.solver, self.groups, self.seed)
        if supported is not None:
            self._use(supported)
        else:
            self.factorisations += 1
            self._free_body()

    def _free_body(self) -> None:
        """A negative shift a hundredth of the first flexible eigenvalue, found by a short search at a first guess."""
        size = shifts.first_guess(self.K, self.M)
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
        ritz = self._space.ritz()
        x = self.sigma + 1 / ritz.theta[ritz.theta > 1e-12 * np.abs(ritz.theta).max()]
        flexible = x[x > 1e-3 * abs(self.sigma)]
        return float(flexible.min()) if flexible.size else None

    def _use(self, shifted: shifts.Shifted) -> None:
        if self.factor is not None:
            self.factor.release()
        self.sigma, self.factor, self.space = shifted.sigma, shifted.factor, None
        self.factorisations += shifted.factorisations
        self.solves += shifted.solves
        self.below_sigma = self._count_below_sigma()

    def _count_below_sigma(self) -> int | None:
        """Eigenvalues below the shift where the factor counts for free; None where it does not."""
        if "PARDISO" not in self.factor.solver:
            return None
        inertia = self.factor.inertia()
        if not inertia.reliable:
            return None
        offset, _ = at_infinity(self.K, self.M, solver=self.solver)
        return inertia.negative - offset.negative if offset.reliable else None

    # ---- the space -------------------------------------------------------------------------------------------------

    def _open(self) -> None:
        if self.space is not None:
            self.solves += self.space.solves
        self.space = KrylovSpace(self.M, self.factor, self.block, self.rng)

    def _begin(self) -> None:
        if self.space is not None:
            return
        self._open()
        self._space.start(self._inputs())

    def _inputs(self) -> Real | None:
        """The response to the loads, at most three quarters of a block: random mixtures where there are more."""
        room = (3 * self.block) // 4
        if self.start is None or self.start.shape[1] == 0 or room == 0:
            return None
        F = self.start if self.start.shape[1] <= room else self.start @ self.rng.standard_normal(
            (self.start.shape[1], room)
        )
        return np.asarray(self._space.solve(F))

    def _expand_until(self, goal: Goal, tolerance: float, least: int) -> tuple[Ritz, Found]:
        space = self._space
        capacity = max(int(self.memory // (8 * self.n)), 6 * self.block)
        limit = 100 * (goal.count or 100) + 50 * self.block
        while True:
            if space.exhausted and space.done:
                break
            space.expand()
            least -= 1
            ritz = space.ritz()
            found = examine(ritz, self.sigma, goal, tolerance, self.below_sigma)
            tell(self.progress, "modes", len(found.which), goal.count or 0, f"{space.solves} solves")
            if found.done and least <= 0:
                return ritz, found
            if space.solves > limit + 20 * len(found.which):
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

    def _pairs(self, ritz: Ritz, found: Found) -> tuple[SymmetricPairs, bool]:
        space, which = self._space, found.which
        vectors = space.vectors(ritz, which)
        MV = self.M @ vectors
        vectors /= np.sqrt(np.maximum(np.einsum("ij,ij->j", vectors, MV), 1e-300))
        x = refined(self.K, self.sigma, ritz.theta[which], float(np.abs(ritz.theta).max()), vectors)
        order = np.argsort(x, kind="stable")
        x, vectors = x[order], vectors[:, order]
        relative, floor = _residuals(self.K, self.M, x, vectors)
        sound = bool(np.all(relative <= np.maximum(RESIDUAL, 30 * floor)))
        return self._record(x, vectors, relative, found.next_x, space.everything), sound

    def _record(self, x: Real, vectors: Real, relative: Real, next_x: float, basis: Real | None) -> SymmetricPairs:
        return SymmetricPairs(
            x=x,
            vectors=vectors,
            residuals=relative,
            sigma=self.sigma,
            factor=self.factor,
            basis=basis,
            next_x=next_x,
            complete=not np.isfinite(next_x),
            solves=self.solves + (self.space.solves if self.space else 0),
            factorisations=self.factorisations,
            seconds=time.perf_counter() - self.began,
        )

    # ---- small pencils ---------------------------------------------------------------------------------------------

    def _dense(self, goal: Goal) -> bool:
        return self.n <= SMALL or (self.n <= DENSE_LIMIT and (goal.count or 0) > self.n // 5)

    def _all(self) -> SymmetricPairs:
        x, vectors = all_pairs(self.K, self.M, self.sigma, self.factor.solve)
        self.solves += len(x)
        return self._record(x, vectors, residuals(self.K, self.M, x, vectors), np.inf, None)


MESSAGES = {
    "converged": "",
    "interrupted": "interrupted; what had converged is returned",
    "stalled": "not all pairs converged within the limit of solves; what had converged is returned",
    "memory": "the basis does not fit into the memory allowed; what had converged is returned",
    "residuals": "some true residuals stay above the tolerance",
}


@dataclass(frozen=True, kw_only=True, eq=False)
class Found:
    """Which Ritz pairs are taken, the estimate of the next eigenvalue, and whether the goal is met."""

    which: Any
    next_x: float
    done: bool
    status: str = "converged"


def examine(ritz: Ritz, sigma: float, goal: Goal, tolerance: float, below_sigma: int | None) -> Found:
    """The converged pairs nearest above the shift without a hole, all converged ones below it, up to a gap."""
    theta, relative = ritz.theta, ritz.estimate / np.maximum(np.abs(ritz.theta), 1e-300)
    strong = np.abs(theta) > 1e-14 * np.abs(theta).max()
    negative = np.flatnonzero((theta < 0) & strong & (relative < tolerance))
    positive = np.flatnonzero((theta > 0) & strong)
    positive = positive[np.argsort(-theta[positive])]
    ok = relative[positive] < tolerance
    c = int(np.argmin(ok)) if not ok.all() else len(ok)
    x = sigma + 1 / theta[positive]
    settled = relative[positive] < 1e-3
    last = _end(x, c, settled, goal, len(negative))
    enough_below = below_sigma is None or len(negative) >= below_sigma
    if last is None or not enough_below:
        after = float(x[c]) if c < len(x) else np.nan
        return Found(which=np.concatenate([negative, positive[:c]]), next_x=after, done=False)
    which = np.concatenate([negative, positive[: last + 1]])
    return Found(which=which, next_x=float(x[last + 1]), done=True)


def _end(x: Real, c: int, settled: Any, goal: Goal, negative: int) -> int | None:
    """Index of the last pair of the list, None while the goal is not met; x ascending, the first c converged."""
    least = max((goal.count or 0) - negative - 1, -1 if goal.below is not None else 0)
    floor = -np.inf if goal.below is None else goal.below
    for i in range(least, c):
        if i + 1 >= len(x) or not settled[i + 1]:
            return None
        if x[i + 1] <= floor:
            continue
        lower = max(floor, x[i] if i >= 0 else -np.inf)
        beyond = i - least
        need = GAP if beyond < 30 else GAP / 10 if beyond < 100 else GAP / 1e4
        if x[i + 1] - lower > need * max(abs(x[i + 1]), abs(lower) if np.isfinite(lower) else 0.0):
            return i
    return None


def converged(ritz: Ritz, sigma: float, tolerance: float) -> Found:
    """Everything that has converged, for a search that was stopped."""
    found = examine(ritz, sigma, Goal(count=len(ritz.theta) + 1), tolerance, None)
    return replace(found, done=True)


def everything(ritz: Ritz, sigma: float) -> Found:
    """All pairs of an invariant space: every finite mode."""
    which = np.flatnonzero(np.abs(ritz.theta) > 1e-14 * np.abs(ritz.theta).max())
    return Found(which=which[np.argsort(sigma + 1 / ritz.theta[which])], next_x=np.inf, done=True)


def refined(K: Sparse, sigma: float, theta: Real, largest: float, vectors: Real) -> Real:
    """Eigenvalues from ``sigma + 1/theta`` or the Rayleigh quotient, whichever rounding spoils less."""
    x = sigma + 1 / theta
    error = 4 * EPS * largest / theta**2
    quotient = np.einsum("ij,ij->j", vectors, K @ vectors)
    spread = EPS * np.einsum("ij,ij->j", np.abs(vectors), abs(K) @ np.abs(vectors))
    return np.where(spread < error, quotient, x)


def _goal(K: Sparse, count: int | None, below: float | None) -> Goal:
    if (count is None) == (below is None):
        raise ChoiceError("say how many modes, or up to where", expected="one of count and below", got="both or none")
    if count is not None and not 1 <= count <= K.shape[0]:
        raise ChoiceError("that many modes do not exist", expected=f"1 to {K.shape[0]}", got=str(count))
    return Goal(count=count, below=below)


def _number(value: float | None) -> float:
    if value is None:
        raise SolveError("no limit given")
    return value
