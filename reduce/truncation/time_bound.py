"""Worst errors in time of thermal small models, zero initial state, for every input within its amplitude.

What was computed is compared exactly, as a short sum of exponentials; everything uncomputed adds at most
``sqrt(W_C[k, k] W_B[l, l])`` to the peak-to-peak gain of an entry, and decays at least as fast as ``exp(-lambda_c t)``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal, is_diagonal
from modesieve.reduce.truncation.enclosure import difference
from modesieve.reduce.truncation.hub import Hub

#: Times on which sums of exponentials are integrated, as multiples of the fastest and slowest time constants.
_POINTS = 4000


@dataclass(frozen=True, kw_only=True, eq=False)
class TimeBound:
    """worst (p,): every output's largest error over all time for all inputs within their amplitudes, added, in output
    units; entry (p, m) the same per input; static (p, m): error of the steady state of a unit step."""

    worst: Real
    entry: Real
    static: Real


def worst_error(hub: Hub, small: SmallSystem) -> TimeBound:
    """Guaranteed error over all time: ``sum_l amplitude_l (L1 norm of the computed difference + rest)_kl``.

    Raises ChoiceError for models that are not thermal.
    """
    gap, through = _computed_gap(hub, small)
    entry = (l1_norm(gap.x, _residues(gap)) + np.abs(through) + rest_gain(hub)) * hub.amplitudes
    return TimeBound(worst=entry.sum(axis=1), entry=entry, static=_static_error(hub, small))


def step_error(hub: Hub, small: SmallSystem, t: Real) -> Real:
    """No smaller than the error of the unit step responses at every time t (t,) > 0: (t, p, m).

    ``abs(E_0 - sum r_i/lambda_i e^(-lambda_i t)) + e^(-lambda_c t) sqrt(W W)`` with E_0 the error of the steady state
    (0 for exact statics, so that the whole error decays).
    """
    gap, _ = _computed_gap(hub, small)
    r = _residues(gap) / gap.x[:, None, None]
    t = np.asarray(t, dtype=float)
    moving = np.tensordot(np.exp(-np.outer(t, gap.x)), r, axes=(1, 0))
    decay = np.exp(-hub.x_c * t) if np.isfinite(hub.x_c) else np.zeros(len(t))
    return np.abs(_static_error(hub, small) - moving) + decay[:, None, None] * rest_gain(hub)


def rate_error(hub: Hub, small: SmallSystem, rate: Real) -> Real:
    """Guaranteed error (p,) over all time for inputs that change at most by ``rate`` (m,) per second, exact statics.

    Raises ChoiceError where the small model's statics are not exact: the error then grows with the input itself.
    """
    static = _static_error(hub, small)
    size = np.abs(hub.terms.cq) @ (np.abs(hub.terms.b) / np.maximum(np.abs(hub.terms.x), 1e-300)[:, None])
    if np.any(np.abs(static) > 1e-9 * np.maximum(size, 1e-300)):
        raise ChoiceError(
            "no bound by the rate of change", expected="a small model with exact statics", got="a static error"
        )
    gap, _ = _computed_gap(hub, small)
    slow = l1_norm(gap.x, _residues(gap) / gap.x[:, None, None])
    rest = rest_gain(hub) / hub.x_c if np.isfinite(hub.x_c) else 0.0
    return np.asarray(((slow + rest) * np.asarray(rate, dtype=float)).sum(axis=1))


def rest_gain(hub: Hub) -> Real:
    """Peak-to-peak gain of everything uncomputed, every entry: ``(1 - sigma/lambda_c) sqrt(W_C[k, k] W_B[l, l])``."""
    p = hub.direct.shape[0]
    columns, rows = np.diag(hub.load_energy), np.diag(hub.output_energy)[:p]
    factor = 1 - hub.sigma / hub.x_c if np.isfinite(hub.x_c) else 1.0
    return np.asarray(factor * np.sqrt(np.maximum(np.outer(rows, columns), 0.0)))


def _computed_gap(hub: Hub, small: SmallSystem) -> tuple[Diagonal, Real]:
    """Computed modes less the small model, integrating modes cancelled, and the difference of the feedthroughs."""
    if hub.rest.order != 1 or not isinstance(small, FirstOrderModal) or not is_diagonal(small):
        raise ChoiceError(
            "no bound in time", expected="a thermal model and real poles", got="a model that oscillates or is coupled"
        )
    every = hub.terms
    computed = every.select(np.arange(hub.computed))
    gap = difference(computed, diagonal(small))
    if np.any(gap.x <= 0):
        raise ChoiceError(
            "no bound in time", expected="every integrating mode kept", got="one dropped: its error grows for ever"
        )
    return gap, every.D + every.X - diagonal(small).D


def _static_error(hub: Hub, small: SmallSystem) -> Real:
    """Error of the steady state; the hub's own is exact."""
    gap = difference(hub.terms, diagonal(small))
    return np.asarray((gap.cq / gap.x) @ gap.b + np.real(gap.D + gap.X))


def _residues(terms: Diagonal) -> Real:
    """``c_i b_i^T``, (k, p, m)."""
    return np.asarray(terms.cq.T[:, :, None] * terms.b[:, None, :])


def l1_norm(x: Real, residues: Real) -> Real:
    """No smaller than ``integral_0^inf abs(sum_i r_i e^(-x_i t)) dt`` of every entry, (p, m), and close to it.

    On an interval where the sum cannot change sign (its value exceeds what its slope allows) the integral is the
    difference of the antiderivative; elsewhere, and beyond the last time, the sum of magnitudes.
    """
    if len(x) == 0:
        return np.zeros(residues.shape[1:])
    t = np.concatenate([[0.0], np.geomspace(1e-4 / x.max(), 40 / x.min(), _POINTS)])
    decay = np.exp(-np.outer(t, x))
    size = np.abs(residues)
    value = np.tensordot(decay, residues, axes=(1, 0))
    left = np.tensordot(decay, residues / x[:, None, None], axes=(1, 0))
    slope = np.tensordot(decay, size * x[:, None, None], axes=(1, 0))[:-1]
    magnitudes = np.tensordot(decay[:-1] - decay[1:], size / x[:, None, None], axes=(1, 0))
    step = np.diff(t)[:, None, None]
    ends = np.abs(value[:-1]) + np.abs(value[1:])
    one_sign = (value[:-1] * value[1:] > 0) & (ends > step * slope)
    crude = np.minimum(magnitudes, step * (np.maximum(np.abs(value[:-1]), np.abs(value[1:])) + step * slope / 2))
    inside = np.where(one_sign, np.abs(left[:-1] - left[1:]), crude).sum(axis=0)
    beyond = np.tensordot(decay[-1], size / x[:, None, None], axes=(0, 0))
    return np.asarray(inside + beyond)
