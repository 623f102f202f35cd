"""Find the modes of a large linear model, rank them, keep those that matter, and say how wrong the small model is."""

from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.comparison.readiness import readiness
from modesieve.reduce.errors import ChoiceError, FileError, ModelError, ModesieveError, SolveError, UnitError
from modesieve.reduce.inspection import inspect_model
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.model import Damping, Input, Output, StateSpace, Structure, Thermal, UnitSystem, Unknowns
from modesieve.reduce.response.full import full_response
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import Above, Band, Count, Keep, Tolerance
from modesieve.reduce.truncation.truncate import truncate

__all__ = [
    "Above",
    "Band",
    "ChoiceError",
    "Count",
    "Damping",
    "FileError",
    "Input",
    "Keep",
    "ModelError",
    "ModesieveError",
    "Output",
    "SolveError",
    "StateSpace",
    "Structure",
    "Thermal",
    "Tolerance",
    "UnitError",
    "UnitSystem",
    "Unknowns",
    "compare",
    "find_modes",
    "full_response",
    "inspect_model",
    "rank",
    "readiness",
    "truncate",
    "with_guarantee",
]
