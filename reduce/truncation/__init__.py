"""Stage 2: choose modes, cut, correct the statics, measure the error."""

from modesieve.reduce.truncation.records import (
    Above,
    Band,
    Choice,
    Count,
    Keep,
    ReducedModel,
    Statics,
    Tolerance,
    describe_choice,
)
from modesieve.reduce.truncation.truncate import truncate

__all__ = [
    "Above",
    "Band",
    "Choice",
    "Count",
    "Keep",
    "ReducedModel",
    "Statics",
    "Tolerance",
    "describe_choice",
    "truncate",
]
