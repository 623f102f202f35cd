"""How far the modal stage has to go: a band, a count, or both."""

from __future__ import annotations

from dataclasses import dataclass

from modesieve.reduce.errors import ChoiceError

#: Modes are computed to this multiple of the band's top (common practice asks for 1.5 to 2).
MARGIN = 1.5
#: Number of modes computed when neither a band nor a count is given and the model is too large to solve whole.
DEFAULT_COUNT = 20


@dataclass(frozen=True, kw_only=True)
class Request:
    """band (low, high) in rad/s or None; count: at least so many modes, or None."""

    band: tuple[float, float] | None = None
    count: int | None = None

    def below(self, kind: str) -> float | None:
        """Every mode below this must be found: omega^2 for structures, decay rate for thermal models."""
        if self.band is None:
            return None
        top = MARGIN * self.band[1]
        return top**2 if kind == "structure" else top


def make_request(band: tuple[float, float] | None, count: int | None, n: int) -> Request:
    """A checked request. Raises ChoiceError for a band upside down, or more modes than unknowns."""
    if band is not None and not 0 <= band[0] < band[1]:
        raise ChoiceError(
            "the band is upside down",
            expected="low below high, both at least 0",
            got=f"{band[0]:.6g} to {band[1]:.6g} rad/s",
            remedy="swap the two ends",
        )
    if count is not None and not 1 <= count <= n:
        raise ChoiceError(
            "more modes asked for than there can be" if count > n else "at least one mode must be asked for",
            expected=f"1 to {n}, the number of unknowns",
            got=str(count),
        )
    if band is None and count is None:
        count = min(DEFAULT_COUNT, n)
    return Request(band=band, count=count)
