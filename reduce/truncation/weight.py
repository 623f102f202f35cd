"""An uncertainty weight for robust control: a small stable, minimum-phase W(s) above the guaranteed error everywhere.

Additive uncertainty ``G = R + W Delta, norm(Delta) <= 1`` (e.g. Skogestad and Postlethwaite, Multivariable Feedback
Control, 2nd ed. 2005, section 7.4). W is a product of second-order sections, so that stability and minimum phase hold
by construction; the sections minimise the over-cover in decibels under the condition that no point is left uncovered.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import minimize
from scipy.signal import zpk2ss

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem
from modesieve.reduce.truncation.certify import grid_of
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal, is_diagonal
from modesieve.reduce.truncation.hub import Hub, gains
from modesieve.reduce.truncation.quick import computed_gap

_DB = 20 / np.log(10)
_SPAN = 30.0  # how far above the counting point the axis is looked at; beyond, curve and weight are both smooth
_EVEN, _RANDOM, _STARTS = 400, 800, 4


@dataclass(frozen=True, kw_only=True, eq=False)
class Scatter:
    """How far frequencies and damping may be off in reality, relative: 0.02 and 0.3 for 2 % and 30 %."""

    frequency: float = 0.0
    damping: float = 0.0


@dataclass(frozen=True, kw_only=True, eq=False)
class Weight:
    """W(s) = gain prod (s - zeros)/prod (s - poles), of at most order 4. system: the same in state space.

    omega (w,), curve (w,), magnitude (w,): the guaranteed error and W on the grid that was checked, peaks included.
    median_db: over-cover on an even logarithmic grid; worst_db: anywhere. certain_to: rad/s up to which coverage was
    checked point by point. notes.
    """

    zeros: Complex
    poles: Complex
    gain: float
    system: FirstOrderModal
    omega: Real
    curve: Real
    magnitude: Real
    median_db: float
    worst_db: float
    certain_to: float
    notes: tuple[str, ...] = ()

    @property
    def order(self) -> int:
        return len(self.poles)


def uncertainty_weight(
    hub: Hub,
    small: SmallSystem,
    *,
    pair: tuple[int, int] | None = None,
    order: int = 4,
    scatter: Scatter | None = None,
) -> Weight:
    """The weight that covers the guaranteed error of ``small`` on the whole axis.

    pair: (output, input) indices for one entry in physical units; None: the largest singular value, weighted channels.
    scatter: also cover this much scatter of the kept modes' frequencies and damping ratios.

    Raises ChoiceError where the guaranteed error is infinite above the counting point (undamped rest), or an order that
    is not 1 to 4.
    """
    if not 1 <= order <= 4:
        raise ChoiceError("no weight of that order", expected="1 to 4", got=str(order))
    omega = _axis(hub, small)
    curve = error_curve(hub, small, omega, pair=pair, scatter=scatter)
    if not np.all(np.isfinite(curve)):
        at = float(omega[~np.isfinite(curve)][0]) / (2 * np.pi)
        raise ChoiceError(
            "no weight covers the guaranteed error on the whole axis",
            expected="damping in everything that was not computed",
            got=f"an error without limit at {at:.6g} Hz: there the uncomputed part may resonate undamped",
            remedy="give the model Rayleigh damping or a loss factor",
        )
    curve = np.maximum(curve, 1e-12 * curve.max())
    even = _even(omega)
    candidates = [_fit(omega, np.log(curve), even, n) for n in sorted({1, 2, order} & set(range(order + 1)))]
    zeros, poles, gain = min(candidates, key=lambda c: (round(_median(omega[even], curve[even], c), 1), len(c[1])))
    # Between the points of the fit: eight times as many, and a per cent for what even they may step over.
    fine = np.unique(np.concatenate([omega[:-1] + share * np.diff(omega) for share in np.linspace(0, 1, 9)]))
    missing = error_curve(hub, small, fine, pair=pair, scatter=scatter) / magnitude(zeros, poles, gain, fine)
    gain *= 1.01 * max(1.0, float(missing.max()))
    return _weight(omega, curve, even, zeros, poles, gain, _grows(hub, pair))


def error_curve(
    hub: Hub, small: SmallSystem, omega: Real, *, pair: tuple[int, int] | None = None, scatter: Scatter | None = None
) -> Real:
    """Guaranteed error, plus what a scatter of the kept modes makes, (w,).

    The smaller of ``norm(H - R) + e_H`` and the quick form: above the counting point the hub's tail has resonances that
    the full model need not have, and knowing nothing but energies is better.
    """
    gap = hub.response(omega) - small.response(omega)
    total, entry = hub.bound(omega)
    quick_total, quick_entry = computed_gap(hub, small, omega)
    if pair is not None:
        k, l = pair
        curve = np.fmin(np.abs(gap[:, k, l]) + entry[:, k, l], quick_entry[:, k, l])
    else:
        curve = np.fmin(largest_singular_value(hub.weigh(gap)) + total, quick_total)
    if scatter is None:
        return np.asarray(curve)
    return np.asarray(curve + scattered(hub, small, omega, scatter, pair))


def scattered(hub: Hub, small: SmallSystem, omega: Real, scatter: Scatter, pair: tuple[int, int] | None = None) -> Real:
    """Bound of what the scatter of every elastic mode of ``small`` does together, (w,): triangle inequality over modes.

    ``sup abs(h'_i - h_i)`` over the box of frequencies and damping, its resonance included.
    """
    if not is_diagonal(small):
        raise ChoiceError("no scatter of coupled blocks", expected="a small model of single modes", got="blocks")
    terms = diagonal(small)
    terms = terms.select(np.flatnonzero(terms.x > 0))
    w = np.asarray(omega, dtype=float)
    C = np.abs(terms.cq) + w[:, None, None] * np.abs(terms.cv) + (w**2)[:, None, None] * np.abs(terms.ca)
    if pair is not None:
        size = C[:, pair[0], :] * np.abs(terms.b[:, pair[1]])
    else:
        rows = np.sqrt(np.sum((C / hub.resolutions[:, None]) ** 2, axis=1))
        size = rows * np.linalg.norm(terms.b * hub.amplitudes, axis=1)
    return np.asarray(np.sum(size * _moved(terms, w, scatter), axis=1))


def _moved(terms: Diagonal, w: Real, scatter: Scatter) -> Real:
    """``sup abs(h' - h)`` over a fine grid of the box and the frequency itself where it lies inside, (w, k)."""
    nominal, out = gains(terms, w), np.zeros((len(w), terms.terms))
    power = 2 if terms.order == 2 else 1
    low, high = terms.x * (1 - scatter.frequency) ** power, terms.x * (1 + scatter.frequency) ** power
    inside = np.clip((w**power)[:, None], low, high)
    shares = np.linspace(0, 1, 25)
    for x in (*(np.broadcast_to(low + s * (high - low), out.shape) for s in shares), inside):
        for factor in (1 - scatter.damping, 1 + scatter.damping):
            if terms.order == 1:
                h = 1 / (1j * w[:, None] + x)
            else:
                root = np.sqrt(x / terms.x)  # a damping ratio stays what it is: d scales with the frequency
                h = 1 / (
                    x * (1 + 1j * factor * terms.eta) + 1j * w[:, None] * factor * terms.d * root - w[:, None] ** 2
                )
            out = np.maximum(out, np.abs(h - nominal))
    return out


def _axis(hub: Hub, small: SmallSystem) -> Real:
    """From far below the first mode to far above the counting point, every mode and pseudo-mode with its flanks."""
    size = hub.terms.x if hub.rest.order == 1 else np.sqrt(np.maximum(hub.terms.x, 0.0))
    elastic = size[size > 1e-6 * size.max(initial=0.0)]
    top = hub.x_c if hub.rest.order == 1 else np.sqrt(hub.x_c)
    top = _SPAN * float(top if np.isfinite(top) else size.max())
    low = 0.1 * float(elastic.min(initial=top))
    return np.unique(np.concatenate([grid_of(hub, small, (low, top)), np.geomspace(low, top, _EVEN)]))


def _grows(hub: Hub, pair: tuple[int, int] | None) -> tuple[str, ...]:
    rows = slice(None) if pair is None else [pair[0]]
    if not np.any(hub.terms.ca[rows]):
        return ()
    return (
        "acceleration outputs: the guaranteed error grows like the square of the frequency, and no proper weight"
        f" follows it for ever; covered up to {_SPAN:g} times the counting point",
    )


# ---- the fit ---------------------------------------------------------------------------------------------------------


def _even(omega: Real) -> Any:
    """The places nearest to an even logarithmic grid: over-cover counts there, coverage everywhere."""
    ideal = np.geomspace(omega[0], omega[-1], _EVEN)
    return np.unique(np.clip(np.searchsorted(omega, ideal * (1 - 1e-12)), 0, len(omega) - 1))


def _fit(omega: Real, target: Real, even: Any, order: int) -> tuple[Complex, Complex, float]:
    """Least over-cover in log magnitude on the even grid with every point covered, from a few starts."""
    at = _Places(omega=omega, target=target, even=even, peaks=_peaks(omega, target), order=order)
    best, value = None, np.inf
    for v in _starts(at):
        for cost in (np.mean, _capped, _share_above):
            v = _minimised(v, at, cost)
            lifted = at.covering(v)
            over = float(np.median(at.over(lifted, even)))
            if np.isfinite(over) and over < value:
                best, value = lifted, over
    assert best is not None
    return _roots(best, order)


@dataclass(frozen=True, kw_only=True, eq=False)
class _Places:
    """Where a fit is judged: ``target`` is the log of the curve; even and peaks index it."""

    omega: Real
    target: Real
    even: Any
    peaks: Any
    order: int

    def over(self, v: Real, at: Any) -> Real:
        return _log_size(v, self.omega[at], self.order) - self.target[at]

    def covering(self, v: Real, at: Any = slice(None)) -> Real:
        """The same with the gain raised (or lowered) until the tightest point is just covered."""
        out = np.array(v, dtype=float)
        out[0] -= float(np.min(self.over(out, at))) - 1e-9
        return out


def _peaks(omega: Real, target: Real) -> Any:
    """About three hundred places that must be covered: the highest of each stretch of the axis."""
    cells = np.floor((np.log(omega) - np.log(omega[0])) / (np.log(omega[-1]) - np.log(omega[0])) * 300).astype(int)
    return np.array([np.flatnonzero(cells == c)[np.argmax(target[cells == c])] for c in np.unique(cells)])


def _capped(over: Real) -> float:
    """Mean of ``log(1 + over/2 dB)``: what is far above anyway (between two peaks) counts little."""
    return float(np.mean(np.log1p(np.maximum(over, 0.0) * _DB / 2)))


def _share_above(over: Real) -> float:
    """Smooth share of the axis that is covered by more than about 2 dB: what the median answers to."""
    high = np.maximum(over, 0.0) * _DB / 2
    return float(np.mean(high / (1 + high)))


def _minimised(start: Real, at: _Places, cost: Callable[[Real], Any]) -> Real:
    found = minimize(
        lambda v: float(cost(at.over(v, at.even))),
        start,
        method="SLSQP",
        constraints={"type": "ineq", "fun": lambda v: at.over(v, at.peaks)},
        bounds=_bounds(np.log(at.omega), at.order),
        options={"maxiter": 60, "ftol": 1e-5},
    )
    return np.asarray(found.x)


def _sections(order: int) -> tuple[int, int]:
    return order // 2, order % 2


def _log_size(v: Real, omega: Real, order: int) -> Real:
    """``log abs(W(j w))``: v holds the log gain, then log frequency and log damping of zero and pole of every section,
    then log zero and log pole of the real section."""
    pairs, single = _sections(order)
    out, at = np.full(len(omega), v[0]), 1
    for _ in range(pairs):
        for sign in (1.0, -1.0):
            ratio, zeta = omega / np.exp(v[at]), np.exp(v[at + 1])
            out = out + sign * 0.5 * np.log((1 - ratio**2) ** 2 + (2 * zeta * ratio) ** 2)
            at += 2
    for i in range(2 * single):
        out = out + (1.0, -1.0)[i] * 0.5 * np.log1p((omega / np.exp(v[at + i])) ** 2)
    return np.asarray(out)


def _starts(at: _Places) -> list[Real]:
    """The best of many random places: zeros and poles anywhere on the axis, poles rather about the highest point."""
    rng = np.random.default_rng(at.order)
    pairs, single = _sections(at.order)
    low, high, top = (float(np.log(w)) for w in (at.omega[0], at.omega[-1], at.omega[np.argmax(at.target)]))
    tried = []
    slopes = [low - 3.0, low + 0.3 * (top - low), low + 0.6 * (top - low), top - 0.3]
    for place in slopes:  # error that rises with a power of the frequency up to the counting point
        for zeta in (-3.0, -2.0, -1.0):
            v = [0.0] + [place, -0.4, top, zeta] * pairs + [place, top] * single
            tried.append(at.covering(np.array(v), at.peaks))
    for _ in range(_RANDOM):
        v = [0.0]
        for _ in range(pairs):
            zero = rng.uniform(low, high) if rng.random() < 0.7 else high + 6.0
            pole = rng.normal(top, 0.3) if rng.random() < 0.5 else rng.uniform(low, high)
            v += [zero, rng.uniform(-3, 1), pole, rng.uniform(-5, 1)]
        v += [rng.uniform(low, high + 6.0) for _ in range(2 * single)]
        tried.append(at.covering(np.array(v), at.peaks))
    tried.sort(key=lambda v: _capped(at.over(v, at.even)))
    return tried[:_STARTS]


def _bounds(w: Real, order: int) -> list[tuple[float, float]]:
    pairs, single = _sections(order)
    place, damping = (float(w[0]) - 4.0, float(w[-1]) + 7.0), (float(np.log(1e-3)), float(np.log(30.0)))
    return [(-700.0, 700.0), *[place, damping] * (2 * pairs), *[place] * (2 * single)]


def _roots(v: Real, order: int) -> tuple[Complex, Complex, float]:
    """Zeros, poles and the gain of the form prod (s - z)/prod (s - p)."""
    pairs, single = _sections(order)
    zeros: list[complex] = []
    poles: list[complex] = []
    log_gain, at = float(v[0]), 1
    for _ in range(pairs):
        for into, sign in ((zeros, -1.0), (poles, 1.0)):
            size, zeta = np.exp(v[at]), np.exp(v[at + 1])
            root = np.sqrt(complex(zeta**2 - 1))
            into += [-size * (zeta + root), -size * (zeta - root)]
            log_gain += sign * 2 * v[at]
            at += 2
    if single:
        zeros.append(complex(-np.exp(v[at])))
        poles.append(complex(-np.exp(v[at + 1])))
        log_gain += v[at + 1] - v[at]
    return np.array(zeros), np.array(poles), float(np.exp(log_gain))


def magnitude(zeros: Complex, poles: Complex, gain: float, omega: Real) -> Real:
    """``abs(W(j w))``, (w,)."""
    s = 1j * np.asarray(omega, dtype=float)[:, None]
    return np.asarray(gain * np.exp(np.log(np.abs(s - zeros)).sum(axis=1) - np.log(np.abs(s - poles)).sum(axis=1)))


def _median(omega: Real, curve: Real, candidate: tuple[Complex, Complex, float]) -> float:
    return float(np.median(_DB * np.log(magnitude(*candidate, omega) / curve)))


def _weight(
    omega: Real, curve: Real, even: Any, zeros: Complex, poles: Complex, gain: float, notes: tuple[str, ...]
) -> Weight:
    gain *= max(1.0, float(np.max(curve / magnitude(zeros, poles, gain, omega)))) * (1 + 1e-9)
    size = magnitude(zeros, poles, gain, omega)
    over = _DB * np.log(size / curve)
    A, B, C, D = zpk2ss(zeros, poles, gain)
    return Weight(
        zeros=zeros,
        poles=poles,
        gain=gain,
        system=FirstOrderModal(blocks=(np.asarray(A),), B=np.asarray(B), C=np.asarray(C), D=np.asarray(D)),
        omega=omega,
        curve=curve,
        magnitude=size,
        median_db=float(np.median(over[even])),
        worst_db=float(over.max()),
        certain_to=float(omega[-1]),
        notes=notes,
    )
