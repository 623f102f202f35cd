"""What a truncation is measured with: the band, the full response on its frequencies, the references.

Also the estimate that needs no full model: all computed modes plus the static remainder of the rest.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeAlias

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Model, Structure
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.report import hertz
from modesieve.reduce.response.deviation import Yardstick, joined, picked, yardstick
from modesieve.reduce.response.grid import clear_of, densified, frequency_grid, has_integrators, undamped_omega
from modesieve.reduce.response.norms import frobenius
from modesieve.reduce.response.records import FullResponse
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.choice import coupling
from modesieve.reduce.truncation.statics import loss_factor, refusal, remainder, with_remainder

#: Modes are trusted to stand for the full model up to their counted range over this (common practice).
MARGIN = 1.5
_FLOATING = ("rigid body", "integrating")
_PIECE = 1 << 22  # complex entries of a response evaluated at once

Solver: TypeAlias = Callable[[Real], FullResponse]


def default_band(modes: Modes) -> tuple[float, float] | None:
    """From 0 to the counted range over 1.5, in rad/s; None where there is no mode to tell."""
    top = modes.certificate.below_omega or float(modes.omega.max(initial=0.0))
    return (0.0, top / MARGIN) if top > 0 else None


def solver_of(modes: Modes, progress: Listener = None) -> Solver:
    """The full model of ``modes`` as a function of omega.

    Raises ChoiceError where the modes came from a file without their model.
    """
    if modes.model is None:
        raise ChoiceError(
            "the full model is not at hand",
            expected="modes that hold their model, or its response on a grid",
            got="modes read from a file",
            remedy="load the modes together with their model",
        )
    return full_solver(modes.model, modes, progress)


def full_solver(model: Model, modes: Modes, progress: Listener = None) -> Solver:
    """``model`` as a function of omega. Modal damping needs the vectors of ``modes``: computed again if absent.

    Frequencies where the model is singular (an undamped mode exactly there) are left out of what it returns.
    """
    from modesieve.reduce.response.full import full_response

    if modes.vectors is None and is_modal(model):
        from modesieve.reduce.modal.find import find_modes

        modes = find_modes(model, count=len(modes), progress=progress)
    helpful = modes if modes.vectors is not None else None
    return lambda omega: finite(full_response(model, omega, modes=helpful, progress=progress))


def finite(full: FullResponse) -> FullResponse:
    """``full`` without the frequencies where it is not finite."""
    good = np.isfinite(full.G).all(axis=(1, 2))
    return full if good.all() else picked(full, good)


def is_modal(model: Model) -> bool:
    """True where the full model's damping depends on which modes are counted."""
    return isinstance(model, Structure) and model.damping.is_modal


def grid_for(modes: Modes, band: tuple[float, float]) -> Real:
    return frequency_grid(modes, band)


