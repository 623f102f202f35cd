"""Factorisations and eigenpairs of sparse pencils: the ground that every stage stands on."""

from modesieve.reduce.linalg.count import CountResult, count_below, gap_above
from modesieve.reduce.linalg.factor import Factor, Inertia, Prediction, factorise, predict
from modesieve.reduce.linalg.lanczos import all_pairs, certified_pairs, lowest_pairs
from modesieve.reduce.linalg.pairs import SymmetricPairs, residuals
from modesieve.reduce.linalg.search import shift_and_factor
from modesieve.reduce.linalg.shift import Shifted

__all__ = [
    "CountResult",
    "Factor",
    "Inertia",
    "Prediction",
    "Shifted",
    "SymmetricPairs",
    "all_pairs",
    "certified_pairs",
    "count_below",
    "factorise",
    "gap_above",
    "lowest_pairs",
    "predict",
    "residuals",
    "shift_and_factor",
]
