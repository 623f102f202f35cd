"""Quick trials of kept sets against the hub on fixed frequencies: what a search for a set needs, hundreds of times."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.response.norms import frobenius, largest_singular_value
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal
from modesieve.reduce.truncation.hub import Hub, gains
from modesieve.reduce.truncation.records import Statics
from modesieve.reduce.truncation.tails import with_static_remainder, with_tail_levels

_PIECE = 1 << 22


@dataclass(frozen=True, kw_only=True)
class Static:
    """What a small model does about statics: "none", "feedthrough" or "vectors" with so many levels; damped: whether
    its pseudo-modes carry the base damping's rule (see `with_tail_levels`)."""

    kind: Statics
    levels: int = 0
    damped: bool = True


def small_system(hub: Hub, kept: tuple[int, ...], static: Static) -> SmallSystem:
    """The small model of a kept set."""
    if static.kind == "feedthrough":
        return with_static_remainder(hub, kept)
    return with_tail_levels(hub, kept, static.levels, damped=static.damped).system


@dataclass(frozen=True, kw_only=True, eq=False)
class Trial:
    """Guaranteed error of kept sets at sampled frequencies. of: "peak", "local" or "absolute".

    omega (w,); scale (w,): the reference there, from below (1 for absolute); outputs: mask (p,) of the outputs that an
    absolute tolerance is about.
    """

    hub: Hub
    omega: Real
    of: str
    scale: Real
    outputs: Real

    @cached_property
    def _own(self) -> tuple[Real, Real]:
        return self.hub.bound(self.omega)

    @cached_property
    def _terms(self) -> Diagonal:
        return self.hub.terms

    @cached_property
    def _gain(self) -> Complex:
        with np.errstate(divide="ignore", invalid="ignore"):
            return gains(self._terms, self.omega)

    def error(self, kept: tuple[int, ...], static: Static) -> float:
        """Worst guaranteed error over the samples, relative to the reference (in output units for absolute)."""
        return float(np.max(self.curve(kept, static), initial=0.0))

    def curve(self, kept: tuple[int, ...], static: Static) -> Real:
        """The same at every sample, (w,)."""
        small = diagonal(small_system(self.hub, kept, static))
        E = self._difference(np.asarray(sorted(kept), dtype=int) - 1, small)
        total, entry = self._own
        if self.of == "absolute":
            size = (np.abs(E) + entry) * self.hub.amplitudes
            return np.asarray(size.sum(axis=2)[:, self.outputs.astype(bool)].max(axis=1, initial=0.0))
        return np.asarray((largest_singular_value(self.hub.weigh(E)) + total) / self.scale)

    def quickly(self, kept: tuple[int, ...], static: Static, limit: float) -> bool:
        """True when the error is within ``limit`` at every sample; decided by the Frobenius norm where it can be."""
        if self.of == "absolute" or min(self.hub.direct.shape) == 1:
            return self.error(kept, static) <= limit
        small = diagonal(small_system(self.hub, kept, static))
        E = self.hub.weigh(self._difference(np.asarray(sorted(kept), dtype=int) - 1, small))
        room = limit * self.scale - self._own[0]
        wide = frobenius(E)
        if np.any(wide > room * np.sqrt(min(E.shape[1:]))):
            return False
        unsure = wide > room
        return bool(np.all(largest_singular_value(E[unsure]) <= room[unsure]))

    def _difference(self, keep: Real, small: Diagonal) -> Complex:
        """H - R (w, p, m), physical, without the kept terms that both have."""
        gone = np.setdiff1d(np.arange(self._terms.terms), keep)
        extra = small.select(np.arange(len(keep), small.terms))
        static = self._terms.X / (1 + 1j * self._terms.eta_X) - small.X / (1 + 1j * small.eta_X)
        with np.errstate(divide="ignore", invalid="ignore"):
            minus = gains(extra, self.omega)
        return (
            _sum(self._terms.select(gone), self._gain[:, gone], self.omega)
            - _sum(extra, minus, self.omega)
            + (static + self._terms.D - small.D)
        )

    def strength(self, levels: int) -> Real:
        """How much every computed mode can matter in the samples, (k,): its weighted contribution over the reference.

        With levels, dropped modes answer statically and up to the matched moments: each takes a factor abs(s^2/x).
        """
        terms, w = self._terms, self.omega
        C = np.abs(terms.cq)[None] + w[:, None, None] * np.abs(terms.cv) + (w**2)[:, None, None] * np.abs(terms.ca)
        rows = np.sqrt(np.sum((C / self.hub.resolutions[:, None]) ** 2, axis=1))
        size = rows * np.linalg.norm(terms.b * self.hub.amplitudes, axis=1) * np.abs(self._gain) / self.scale[:, None]
        power = (w**2 if terms.order == 2 else w)[:, None] / np.maximum(np.abs(terms.x), 1e-300)
        return np.asarray(np.max(size * np.minimum(power, 1.0) ** levels, axis=0)[: self.hub.computed])


def _sum(terms: Diagonal, gain: Complex, omega: Real) -> Complex:
    out = np.zeros((len(omega), terms.D.shape[0], terms.D.shape[1]), dtype=complex)
    step = max(1, _PIECE // max(terms.terms * max(terms.D.shape[0], 1), 1))
    for i in range(0, len(omega), step):
        w = omega[i : i + step, None, None]
        C = terms.cq + 1j * w * terms.cv - w**2 * terms.ca
        out[i : i + step] = (C * gain[i : i + step, None, :]) @ terms.b
    return out
