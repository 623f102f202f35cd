"""The response of the full model, solved to a checked backward error at every frequency.

One factorisation serves all frequencies: the Krylov space of the shifted inverse is the same for all of them. Where it
does not reach, another shift is taken, and what is then left is solved by a complex factorisation of its own.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.linalg.memory import free_bytes
from modesieve.reduce.model import Model
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.arnoldi import PIECE, KrylovResponse
from modesieve.reduce.response.check import Images
from modesieve.reduce.response.direct import errors, solve_at
from modesieve.reduce.response.dynamic import Dynamic, dynamic_of
from modesieve.reduce.response.forms import Form, form_of
from modesieve.reduce.response.records import FullResponse

#: Up to this many unknowns a factorisation per frequency is the quickest.
SMALL = 200
#: Residual under the inverse operator, relative to the answer, that a Krylov space is grown to; the backward error
#: is grown to a tenth of its tolerance.
AIM, MARGIN = 1e-10, 0.1
#: Shifts that are tried before what is left is solved directly.
SHIFTS = 6
#: Columns of a Krylov space at most, and its memory (basis and products).
COLUMNS, SPACE_BYTES = 1200, 6 * 2**30
#: Products of all answers with the stored entries of the matrices that are made without hesitation.
CHEAP = 2e8
#: Frequencies that stand for all while the space grows.
WATCHED = 16


def full_response(
    model: Model,
    omega: Real,
    *,
    modes: Any = None,
    pairs: Any = None,
    solver: SolverName = "auto",
    progress: Listener = None,
    tolerance: float = 1e-12,
) -> FullResponse:
    """``G(j w)`` of the full model, shape (w, p, m), at the frequencies omega (w,) in rad/s.

    modes, pairs: computed modes; their real vectors carry the damping where it is given mode by mode, and are taken
    into the Krylov space. tolerance: the backward error ``norm(F - Z x)/(norm(Z) norm(x) + norm(F))`` that is accepted;
    norm(Z) is bounded from below, so the figure is never flattered.

    Raises ChoiceError without load, outputs or needed modes; where Z is singular (an undamped mode exactly on a
    frequency, a free body at rest) G is nan and the method "singular".

    >>> from modesieve.reduce.model import Structure
    >>> model = Structure(K=np.eye(1) * 4, M=np.eye(1), F=np.eye(1), Cq=np.eye(1))
    >>> full_response(model, np.array([0.0, 1.0])).G.real.ravel().round(12).tolist()
    [0.25, 0.333333333333]
    """
    began = time.perf_counter()
    omega = np.atleast_1d(np.asarray(omega, dtype=float))
    work = _Work(dynamic_of(model, modes, pairs), omega, solver, progress, tolerance)
    todo = np.flatnonzero(omega > 0)
    if work.dynamic.n > SMALL and len(todo) > 1 and work.dynamic.F.shape[1]:
        form = form_of(model, work.dynamic, omega[todo], modes, pairs, solver)
        work.by_krylov(form, todo)
    for i in work.unsolved():
        work.direct(i)
    return work.record(time.perf_counter() - began)


class _Work:
    """What is known so far, frequency by frequency."""

    def __init__(self, dynamic: Dynamic, omega: Real, solver: SolverName, progress: Listener, tolerance: float) -> None:
        self.dynamic, self.omega, self.wanted = dynamic, omega, solver
        self.progress, self.tolerance = progress, tolerance
        self.G = np.full((len(omega), *dynamic.D.shape), np.nan, dtype=complex)
        self.backward, self.residual = np.full(len(omega), np.inf), np.full(len(omega), np.inf)
        self.method = [""] * len(omega)
        self.solver, self.factorisations, self.solves = "", 0, 0

    def unsolved(self) -> list[int]:
        return [i for i, name in enumerate(self.method) if not name]

    def _tell(self, message: str) -> None:
        tell(self.progress, "full response", len(self.omega) - len(self.unsolved()), len(self.omega), message)

    # ---- Krylov ----------------------------------------------------------------------------------------------------

    def by_krylov(self, form: Form, todo: Ints) -> None:
        """Spaces at one shift after another, until all is solved or a shift brings nothing."""
        operator = form.first()
        for _ in range(SHIFTS):
            self.factorisations += 1
            space = KrylovResponse(operator, self.dynamic.F, form.terms, form.known_at(operator.shift))
            self._grow(space, todo, form.enough)
            solved = self._accept(space, todo)
            self.solves += operator.solves
            self.solver = getattr(operator, "solver", "")
            self._tell(f"{space.done} vectors")
            todo = np.setdiff1d(todo, solved)
            if len(todo) == 0 or len(solved) == 0:
                return
            try:
                operator = form.at(form.near(float(self.omega[todo[len(todo) // 2]])))
            except SolveError:
                return

    def _grow(self, space: KrylovResponse, todo: Ints, enough: int) -> None:
        """Expand until every watched frequency is answered, or nothing improves any more."""
        watched = self.omega[todo[np.unique(np.linspace(0, len(todo) - 1, WATCHED).astype(int))]]
        limit = _column_limit(space.operator.N, len(self.dynamic.parts), space.operator.dtype)
        check, best, since = 0, np.inf, 0
        while not space.exhausted and space.held < limit:
            space.expand()
            if space.done < check:
                continue
            check = space.done + max(space.done // 8, 4)
            excess = self._excess(space, watched)
            answered = np.mean(excess <= 1)
            if answered == 1 or (space.done >= enough and answered >= 0.25):
                return
            score = float(np.sum(np.log10(np.clip(excess, 1.0, 1e10))))
            if score < best - 1:
                best, since = score, space.done
            if space.done - since > max(60, space.done // 2):
                return

    def _excess(self, space: KrylovResponse, omega: Real) -> Real:
        """By what factor the residual at each frequency is still too large, (w,)."""
        y = space.answers(omega)
        outer, inner = space.residuals(omega, y)
        size = np.array([self.dynamic.norm(float(w)) for w in omega])[:, None] * np.linalg.norm(y, axis=1)
        backward = outer / np.maximum(size + np.linalg.norm(self.dynamic.F, axis=0), 1e-300)
        worst_of = np.maximum(backward / (MARGIN * self.tolerance), inner / AIM)
        return np.nan_to_num(worst_of.max(axis=1), nan=np.inf)

    def _accept(self, space: KrylovResponse, todo: Ints) -> Ints:
        """Check the residuals of all frequencies with the full matrices, keep what passes.

        Where products with every answer would take long, the matrices' images of the basis are combined instead (the
        same residual but for rounding) and about eight of the frequencies are checked by themselves.
        """
        images = Images(self.dynamic, space.X)
        stored = sum(A.nnz if hasattr(A, "nnz") else A.size for A in self.dynamic.parts)
        each = 1 if stored * len(todo) * self.dynamic.F.shape[1] < CHEAP else max(len(todo) // 8, 1)
        solved = []
        for start in range(0, len(todo), PIECE):
            at = todo[start : start + PIECE]
            for k, (i, y) in enumerate(zip(at, space.answers(self.omega[at]), strict=True), start=start):
                if self._keep(int(i), images, y, itself=k % each == 0):
                    solved.append(i)
        return np.array(solved, dtype=int)

    def _keep(self, i: int, images: Images, y: Any, *, itself: bool) -> bool:
        w = float(self.omega[i])
        backward, residual = images.errors(w, y)
        if itself:
            _, one, other = errors(self.dynamic, w, images.solution(y))
            backward, residual = max(backward, one), max(residual, other)
        if not backward <= self.tolerance:
            return False
        self.G[i] = images.response(w, y)
        self.backward[i], self.residual[i], self.method[i] = backward, residual, "krylov"
        return True

    # ---- one by one ------------------------------------------------------------------------------------------------

    def direct(self, i: int) -> None:
        """Solve frequency i by its own factorisation; nan where Z is singular."""
        w = float(self.omega[i])
        self.factorisations += 1
        try:
            answer = solve_at(self.dynamic, w, solver=self.wanted, tolerance=self.tolerance)
        except SolveError as error:
            if "memory" in str(error):
                raise
            self.method[i] = "singular"
            return
        self.G[i] = self.dynamic.response(w, answer.X)
        self.backward[i], self.residual[i] = answer.backward_error, answer.residual
        self.solves += answer.solves
        self.method[i], self.solver = "direct", self.solver or answer.solver
        self._tell("direct")

    def record(self, seconds: float) -> FullResponse:
        return FullResponse(
            omega=self.omega,
            G=self.G,
            backward_error=self.backward,
            residual=self.residual,
            method=tuple(self.method),
            solver=self.solver,
            factorisations=self.factorisations,
            solves=self.solves,
            seconds=seconds,
        )


def _column_limit(N: int, parts: int, dtype: Any) -> int:
    """Columns of a basis of N rows that fit the allowance, with their images under the parts."""
    size = np.dtype(dtype).itemsize * N * (1 + parts)
    return int(max(16, min(COLUMNS, N, min(SPACE_BYTES, free_bytes() // 2) // size)))
