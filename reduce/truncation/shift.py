"""The shifted factor that the tail is made with: the modal stage's own, else a new one."""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Structure, Thermal
from modesieve.reduce.truncation.diagonal import diagonal
from modesieve.reduce.truncation.krylov import Shifted


def factor_of(modes: Modes) -> Shifted:
    """``K - sigma M`` factorised: ``modes.workspace`` where it has ``sigma`` and ``solve``, else made here."""
    held: Any = modes.workspace
    if held is not None and hasattr(held, "solve") and hasattr(held, "sigma"):
        return held
    return new_factor(modes)


def new_factor(modes: Modes) -> Shifted:
    """A factor at sigma = 0, or a thousandth of the first elastic eigenvalue below it where K is singular."""
    from modesieve.reduce.linalg import factorise

    model = modes.model
    if not isinstance(model, (Structure, Thermal)):
        raise ChoiceError("no full model to factorise", expected="a structure or a thermal model", got=str(type(model)))
    M = model.M if isinstance(model, Structure) else model.E
    sigma = shift_for(modes)
    factor = factorise(model.K - sigma * M if sigma else model.K)
    return _Factored(sigma=sigma, factor=factor)


def shift_for(modes: Modes) -> float:
    """0 for supported models; below 0 by a thousandth of the first elastic eigenvalue where any mode is not elastic."""
    x = diagonal(modes.system).x
    loose = np.array([bool(reason) for reason in modes.always_kept], dtype=bool)
    elastic = x[(x > 0) & ~loose]
    if not loose.any() and np.all(x > 0):
        return 0.0
    lowest = float(elastic.min()) if elastic.size else float(modes.certificate.below_omega or 1.0)
    return -1e-3 * lowest


class _Factored:
    """A factorisation that remembers its shift."""

    def __init__(self, sigma: float, factor: Any) -> None:
        self.sigma, self._factor = sigma, factor

    def solve(self, rhs: Any) -> Any:
        return self._factor.solve(rhs)
