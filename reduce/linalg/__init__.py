"""Sparse linear algebra: factorisations, eigenpairs of symmetric pencils, and their count."""

from modesieve.reduce.linalg.certify import certified_pairs
from modesieve.reduce.linalg.count import CountResult, count_below, gap_above
from modesieve.reduce.linalg.factor import Factor, Inertia, Prediction, factorise, predict
from modesieve.reduce.linalg.lanczos import SymmetricPairs, lowest_pairs, residuals

__all__ = [
    "CountResult",
    "Factor",
    "Inertia",
    "Prediction",
    "SymmetricPairs",
    "certified_pairs",
    "count_below",
    "factorise",
    "gap_above",
    "lowest_pairs",
    "predict",
    "residuals",
]
