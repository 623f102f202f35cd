"""The worst error between the samples: branch and bound over the band.

Every interval has a proved upper bound (`enclosure`) and a value in its middle; intervals whose upper bound exceeds the
best value by more than a stated share are halved. What is returned holds for every frequency of the band.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import TypeAlias

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.response.norms import frobenius
from modesieve.reduce.truncation.diagonal import Diagonal
from modesieve.reduce.truncation.enclosure import (
    Rational,
    difference,
    enclose,
    entries,
    expand,
    nearest,
    product_norm,
    transposed,
    upper_norm,
)
from modesieve.reduce.truncation.hub import Hub

#: Upper bounds of some quantities over every interval, and their values in the middles: (w, q) each.
Bounds: TypeAlias = Callable[[Real, Real], tuple[Real, Real]]


@dataclass(frozen=True, kw_only=True)
class Supremum:
    """value: no larger anywhere in the band; reached: seen at ``at_omega``; evaluations: intervals looked at."""

    value: float
    reached: float
    at_omega: float
    evaluations: int


def suprema(bounds: Bounds, edges: Real, *, share: float = 0.01, budget: int = 40_000) -> tuple[Supremum, ...]:
    """Suprema of several quantities over [edges[0], edges[-1]], each proved to ``share`` of its largest seen value.

    Stops early, with looser but valid values, after ``budget`` intervals.
    """
    left, right = edges[:-1], edges[1:]
    upper, middle = bounds(left, right)
    best, at = middle.max(axis=0), ((left + right) / 2)[np.argmax(middle, axis=0)]
    proved, used = np.zeros(upper.shape[1]), len(left)
    while True:
        open_ = np.any(upper > best * (1 + share), axis=1) & (right - left > 1e-12 * right)
        proved = np.maximum(proved, upper[~open_].max(axis=0, initial=0.0))
        count = int(np.count_nonzero(open_))
        if count == 0 or used + 2 * count > budget or np.all(np.isinf(best)):
            proved = np.maximum(proved, upper[open_].max(axis=0, initial=0.0))
            break
        half = (left[open_] + right[open_]) / 2
        left, right = np.concatenate([left[open_], half]), np.concatenate([half, right[open_]])
        upper, middle = bounds(left, right)
        used += 2 * count
        seen = np.argmax(middle, axis=0)
        better = middle.max(axis=0) > best
        at = np.where(better, ((left + right) / 2)[seen], at)
        best = np.maximum(best, middle.max(axis=0))
    proved = np.maximum(proved, best)
    parts = zip(proved.tolist(), best.tolist(), at.tolist(), strict=True)
    return tuple(Supremum(value=v, reached=b, at_omega=w, evaluations=used) for v, b, w in parts)


@dataclass(frozen=True, kw_only=True, eq=False)
class Gap:
    """A small model held against a hub, over whole intervals. small: its terms, of the hub's order."""

    hub: Hub
    small: Diagonal

    @cached_property
    def _difference(self) -> Rational:
        return transposed(difference(self.hub.terms, self.small), self.hub.resolutions, self.hub.amplitudes)

    @cached_property
    def _reference(self) -> Rational:
        return transposed(self.hub.terms, self.hub.resolutions, self.hub.amplitudes)

    def relative(self, left: Real, right: Real, *, threshold: float) -> tuple[Real, Real]:
        """Weighted error, and error over the local reference ``max(sigma(G), threshold)``: (w, 2) upper and middle.

        The reference is bounded from below by ``sigma(H) - e_H``.
        """
        gap = enclose(self._difference, left, right)
        own, here = hub_suprema(self.hub, left, right)
        error, value = gap.upper + own, gap.middle + here
        if threshold <= 0:
            return error[:, None], value[:, None]
        reference = enclose(self._reference, left, right)
        below = np.maximum(reference.lower - own, threshold)
        seen = np.maximum(reference.middle - here, threshold)
        with np.errstate(invalid="ignore"):
            local, point = error / below, value / seen
        return np.column_stack([error, _inf(local)]), np.column_stack([value, _inf(point)])

    def per_entry(self, left: Real, right: Real) -> tuple[Real, Real]:
        """Weighted error of every entry, (w, p m) upper and middle, outputs first."""
        mid = (left + right) / 2
        own, here = hub_entry_suprema(self.hub, left, right)
        upper = np.swapaxes(entries(self._difference, left, right), 1, 2) + own
        value = np.swapaxes(np.abs(self._difference.at(mid)), 1, 2) + here
        return upper.reshape(len(left), -1), np.asarray(value).reshape(len(left), -1)

    def per_output(self, left: Real, right: Real) -> tuple[Real, Real]:
        """Every output's weighted error with all inputs at their amplitudes added, (w, p) upper and middle."""
        upper, value = self.per_entry(left, right)
        shape = (len(left), self.small.D.shape[0], self.small.D.shape[1])
        return upper.reshape(shape).sum(axis=2), value.reshape(shape).sum(axis=2)


# ---- the hub's own bound over intervals ------------------------------------------------------------------------------