def response(system: SmallSystem, omega: Real) -> Complex:
    """``system.response`` in pieces, so that many channels and terms fit in memory."""
    step = max(1, _PIECE // max(system.p * max(system.states, system.m), 1))
    if len(omega) <= step:
        return system.response(omega)
    return np.concatenate([system.response(omega[i : i + step]) for i in range(0, len(omega), step)])


def floating_response(modes: Modes, omega: Real) -> Complex | None:
    """Response (w, p, m) of the rigid-body and integrating terms alone; None where there are none."""
    if not has_integrators(modes):
        return None
    floating = [modes.term[i] for i, reason in enumerate(modes.always_kept) if reason in _FLOATING]
    only = modes.system.select(np.unique(floating))
    return response(only, omega) - only.through(omega)


def undamped_inside(modes: Modes, band: tuple[float, float]) -> str:
    """Why relative errors mean nothing in ``band``; "" if they do mean something."""
    strength = coupling(modes)
    couples = strength > 1e-12 * strength.max(initial=0.0)
    bare = undamped_omega(modes)
    inside = [w for w in bare if band[0] <= w <= band[1] and couples[np.isclose(modes.omega, w, rtol=1e-14)].any()]
    if not inside:
        return ""
    count = "an undamped mode" if len(inside) == 1 else f"{len(inside)} undamped modes"
    return (
        f"{count} in the band, the first at {hertz(inside[0])}: the response is infinite there,"
        " and a share of it means nothing"
    )


def yardstick_for(modes: Modes, full: FullResponse, band: tuple[float, float]) -> Yardstick:
    """The references of ``full``, for models with floating and undamped modes too."""
    rigid = floating_response(modes, full.omega)
    return yardstick(modes.origin, full, rigid=rigid, refusal=undamped_inside(modes, band))


def estimate_system(modes: Modes) -> SmallSystem:
    """The best stand-in for the full model: all computed modes, and the static remainder where it is legal."""
    if modes.certificate.complete == "all" or refusal(modes):
        return modes.system
    everything = np.arange(modes.system.terms)
    return with_remainder(modes.system, remainder(modes, everything), loss_factor(modes.system))


def estimated_full(modes: Modes, omega: Real) -> FullResponse:
    """The stand-in's response in the form of a full one; its accuracy is not known (nan)."""
    unknown = np.full(len(omega), np.nan)
    G = response(estimate_system(modes), omega)
    method = ("computed modes",) * len(omega)
    return FullResponse(omega=omega, G=G, backward_error=unknown, residual=unknown, method=method)


# ---- between the samples -------------------------------------------------------------------------------------------


def worse_between(modes: Modes, yard: Yardstick, small: SmallSystem, of: str, *, most: int = 16) -> Real:
    """Frequencies (q,) between the samples where the error is estimated to be larger than at any sample.

    Estimated with all computed modes; the full model is then solved there, so that what is reported stays measured.
    """
    dense = densified(yard.omega, 6)
    size = np.where(clear_of(dense, undamped_omega(modes)), _estimate(modes, yard, small, dense, of), 0.0)
    known = np.isin(dense, yard.omega)
    ceiling = 1.01 * np.nanmax(size[known], initial=0.0)
    peaks = np.flatnonzero(~known & (size > ceiling))
    peaks = peaks[np.argsort(-size[peaks])]
    chosen: list[int] = []
    for i in peaks:  # one point per sample interval
        if len(chosen) < most and all(i // 6 != j // 6 for j in chosen):
            chosen.append(int(i))
    return np.sort(dense[chosen])


def _estimate(modes: Modes, yard: Yardstick, small: SmallSystem, omega: Real, of: str) -> Real:
    """Estimated error (w,) up to a factor: only where it is large matters here, so Frobenius norms do."""
    stand_in = estimate_system(modes)
    step = max(1, _PIECE // max(small.p * small.m, 1))
    parts = [_estimate_at(yard, stand_in, small, omega[i : i + step], of) for i in range(0, len(omega), step)]
    return np.concatenate([np.zeros(0), *parts])


def _estimate_at(yard: Yardstick, stand_in: SmallSystem, small: SmallSystem, omega: Real, of: str) -> Real:
    full = response(stand_in, omega)
    G, E = yard.channels.weigh(full), yard.channels.weigh(full - response(small, omega))
    if of == "absolute":
        return np.asarray((np.abs(E) * yard.channels.resolutions[:, None]).sum(axis=2).max(axis=1, initial=0.0))
    size = frobenius(E)
    return size / np.maximum(frobenius(G), yard.threshold or 1.0) if of == "local" else size


def refined(
    modes: Modes, yard: Yardstick, full: FullResponse, solve: Solver, small: SmallSystem, of: str, band: Any
) -> tuple[FullResponse, Yardstick, bool]:
    """``full`` with the frequencies of `worse_between` added, its references, and whether there were any."""
    extra = worse_between(modes, yard, small, of)
    if extra.size == 0:
        return full, yard, False
    full = joined([full, solve(extra)])
    return full, yardstick_for(modes, full, band), True


def told(progress: Listener, message: str, done: int = 0, total: int = 0) -> None:
    tell(progress, "truncate", done, total, message)
