"""What was asked for: a band, a count, or neither."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.errors import ChoiceError

#: Modes are computed at least to this multiple of the band's top (common practice).
MARGIN = 1.5
#: Up to this many unknowns every mode is computed when neither a band nor a count is given.
ALL_LIMIT = 1000
#: Up to this many unknowns every mode is kept even if a band is given: nothing then has to be estimated.
WHOLE_LIMIT = 300
#: Modes of a large model when nothing is said.
DEFAULT_COUNT = 20


@dataclass(frozen=True, kw_only=True)
class Request:
    """count: at least so many modes, None: by the edge; edge: ``MARGIN * high`` in rad/s (1/s thermal); both None: all.

    warning: what was assumed, "" if nothing.
    """

    count: int | None = None
    edge: float | None = None
    warning: str = ""

    @property
    def wants_all(self) -> bool:
        return self.count is None and self.edge is None


def request(band: tuple[float, float] | None, count: int | None, n: int) -> Request:
    """The request on a model of n unknowns.

    Raises ChoiceError for a band that is none, for counts below 1 or above n, and for both at once.
    """
    if count is not None and not 1 <= count <= n:
        raise ChoiceError(
            f"{count} modes cannot be computed",
            expected=f"1 to {n}, the number of unknowns",
            got=str(count),
            remedy="ask for fewer modes" if count > n else "",
        )
    edge = MARGIN * _top(band) if band is not None else None
    if count is not None or edge is not None:
        return Request(count=count, edge=edge)
    if n <= ALL_LIMIT:
        return Request()
    warning = f"neither a band nor a count was given: the {DEFAULT_COUNT} lowest modes of {n} unknowns were computed"
    return Request(count=DEFAULT_COUNT, warning=warning)


def _top(band: tuple[float, float]) -> float:
    low, high = float(band[0]), float(band[1])
    if not (np.isfinite(low) and np.isfinite(high) and 0 <= low < high):
        raise ChoiceError(
            "the band is not one",
            expected="0 <= low < high, both finite",
            got=f"{low / (2 * np.pi):.6g} Hz to {high / (2 * np.pi):.6g} Hz",
            remedy="give the lower end first",
        )
    return high


def too_many(count: int, exist: int, why: str = "") -> ChoiceError:
    """The refusal of more modes than a model has."""
    return ChoiceError(
        f"{count} modes do not exist",
        expected=f"at most {exist}, the number of finite modes of this model",
        got=str(count),
        where=why,
        remedy=f"ask for {exist} or fewer",
    )
