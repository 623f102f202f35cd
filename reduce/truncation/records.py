"""Stage 2's records: the typed choices and the reduced model."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal, TypeAlias

from modesieve.reduce.arrays import Real
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.report import ShowsAsTable, aligned, number, runs, share, span
from modesieve.reduce.response.records import ErrorFigure, FullResponse
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.guarantee import Guarantee
from modesieve.reduce.truncation.hub import Hub

Statics: TypeAlias = Literal["none", "feedthrough", "vectors"]


@dataclass(frozen=True, kw_only=True)
class Count:
    """Keep the first ``modes`` of the ranking, always-kept ones included; coupled cluster members never split."""

    modes: int


@dataclass(frozen=True, kw_only=True)
class Band:
    """Keep every mode with ``low <= abs(lambda) <= high`` (rad/s)."""

    low: float
    high: float


@dataclass(frozen=True, kw_only=True)
class Above:
    """Keep every mode whose ``measure`` is at least ``share`` of the largest (for "decay": at least ``share`` s)."""

    measure: str
    share: float


@dataclass(frozen=True, kw_only=True)
class Keep:
    """Keep exactly these mode numbers (and the always-kept ones, and the rest of a non-normal block)."""

    numbers: tuple[int, ...]


@dataclass(frozen=True, kw_only=True)
class Tolerance:
    """The smallest count in rank order whose error passes.

    value: a ratio for ``peak`` and ``local``; for ``absolute`` a size in the outputs' ``unit``, for the sum over all
    inputs at their amplitudes. unit: as given by the user, for messages.
    """

    value: float
    of: Literal["peak", "local", "absolute"] = "local"
    unit: str = ""


Choice: TypeAlias = Count | Band | Keep | Tolerance | tuple[Above, ...]


@dataclass(frozen=True, kw_only=True, eq=False, repr=False)
class ReducedModel(ShowsAsTable):
    """A small model, what it was cut from, and how wrong it is.

    kept: mode numbers in ascending order (() when a file holds none). system: the small model with its statics.
    error: the figure asked for by the choice, or the local error over the band; None when there was no band to
    measure in. samples: the full response that `error` was measured on. choice: how the kept set was chosen.
    uniform (states,): the state of a thermal model at one degree everywhere, None where it is not known.
    """

    modes: Modes
    kept: tuple[int, ...]
    system: SmallSystem
    statics: Statics
    choice: Any
    ranked_by: str = ""
    band: tuple[float, float] | None = None
    error: ErrorFigure | None = None
    samples: FullResponse | None = None
    uniform: Real | None = None
    notes: tuple[str, ...] = ()
    ranking: Ranking | None = field(default=None, repr=False)
    levels: int = 0
    hub: Hub | None = field(default=None, repr=False)
    guarantee: Guarantee | None = field(default=None, repr=False)

    @property
    def states(self) -> int:
        return self.system.states

    def response(self, omega: Real) -> Any:
        """``R(j w)``, shape (w, p, m), physical channel units."""
        return self.system.response(omega)

    def __repr__(self) -> str:
        origin, kept = self.modes.origin, len(self.kept)
        size = f"{self.states} states"
        if kept:
            size = f"{kept} of {len(self.modes)} computed modes ({runs(self.kept)}), {size}"
        title = f"Reduced model of {origin.title or 'a model'} ({origin.kind}, {origin.n} unknowns)"
        rows = [
            ("kept", size),
            ("chosen", describe_choice(self.choice)),
            ("ranked by", self.ranked_by),
            ("statics", self.statics),
            ("band", span(self.band)),
            ("error", str(self.error) if self.error is not None else "not measured"),
        ]
        return aligned(title, [*rows, *(("note", note) for note in self.notes)])


def describe_choice(choice: Any) -> str:
    """How the kept set was chosen, in words; "" for what is none of the typed choices.

    >>> describe_choice(Tolerance(value=0.02)), describe_choice((Above(measure="decay", share=3.0),))
    ('tolerance 2 % of local', 'above decay 3 s')
    """
    match choice:
        case Count(modes=count):
            return f"count {count}"
        case Band():
            return f"band {span((choice.low, choice.high))}"
        case Keep():
            return "keep list"
        case Tolerance(of="absolute"):
            return f"tolerance {number(choice.value)} {choice.unit}".rstrip()
        case Tolerance():
            return f"tolerance {share(choice.value)} of {choice.of}"
        case tuple() if choice and all(isinstance(one, Above) for one in choice):
            parts = [f"{a.measure} {number(a.share)}" + (" s" if a.measure == "decay" else "") for a in choice]
            return "above " + " or ".join(parts)
    return str(choice) if isinstance(choice, str) else ""
