"""Factorisations and eigenpairs of sparse pencils: the ground that every stage stands on."""

from modesieve.reduce.linalg.count import CountResult, count_below
from modesieve.reduce.linalg.factor import Factor, Inertia, factorise
from modesieve.reduce.linalg.pairs import SymmetricPairs, all_pairs, certified_pairs, lowest_pairs, residuals
from modesieve.reduce.linalg.shift import Shifted, shift_and_factor

__all__ = [
    "CountResult",
    "Factor",
    "Inertia",
    "Shifted",
    "SymmetricPairs",
    "all_pairs",
    "certified_pairs",
    "count_below",
    "factorise",
    "lowest_pairs",
    "residuals",
    "shift_and_factor",
]
