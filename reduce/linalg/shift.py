"""The shift of a symmetric pencil: 0 for a definite K, else small and negative, chosen by the program."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Ints, Sparse
from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg.factor import Factor, SolverName, factorise

#: A solve whose answer is further off than this (relative) shows K to be singular to working precision.
SINGULAR = 1e-3


@dataclass(frozen=True, kw_only=True, eq=False)
class Shifted:
    """A live factor of ``K - sigma M``; negative: eigenvalues below sigma (unstable modes), from its pivots."""

    factor: Factor
    sigma: float
    factorisations: int
    negative: int


def scale_of(K: Sparse, M: Sparse) -> float:
    """A rough size of the pencil's large eigenvalues, ``tr(K)/tr(M)``."""
    top, bottom = float(np.abs(K.diagonal()).sum()), float(np.abs(M.diagonal()).sum())
    return top / bottom if top > 0 and bottom > 0 else 1.0


def shift_and_factor(
    K: Sparse,
    M: Sparse,
    sigma: float | None = None,
    *,
    solver: SolverName = "auto",
    groups: Ints | None = None,
    hint: float | None = None,
) -> Shifted:
    """Factor ``K - sigma M``. Without a given sigma: try 0; where K is singular or indefinite, a negative shift.

    hint: an eigenvalue of interest, in rad^2/s^2 (or 1/s); the negative shift is a small part of it.
    """
    if sigma is not None:
        factor = factorise(_shifted(K, M, sigma), symmetry="indefinite", solver=solver, groups=groups)
        return Shifted(factor=factor, sigma=sigma, factorisations=1, negative=factor.inertia().negative)
    factor_at_zero = _definite_factor(K, solver, groups)
    if factor_at_zero is not None:
        return Shifted(factor=factor_at_zero, sigma=0.0, factorisations=1, negative=0)
    sigma = -1e-3 * hint if hint else -1e-8 * scale_of(K, M)
    factor = factorise(_shifted(K, M, sigma), symmetry="indefinite", solver=solver, groups=groups)
    return Shifted(factor=factor, sigma=sigma, factorisations=2, negative=factor.inertia().negative)


def _shifted(K: Sparse, M: Sparse, sigma: float) -> Sparse:
    return K - sigma * M if sigma else K


def _definite_factor(K: Sparse, solver: SolverName, groups: Ints | None) -> Factor | None:
    """A factor of K if K is positive definite to working precision, else None."""
    if np.any(K.diagonal() <= 0):
        return None
    try:
        factor = factorise(K, symmetry="definite", solver=solver, groups=groups)
    except SolveError:
        return None
    if _solves_well(K, factor) and factor.inertia().negative == 0:
        return factor
    factor.release()
    return None


def _solves_well(K: Sparse, factor: Factor) -> bool:
    """Forward error of ``K x = K r`` for a smooth and a rough r: rounding blows it up when K is singular."""
    n = K.shape[0]
    r = np.column_stack([np.ones(n), np.random.default_rng(1).standard_normal(n)])
    x = factor.solve(K @ r)
    return bool(np.all(np.isfinite(x)) and np.linalg.norm(x - r) <= SINGULAR * np.linalg.norm(r))
