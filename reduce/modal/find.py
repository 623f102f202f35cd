"""Stage 1's door: check the model, choose the way, return its modes with their certificate."""

from __future__ import annotations

from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.modal.request import make_request
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
    """The modes of a model, in ascending ``abs(lambda)``, with a certificate that none is missing.

    band: (low, high) in rad/s; every mode to 1.5 times its top is computed, and the list ends in a gap. count: at
    least so many modes. With neither, small models are solved whole and larger ones give 20 modes.
    Raises ModelError for a model that has no modes in this sense, ChoiceError for an impossible request.
    """
    request = make_request(band, count, model.n)
    if isinstance(model, StateSpace):
        from modesieve.reduce.modal.dense import dense_modes

        return dense_modes(model, request)
    if isinstance(model, Structure) and model.damping.is_local:
        from modesieve.reduce.modal.damped import damped_modes

        return damped_modes(model, request)
    return symmetric_modes(model, request, solver=solver, seed=seed, progress=progress)
