"""The shifted factor that the tail is made with: the modal stage's own where the run still holds it, else a new one."""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError, SolveError
from modesieve.reduce.linalg import factorise
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Structure, Thermal
from modesieve.reduce.truncation.diagonal import diagonal
from modesieve.reduce.truncation.krylov import Shifted


class Solving:
    """A live factor of ``K - sigma M`` as the tail wants it."""

    def __init__(self, factor: Any, sigma: float) -> None:
        self.sigma, self._factor = float(sigma), factor

    def solve(self, rhs: Real) -> Real:
        """``(K - sigma M)^-1 rhs``."""
        return np.asarray(self._factor.solve(np.ascontiguousarray(rhs)))


def factor_of(modes: Modes) -> Shifted:
    """A factor of ``K - sigma M`` with its sigma."""
    held = modes.workspace
    factor, sigma = getattr(held, "factor", None), getattr(held, "sigma", None)
    if factor is not None and sigma is not None and not np.iscomplexobj(sigma):
        return Solving(factor, sigma)
    return new_factor(modes)


def new_factor(modes: Modes) -> Shifted:
    """A factor at sigma = 0 where every mode is elastic, else a thousandth of the first elastic eigenvalue below 0.

    A shift of that size leaves the static iteration about three digits a step.
    """
    model = modes.model
    if not isinstance(model, (Structure, Thermal)):
        raise ChoiceError("no full model to factorise", expected="a structure or a thermal model", got=str(type(model)))
    M, sigma = model.M if isinstance(model, Structure) else model.E, shift_for(modes)
    A = model.K - sigma * M if sigma else model.K
    try:
        return Solving(factorise(A, symmetry="definite"), sigma)
    except SolveError:
        return Solving(factorise(A, symmetry="indefinite"), sigma)


def shift_for(modes: Modes) -> float:
    """The shift that `new_factor` takes."""
    x = diagonal(modes.system).x
    loose = np.array([bool(reason) for reason in modes.always_kept], dtype=bool)
    elastic = x[(x > 0) & ~loose]
    if not loose.any() and np.all(x > 0):
        return 0.0
    below = modes.certificate.below_omega or 1.0
    lowest = float(elastic.min()) if elastic.size else below if modes.origin.kind == "thermal" else below**2
    return -1e-3 * lowest
