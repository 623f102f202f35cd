"""The settings of a run: what a brief says, in plain numbers and typed choices."""

from __future__ import annotations

from dataclasses import dataclass

from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.truncation.records import Choice, Statics


@dataclass(frozen=True, kw_only=True)
class Settings:
    """Everything a run needs beside its model.

    band: (low, high) in rad/s (thermal: decay rates in 1/s). choice: which modes stay. by: the ranking measure. count:
    at least so many modes are computed, None: by the band. statics None: the best that is legal. levels: tail levels of
    statics "vectors". sweep, times: whether the comparison makes the error over kept counts and the time responses.
    figures: formats, () for none.
    """

    band: tuple[float, float]
    choice: Choice
    by: str = "band-share"
    count: int | None = None
    solver: SolverName = "auto"
    statics: Statics | None = None
    levels: int = 2
    sweep: bool = True
    times: bool = True
    figures: tuple[str, ...] = ("svg",)
