"""What a search for eigenpairs is to reach, and whether the Ritz pairs at hand reach it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.linalg.count import GAP
from modesieve.reduce.linalg.space import Ritz


@dataclass(frozen=True, kw_only=True)
class Goal:
    """At least ``count`` pairs and every x < ``below``, on to the next gap; neither: every finite pair."""

    count: int | None = None
    below: float | None = None

    @property
    def everything(self) -> bool:
        return self.count is None and self.below is None

    def __post_init__(self) -> None:
        if self.count is not None and self.count < 1:
            raise ChoiceError("that many modes do not exist", expected="at least 1", got=str(self.count))

    def near(self, x: Real) -> float:
        """The point that the list must reach, from ascending x."""
        ends = [-np.inf if self.below is None else self.below]
        if self.count is not None and len(x):
            ends.append(float(x[min(self.count, len(x)) - 1]))
        return max(ends)


@dataclass(frozen=True, kw_only=True, eq=False)
class Found:
    """Which Ritz pairs are taken, the estimate of the next eigenvalue, and whether the goal is met."""

    which: Any
    next_x: float
    done: bool
    status: str = "converged"


def examine(ritz: Ritz, sigma: float, goal: Goal, tolerance: float, below_sigma: int | None) -> Found:
    """The converged pairs nearest above the shift without a hole, all converged ones below it, up to a gap."""
    theta = ritz.theta
    relative = ritz.estimate / np.maximum(np.abs(theta), 1e-300)
    strong = np.abs(theta) > 1e-14 * np.abs(theta).max()
    negative = np.flatnonzero((theta < 0) & strong & (relative < tolerance))
    positive = np.flatnonzero((theta > 0) & strong)
    positive = positive[np.argsort(-theta[positive])]
    ok = relative[positive] < tolerance
    c = int(np.argmin(ok)) if not ok.all() else len(ok)
    x = sigma + 1 / theta[positive]
    last = _end(x, c, relative[positive] < 1e-3, goal, len(negative))
    if last is None or (below_sigma is not None and len(negative) < below_sigma):
        after = float(x[c]) if c < len(x) else np.nan
        return Found(which=np.concatenate([negative, positive[:c]]), next_x=after, done=False)
    which = np.concatenate([negative, positive[: last + 1]])
    return Found(which=which, next_x=float(x[last + 1]), done=True)


def _end(x: Real, c: int, settled: Any, goal: Goal, negative: int) -> int | None:
    """Index of the last pair of the list, None while the goal is not met; x ascending, the first c converged."""
    if goal.everything:
        return None
    least = max((goal.count or 0) - negative - 1, -1)
    floor = -np.inf if goal.below is None else goal.below
    for i in range(least, c):
        if i + 1 >= len(x) or not settled[i + 1]:
            return None
        if x[i + 1] > floor and _is_gap(max(floor, x[i] if i >= 0 else -np.inf), x[i + 1], i - least):
            return i
    return None


def _is_gap(lower: float, upper: float, beyond: int) -> bool:
    """Wide enough for a counting point; spectra without wide gaps are not followed for ever."""
    if not np.isfinite(lower):
        return True
    need = GAP if beyond < 30 else GAP / 10 if beyond < 100 else GAP / 1e4
    return upper - lower > need * max(abs(upper), abs(lower))


def converged(ritz: Ritz, sigma: float, tolerance: float) -> Found:
    """Everything that has converged, for a search that was stopped."""
    return replace(examine(ritz, sigma, Goal(), tolerance, None), done=True)


def everything(ritz: Ritz, sigma: float) -> Found:
    """All pairs of an invariant space: every finite mode."""
    if len(ritz.theta) == 0:
        return Found(which=np.zeros(0, dtype=int), next_x=np.inf, done=True)
    which = np.flatnonzero(np.abs(ritz.theta) > 1e-14 * np.abs(ritz.theta).max())
    return Found(which=which[np.argsort(sigma + 1 / ritz.theta[which])], next_x=np.inf, done=True)