def hub_suprema(hub: Hub, left: Real, right: Real) -> tuple[Real, Real]:
    """No smaller than ``e_H(w)`` anywhere in each interval, and its value in the middle (rounding as for all), (w,)."""
    own = _hub_bounds(hub, left, right)
    widened = frobenius(hub.weigh(_rounding(hub, left, right)))
    return own.total + widened, hub.galerkin((left + right) / 2)[0] + widened


def hub_entry_suprema(hub: Hub, left: Real, right: Real) -> tuple[Real, Real]:
    """The same for every weighted entry, (w, p, m)."""
    own = _hub_bounds(hub, left, right)
    widened = np.abs(hub.weigh(_rounding(hub, left, right)))
    here = np.abs(hub.weigh(hub.galerkin((left + right) / 2)[1]))
    return own.entry + widened, here + widened


@dataclass(frozen=True, kw_only=True, eq=False)
class _HubBounds:
    total: Real
    entry: Real


@np.errstate(invalid="ignore", over="ignore")
def _hub_bounds(hub: Hub, left: Real, right: Real) -> _HubBounds:
    """The two forms of the hub's bound over intervals, the smaller of both; weighted."""
    load, out = (expand(f, left, right) for f in residual_functions(hub))
    q, centre, radius = spread(hub, left, right)
    through, through_entry = product_norm(out, load)
    norms, columns = zip(*(upper_norm(part) for part in (out, load)), strict=True)
    size = columns[0][:, :, None] * columns[1][:, None, :]
    wide = (slice(None), None, None)
    total = np.fmin(q * norms[0] * norms[1], centre * through + radius * norms[0] * norms[1])
    entry = np.fmin(q[wide] * size, centre[wide] * through_entry + radius[wide] * size)
    return _HubBounds(total=_inf(total), entry=_inf(entry))


def residual_functions(hub: Hub) -> tuple[Rational, Rational]:
    """The residuals of the weighted load (r, m) and of the weighted outputs (r, p) as functions of frequency, w > 0."""
    tail = hub.terms.select(np.arange(hub.computed, hub.terms.terms))
    d = _shift_polynomial(hub)
    L = -hub.tail_rest.astype(complex)
    b = tail.b * hub.amplitudes
    load = Rational(
        poles=tail, L=L, Q=_times(d, b[None].astype(complex)), P=(hub.load_rest * hub.amplitudes)[None].astype(complex)
    )
    kinds: Complex = np.array([1.0, 1j, -1.0])
    C: Complex = np.stack([tail.cq.T, tail.cv.T, tail.ca.T]) * kinds[:, None, None] / hub.resolutions
    out = Rational(poles=tail, L=L, Q=_times(d, C), P=hub.output_rest * kinds[:, None, None] / hub.resolutions)
    return load, out


def spread(hub: Hub, left: Real, right: Real) -> tuple[Real, Real, Real]:
    """Over each interval: no smaller than ``q(w)``; a disc (abs of its centre, radius) that holds the factor for all w.

    For every u the denominator ``a + d u`` changes at most by ``slope s`` from the middle; the middle's disc is widened
    by what that makes of the quotient.
    """
    rest, s, middle = hub.rest, (right - left) / 2, (left + right) / 2
    u_c = 0.0 if np.isinf(hub.x_c) else 1 / (hub.x_c - hub.sigma)
    if rest.order == 1:
        slope = np.full_like(s, u_c)
    else:
        slope = abs(rest.beta) + u_c * (abs(hub.sigma * rest.beta + rest.alpha) + 2 * right)
    here = rest.supremum(middle, hub.x_c, hub.sigma)
    with np.errstate(divide="ignore", invalid="ignore"):
        distance = 1 / here - slope * s
        q = np.where(distance > 0, 1 / np.where(distance > 0, distance, 1.0), np.inf)
        centre, radius = rest.disc(middle, hub.x_c, hub.sigma)
        radius = _inf(radius + slope * s * here * q)
    return q, np.abs(centre), radius


def _shift_polynomial(hub: Hub) -> Complex:
    """Coefficients of ``d(w) = a sigma + b`` for w > 0."""
    rest, sigma = hub.rest, hub.sigma
    if rest.order == 1:
        return np.array([sigma, 1j])
    return np.array([sigma * (1 + 1j * rest.eta), 1j * (sigma * rest.beta + rest.alpha), -1.0])


def _times(d: Complex, Q: Complex) -> Complex:
    """Product of a scalar polynomial and a matrix one, (e, k, q)."""
    out = np.zeros((len(d) + len(Q) - 1, *Q.shape[1:]), dtype=complex)
    for i, factor in enumerate(d):
        out[i : i + len(Q)] += factor * Q
    return out


def _rounding(hub: Hub, left: Real, right: Real) -> Real:
    """No smaller than the rounding limit and the defect (monotone in w) anywhere in each interval, (w, p, m)."""
    with np.errstate(divide="ignore"):
        gain = 1 / nearest(hub.terms, left, right)
    return hub.widening(gain, right) + np.maximum(hub.defect(left), hub.defect(right))


def _inf(values: Real) -> Real:
    return np.where(np.isnan(values), np.inf, values)
