"""Stage 1's records: the modes with their certificate, and the ranking."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal, TypeAlias

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real, frozen
from modesieve.reduce.model import Model, Origin
from modesieve.reduce.report import ShowsAsTable, aligned, columns, number
from modesieve.reduce.response.small import SmallSystem

Completeness: TypeAlias = Literal["all", "counted", "no"]


@dataclass(frozen=True, kw_only=True)
class Certificate:
    """Proof, or lack of it, that no mode is missing.

    complete: "all" (every finite mode of the model is here), "counted" (every mode below ``below_omega``, by the
    inertia count) or "no". below_omega: the counting point, rad/s for structures, 1/s (decay rate) for thermal;
    None unless counted. reason: why not complete, or how it was counted.
    """

    complete: Completeness
    below_omega: float | None = None
    expected: int | None = None
    found: int = 0
    negative_pivots: int | None = None
    shift: float | None = None
    solver: str = ""
    reason: str = ""


#: Rows of a printed list of modes.
_SHOWN = 12
_HEAD = ("mode", "Hz", "time constant s", "damping %", "cluster", "always kept")


def _worst(residual: Real) -> str:
    return f"at most {number(float(residual.max()))}" if residual.size else ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Modes(ShowsAsTable):
    """Computed modes of one model, in ascending ``abs(eigenvalue)``; numbers are 1-based and stay with the mode.

    origin: what is remembered of the full model; model: the full model itself, None when read from a file.
    A complex pair is one mode. eigenvalue (k,) complex in 1/s, imaginary part >= 0. term (k,): index of the mode's
    term in ``system``; the members of a non-normal block share one term, otherwise term is 0..k-1.
    residual (k,): true relative residual of the (right) eigenpair. condition (k,): eigenvalue condition number
    kappa, 1 for symmetric pencils. cluster: per mode the 1-based numbers of its group, itself included; () if alone.
    always_kept: per mode the reason it is never dropped ("rigid body", "integrating", "unstable") or "".
    vectors (n, k): right vectors (complex for pairs), scaled as `system` says; None when not stored. For a structure
    with proportional damping: the real M-orthonormal phi. left (n, k): left vectors where they differ.
    system: all modes in modal coordinates, ``D`` included (condensed massless unknowns too).
    static: (p, m) static response of all modes, computed or not, of the displacement (or only) outputs: ``C K^-1 F``
    without rigid-body and integrating modes, and without what `system` carries as D or X (massless unknowns). None
    with ``static_reason``. effective_mass (k, 3): squared participation for x, y, z, None when directions are unknown;
    total_mass (3,): r^T M r. uniform (states,): state of a thermal model at one degree everywhere, ``phi^T E 1``.
    """

    origin: Origin
    system: SmallSystem
    eigenvalue: Complex
    term: Ints
    residual: Real
    condition: Real
    cluster: tuple[tuple[int, ...], ...]
    always_kept: tuple[str, ...]
    certificate: Certificate
    model: Model | None = field(default=None, repr=False)
    vectors: Any = None
    left: Any = None
    static: Real | None = None
    static_reason: str = ""
    effective_mass: Real | None = None
    total_mass: Real | None = None
    uniform: Real | None = None
    warnings: tuple[str, ...] = ()
    solver: str = ""
    factorisations: int = 0
    solves: int = 0
    seconds: float = 0.0
    # The shifted factor and Krylov vectors of the solve, for a full response in the same run; never stored in a file.
    workspace: Any = field(default=None, repr=False)

    def __post_init__(self) -> None:
        for name in ("eigenvalue", "term", "residual", "condition"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name))))

    def __len__(self) -> int:
        return len(self.eigenvalue)

    @property
    def numbers(self) -> Ints:
        return np.arange(1, len(self) + 1)

    @property
    def omega(self) -> Real:
        """``abs(lambda)`` in rad/s, shape (k,)."""
        return np.abs(self.eigenvalue)

    @property
    def frequency_hz(self) -> Real:
        """``abs(lambda)/(2 pi)``, shape (k,)."""
        return self.omega / (2 * np.pi)

    @property
    def decay_rate(self) -> Real:
        """``-Re lambda`` in 1/s; negative for unstable modes."""
        return -self.eigenvalue.real

    @property
    def time_constant(self) -> Real:
        """``1/-Re lambda`` in s, inf for undamped or integrating modes, nan for unstable ones."""
        rate = self.decay_rate
        with np.errstate(divide="ignore"):
            return np.where(rate > 0, 1 / np.where(rate == 0, 1, rate), np.where(rate == 0, np.inf, np.nan))

    @property
    def damping_ratio(self) -> Real:
        """``-Re lambda / abs(lambda)``, nan for a zero eigenvalue."""
        size = np.abs(self.eigenvalue)
        return np.where(size > 0, self.decay_rate / np.where(size > 0, size, 1.0), np.nan)

    def __repr__(self) -> str:
        c = self.certificate
        count = {"all": "every mode is known", "counted": f"{c.expected} counted, {c.found} found"}.get(
            c.complete, c.reason
        )
        title = f"{len(self)} modes of {self.origin.title or 'a model'} ({self.origin.kind}, {self.origin.n} unknowns)"
        head = aligned(title, [("complete", count), ("solver", self.solver), ("residual", _worst(self.residual))])
        return "\n".join([head, columns(_HEAD, [self._row(i) for i in range(min(len(self), _SHOWN))])])

    def _row(self, i: int) -> list[str]:
        group = "-".join(map(str, self.cluster[i]))
        values = (self.frequency_hz[i], self.time_constant[i], 100 * self.damping_ratio[i])
        return [str(i + 1), *(number(float(v)) for v in values), group, self.always_kept[i]]

    def modes_of(self, term: int) -> Ints:
        """1-based numbers of the modes that share a term."""
        return np.flatnonzero(self.term == term) + 1


@dataclass(frozen=True, kw_only=True, eq=False)
class Ranking(ShowsAsTable):
    """Every measure side by side, and the order by one of them.

    measures: name to (k,) values per mode, nan where undefined; undefined: name to the reason, where any value is.
    by: the measure that orders. order (k,): mode numbers, descending by ``by``, ties by frequency then decay;
    always-kept modes first. band: (low, high) in rad/s used by band measures, None if not given.
    """

    modes: Modes
    by: str
    measures: dict[str, Real]
    undefined: dict[str, str]
    order: Ints
    band: tuple[float, float] | None = None
    warnings: tuple[str, ...] = ()

    def __repr__(self) -> str:
        title = f"Ranking of {len(self.modes)} modes by {self.by}"
        values = self.measures[self.by]
        rows = [
            [str(n), number(float(self.modes.frequency_hz[n - 1])), number(float(values[n - 1]))] for n in self.order
        ]
        return "\n".join([title, columns(("mode", "Hz", self.by), rows[:_SHOWN])])
