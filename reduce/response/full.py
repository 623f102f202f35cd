"""The response of the full model, solved to a checked backward error at every frequency."""

from __future__ import annotations

import time
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.model import Model
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.direct import solve_at
from modesieve.reduce.response.dynamic import Dynamic, dynamic_of
from modesieve.reduce.response.records import FullResponse


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

    modes, pairs: computed modes; their real vectors carry the damping where it is given mode by mode, and help the
    solution. tolerance: the backward error ``norm(F - Z x)/(norm(Z) norm(x) + norm(F))`` that is accepted.

    Raises ChoiceError without load, outputs or needed modes; an undamped mode exactly on a frequency gives nan there.

    >>> from modesieve.reduce.model import Structure
    >>> model = Structure(K=np.eye(1) * 4, M=np.eye(1), F=np.eye(1), Cq=np.eye(1))
    >>> full_response(model, np.array([0.0, 1.0])).G.real.ravel().round(12).tolist()
    [0.25, 0.333333333333]
    """
    began = time.perf_counter()
    omega = np.atleast_1d(np.asarray(omega, dtype=float))
    dynamic = dynamic_of(model, modes, pairs)
    work = _Work(dynamic, omega)
    for i in range(len(omega)):
        work.direct(i, solver, tolerance)
        tell(progress, "full response", i + 1, len(omega), "direct")
    return work.record(time.perf_counter() - began)


class _Work:
    """What is known so far, frequency by frequency."""

    def __init__(self, dynamic: Dynamic, omega: Real) -> None:
        self.dynamic, self.omega = dynamic, omega
        self.G = np.full((len(omega), *dynamic.D.shape), np.nan, dtype=complex)
        self.backward, self.residual = np.full(len(omega), np.inf), np.full(len(omega), np.inf)
        self.method = ["none"] * len(omega)
        self.solver, self.factorisations, self.solves = "", 0, 0

    def direct(self, i: int, solver: SolverName, tolerance: float) -> None:
        """Solve frequency i by its own factorisation; nan where Z is singular."""
        w = float(self.omega[i])
        self.factorisations += 1
        try:
            answer = solve_at(self.dynamic, w, solver=solver, tolerance=tolerance)
        except SolveError as error:
            if "memory" in str(error):
                raise
            self.method[i] = "singular"
            return
        self.G[i] = self.dynamic.response(w, answer.X)
        self.backward[i], self.residual[i] = answer.backward_error, answer.residual
        self.solves += answer.solves
        self.method[i], self.solver = "direct", answer.solver

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
