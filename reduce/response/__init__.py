"""Responses of small and full systems, frequency grids, norms, time propagation: below all stages."""

from modesieve.reduce.response.deviation import Yardstick, yardstick
from modesieve.reduce.response.grid import frequency_grid
from modesieve.reduce.response.norms import h2_norm, h_infinity_norm, largest_singular_value
from modesieve.reduce.response.records import Certainty, ErrorFigure, FullResponse, Reference
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem
from modesieve.reduce.response.time import impulse_response, step_response, time_grid

__all__ = [
    "Certainty",
    "ErrorFigure",
    "FirstOrderModal",
    "FullResponse",
    "Reference",
    "SecondOrderModal",
    "SmallSystem",
    "Yardstick",
    "frequency_grid",
    "h2_norm",
    "h_infinity_norm",
    "impulse_response",
    "largest_singular_value",
    "step_response",
    "time_grid",
    "yardstick",
]
