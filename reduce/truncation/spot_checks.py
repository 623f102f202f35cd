"""Spot checks: the full model at frequencies that nothing else has used, against what was promised there.

A broken promise means a missed mode, a wrong coupling or a mistake of ours; it is withdrawn, and the place named.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TypeAlias

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.records import FullResponse
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.guarantee import SpotCheck
from modesieve.reduce.truncation.hub import Hub

#: Solves the full model at the given frequencies.
Solver: TypeAlias = Callable[[Real], FullResponse]

#: Relative accuracy asked of the full solution: what a backward error of 1e-12 leaves near a light resonance.
_ACCURACY = 1e-9
#: An irrational share of a half bandwidth, so that no regular grid meets the place.
_ASIDE = (np.sqrt(5) - 1) / 2


def spot_places(
    hub: Hub, modes: Modes, kept: tuple[int, ...], band: tuple[float, float], count: int = 7
) -> list[tuple[float, str]]:
    """Frequencies (rad/s) with the reason for each: beside dropped modes, then kept ones, at the top, near omega_c."""
    low, high = band
    w_c = hub.x_c if hub.rest.order == 1 else float(np.sqrt(hub.x_c))
    out = [(low + (high - low) * _ASIDE, "inside the band"), (high - (high - low) * 0.01 * _ASIDE, "top of the band")]
    if np.isfinite(w_c):
        out.append(((0.9 + 0.05 * _ASIDE) * w_c, "counting point"))
    dropped = [i for i in _by_coupling(hub) if i + 1 not in kept]
    stay = [i for i in _by_coupling(hub) if i + 1 in kept and not modes.always_kept[i]]
    size, rate = np.abs(modes.eigenvalue), np.abs(modes.eigenvalue.real)
    aside = size + _ASIDE * np.maximum(rate, 1e-3 * size) if hub.rest.order == 2 else size * (1 + 0.1 * _ASIDE)
    for i in [*dropped[: (count - 2) // 2], *stay]:
        if len(out) >= count:
            break
        if low < aside[i] <= max(high, 0.0):
            out.append((float(aside[i]), f"mode {i + 1}"))
    return out


def spot_checks(hub: Hub, small: SmallSystem, places: list[tuple[float, str]], solve: Solver) -> tuple[SpotCheck, ...]:
    """Solve the full model at ``places`` and hold ``norm(H - R) +- e_H`` against the true error."""
    places = sorted(places)
    omega = np.array([w for w, _ in places])
    return checked(hub, small, solve(omega), [beside for _, beside in places])


def checked(hub: Hub, small: SmallSystem, full: FullResponse, beside: list[str]) -> tuple[SpotCheck, ...]:
    """The promise at every frequency of a full response."""
    R = small.response(full.omega)
    error = largest_singular_value(hub.weigh(full.G - R))
    gap, own = largest_singular_value(hub.weigh(hub.response(full.omega) - R)), hub.error(full.omega)
    size = largest_singular_value(hub.weigh(full.G))
    # Exactly at an undamped resonance the full model has no finite answer to hold anything against.
    finite = [i for i in range(len(full.omega)) if np.all(np.isfinite(full.G[i]))]
    return tuple(
        SpotCheck(
            omega=float(full.omega[i]),
            error=float(error[i]),
            low=float(gap[i] - own[i]),
            high=float(gap[i] + own[i]),
            slack=float(max(_ACCURACY, 1e3 * full.backward_error[i]) * size[i]),
            backward_error=float(full.backward_error[i]),
            beside=beside[i],
        )
        for i in finite
    )


def broken(checks: tuple[SpotCheck, ...]) -> str:
    """The worst broken promise in words, "" if all are kept."""
    wrong = [c for c in checks if not c.passed]
    if not wrong:
        return ""
    worst = max(wrong, key=lambda c: abs(c.error - np.clip(c.error, c.low, c.high)) / max(c.high, 1e-300))
    return (
        f"spot check at {worst.omega / (2 * np.pi):.6g} Hz ({worst.beside}): error {worst.error:.3e} lies outside "
        f"{max(worst.low, 0.0):.3e} to {worst.high:.3e}"
    )


def _by_coupling(hub: Hub) -> list[int]:
    """Computed terms, strongest coupling at their own frequency first."""
    terms = hub.terms
    w = np.sqrt(np.abs(terms.x)) if terms.order == 2 else np.abs(terms.x)
    c = np.abs(terms.cq) + w * np.abs(terms.cv) + w**2 * np.abs(terms.ca)
    strength = np.linalg.norm(c / hub.resolutions[:, None], axis=0) * np.linalg.norm(terms.b * hub.amplitudes, axis=1)
    return [int(i) for i in np.argsort(-strength[: hub.computed], kind="stable")]
