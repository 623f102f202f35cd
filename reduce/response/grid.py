"""Frequencies where they matter: dense around resonances, sparse where nothing happens.

A lightly damped resonance is ``2 zeta omega`` wide; a blind grid steps over it. Each oscillating mode in the band gets
points at multiples of its half bandwidth ``sigma = -Re lambda`` (+-1 are the half-power points), each real pole its
``1/tau``, and the gap between neighbours its middle, where antiresonances lie.
"""

from __future__ import annotations

from typing import Any, Protocol

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError

#: Offsets from a resonance in half bandwidths, most useful first.
_OFFSETS = (0.0, -1.0, 1.0, -2.5, 2.5, -0.4, 0.4, -6.0, 6.0, -15.0, 15.0, -0.15, 0.15, -1.6, 1.6, -4.0, 4.0, -9.0, 9.0)
#: Of an undamped resonance, relative to its frequency. The resonance itself has no finite response.
_UNDAMPED = (-1e-2, 1e-2, -1e-3, 1e-3, -0.04, 0.04)
#: No point closer than this to an undamped resonance (relative).
_CLEARANCE = 1e-4


class HasPoles(Protocol):
    """What a grid needs to know of a set of modes."""

    @property
    def eigenvalue(self) -> Complex: ...

    @property
    def always_kept(self) -> tuple[str, ...]: ...


def frequency_grid(
    modes: HasPoles, band: tuple[float, float], *, per_mode: int = 9, base: int = 120, cap: int = 3000
) -> Real:
    """Angular frequencies (w,) in rad/s, ascending, within ``band`` (low, high), both ends included.

    per_mode: points around every oscillating mode in the band (fewer when ``cap`` would be passed). base: number of
    logarithmically spaced points. Frequency 0 is left out where a rigid-body or integrating mode makes the response
    infinite there.

    Raises ChoiceError for a band that is none.

    >>> class Poles:
    ...     eigenvalue, always_kept = np.array([-0.1 + 10j]), ("",)
    >>> omega = frequency_grid(Poles(), (1.0, 100.0), per_mode=3, base=2)
    >>> [round(float(w), 2) for w in omega]
    [1.0, 5.5, 9.9, 10.0, 10.1, 55.0, 100.0]
    """
    low, high = checked_band(band)
    lam = np.asarray(modes.eigenvalue)
    size = np.abs(lam)
    inside = (size >= low) & (size <= high) & (size > 0)
    parts = [_base(low, high, size, base)]
    if not has_integrators(modes):
        parts.append(np.array([low]))
    swinging = inside & (np.abs(lam.imag) > 1e-6 * size)
    if swinging.any():
        parts.append(np.linspace(low, high, base // 2 + 2)[1:-1] if base > 2 else np.zeros(0))
    room = max((cap - base - base // 2) // max(int(swinging.sum()), 1) - 1, 2)
    parts += [_around(lam[swinging], min(per_mode, room)), _middles(size[inside], low, high), size[inside & ~swinging]]
    return _merged(np.concatenate(parts), (low, high), undamped_omega(modes), has_integrators(modes))


def checked_band(band: tuple[float, float]) -> tuple[float, float]:
    """The band as two floats. Raises ChoiceError unless 0 <= low < high, both finite."""
    low, high = float(band[0]), float(band[1])
    if not (np.isfinite(low) and np.isfinite(high) and 0 <= low < high):
        raise ChoiceError(
            "the band is not one",
            expected="0 <= low < high, both finite",
            got=f"{low / (2 * np.pi):.6g} Hz to {high / (2 * np.pi):.6g} Hz",
            remedy="give the lower end first",
        )
    return low, high


def has_integrators(modes: HasPoles) -> bool:
    """True when the response at frequency 0 is infinite: rigid-body or integrating modes."""
    return any(reason in ("rigid body", "integrating") for reason in modes.always_kept)


def undamped_omega(modes: HasPoles) -> Real:
    """Frequencies (q,) in rad/s of oscillating modes without any damping."""
    lam = np.asarray(modes.eigenvalue)
    size = np.abs(lam)
    bare = (np.abs(lam.real) <= 1e-12 * size) & (size > 0) & (lam.imag != 0)
    held = np.array([reason in ("rigid body", "integrating") for reason in modes.always_kept], dtype=bool)
    return size[bare & ~held]


def _base(low: float, high: float, size: Real, count: int) -> Real:
    """Logarithmic points; from a decade below the first mode where the band starts at 0."""
    if low == 0:
        first = size[(size > 1e-6 * high)].min(initial=high)
        low = min(0.1 * first, 1e-2 * high)
    return np.geomspace(low, high, max(count, 2))


def _around(lam: Complex, per_mode: int) -> Real:
    """Points around each oscillating mode: multiples of its half bandwidth, or relative ones where it has none."""
    centre, half = np.abs(lam.imag), np.abs(lam.real)
    damped = half > 1e-12 * centre
    near = centre[damped, None] + half[damped, None] * np.array(_OFFSETS[:per_mode])
    beside = centre[~damped, None] * (1 + np.array(_UNDAMPED[:per_mode]))
    return np.concatenate([near.ravel(), beside.ravel()])


def _middles(size: Real, low: float, high: float) -> Real:
    """Middles between neighbours, the band's ends included; nothing between members of a cluster."""
    if size.size == 0:
        return size
    edges = np.concatenate([[low], np.sort(size), [high]])
    gaps = np.diff(edges)
    return (edges[:-1] + gaps / 2)[gaps > 1e-6 * high]


def _merged(points: Real, band: tuple[float, float], undamped: Real, no_zero: bool) -> Real:
    low, high = band
    points = np.unique(points[(points >= low) & (points <= high)])
    if no_zero:
        points = points[points > 0]
    apart = np.concatenate([[True], np.diff(points) > 1e-9 * points[1:]])
    points = points[apart]
    return np.asarray(points[clear_of(points, undamped)], dtype=float)


def clear_of(points: Real, undamped: Real) -> Any:
    """Mask of the ``points`` that do not sit on an undamped resonance."""
    near = np.sort(undamped)
    if near.size == 0:
        return np.ones(len(points), dtype=bool)
    at = np.searchsorted(near, points)
    above, below = near[np.minimum(at, len(near) - 1)], near[np.maximum(at - 1, 0)]
    return np.minimum(np.abs(points - above), np.abs(points - below)) > _CLEARANCE * points


def densified(omega: Real, factor: int) -> Real:
    """``omega`` with ``factor - 1`` equidistant points put into every interval: where to look between samples.

    >>> densified(np.array([1.0, 2.0, 4.0]), 2).tolist()
    [1.0, 1.5, 2.0, 3.0, 4.0]
    """
    if len(omega) < 2:
        return np.asarray(omega)
    steps = np.arange(factor) / factor
    inner = omega[:-1, None] + np.diff(omega)[:, None] * steps
    return np.append(inner.ravel(), omega[-1])


def summary(omega: Any) -> str:
    """One line on a grid: how many, from where to where in hertz."""
    omega = np.asarray(omega)
    return f"{len(omega)} frequencies, {omega[0] / (2 * np.pi):.4g} to {omega[-1] / (2 * np.pi):.4g} Hz"
