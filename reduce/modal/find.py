"""Stage 1's door: the modes of any model."""

from __future__ import annotations

from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.modal.request import request
from modesieve.reduce.modal.symmetric import symmetric_modes
from modesieve.reduce.model import Model, StateSpace, Structure
from modesieve.reduce.progress import Listener


def find_modes(
    model: Model,
    band: tuple[float, float] | None = None,
    *,
    count: int | None = None,
    solver: SolverName = "auto",
    seed: int = 0,
    progress: Listener = None,
) -> Modes:
    """The modes of ``model``, with the proof that none is missing where there is one.

    Structures: ``K phi = omega^2 M phi``, ``phi^T M phi = 1``; thermal: ``K phi = -lambda E phi``; state space:
    ``A w = lambda E w`` with left vectors, ``v^H E w = 1``.

    band: (low, high) in rad/s (thermal: decay rates in 1/s); every mode up to at least 1.5 times the high end is
    computed, and the list ends in a gap. count: at least so many of the lowest modes, more where the last belongs to
    a cluster. Neither: every mode of a small model, else 20 with a warning.
    seed: of the random vectors that find what the loads do not excite.

    Raises ModelError for matrices that make no model of their kind, ChoiceError for requests that cannot be met,
    SolveError where a factorisation fails.

    >>> import numpy as np
    >>> from modesieve.reduce.model import Structure
    >>> chain = Structure(K=np.array([[2.0, -1.0], [-1.0, 1.0]]), M=np.eye(2), F=np.eye(2)[:, :1], Cq=np.eye(2)[1:])
    >>> modes = find_modes(chain)
    >>> [round(float(w), 6) for w in modes.omega], modes.certificate.complete
    ([0.618034, 1.618034], 'all')
    """
    from modesieve.reduce.inspection import check_model

    check_model(model)
    if isinstance(model, StateSpace):
        from modesieve.reduce.modal.dense import state_space_modes

        return state_space_modes(model, band, count=count, progress=progress)
    if isinstance(model, Structure) and model.damping.is_local:
        from modesieve.reduce.modal.damped import damped_modes

        return damped_modes(model, band, count=count, solver=solver, progress=progress)
    wanted = request(band, count, model.n)
    return symmetric_modes(model, wanted, solver=solver, seed=seed, progress=progress)
