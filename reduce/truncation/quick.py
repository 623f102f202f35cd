"""Quick bounds without tail vectors: what a kept count costs before any hub with levels is made.

Only the static energies of the uncomputed part are needed, ``W_B = F^T K_s^-1 F - sum_S b_i b_i^T/(x_i - sigma)`` and
W_C likewise (one solve a port, always without *all* computed modes). For scalars g_i over the uncomputed part,

    norm(sum_T c_i b_i^T g_i) <= sup_T abs((x_i - sigma) g_i) sqrt(norm(W_B) norm(W_C)),

and dropped computed modes enter exactly. Tight for collocated ports, far too large for distant ones: the hub is not.
"""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import frobenius, largest_singular_value
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.hub import Hub


def rest_bound(hub: Hub, omega: Real, *, static: bool = False) -> tuple[Real, Real]:
    """Bound of everything uncomputed: largest singular value, weighted (w,), and every entry (w, p, m).

    static: of what remains when its exact static part is left in place as feedthrough (over 1 + j eta).
    """
    w = np.asarray(omega, dtype=float)
    factor = static_factor(hub, w) if static else hub.rest.supremum(w, hub.x_c, hub.sigma)
    C = output_energies(hub, w)
    columns = np.sqrt(np.maximum(np.diag(hub.load_energy), 0.0))
    rows = np.sqrt(np.maximum(np.real(np.einsum("wkk->wk", C)), 0.0))
    weighted = C / (hub.resolutions[:, None] * hub.resolutions[None, :])
    load = hub.load_energy * np.outer(hub.amplitudes, hub.amplitudes)
    load_size = float(np.sqrt(np.linalg.norm(load, 2))) if load.size else 0.0
    with np.errstate(invalid="ignore", over="ignore"):
        total = factor * load_size * np.sqrt(largest_singular_value(weighted))
        entry = factor[:, None, None] * rows[:, :, None] * columns
    return _inf(total), _inf(entry)


def output_energies(hub: Hub, omega: Real) -> Complex:
    """``W_C(w) = L W L^H`` with ``L = [I, j w I, -w^2 I]``, (w, p, p): the energy of the outputs' rows at w."""
    p, w = hub.direct.shape[0], np.asarray(omega, dtype=float)[:, None, None]
    blocks = hub.output_energy.reshape(3, p, 3, p).transpose(0, 2, 1, 3)
    law = (np.ones_like(w), 1j * w, -(w**2))
    return np.asarray(sum(law[i] * np.conj(law[j]) * blocks[i, j] for i in range(3) for j in range(3)))


def static_factor(hub: Hub, omega: Real) -> Real:
    """``sup over x >= x_c of abs((x - sigma)(1/(a x + b) - 1/((1 + j eta) x)))``, (w,).

    From the disc of ``x/(a x + b)`` (sigma = 0): the distance of its farthest point from ``1/(1 + j eta)``.
    """
    centre, radius = hub.rest.disc(omega, hub.x_c, 0.0)
    shift = 1 - hub.sigma / hub.x_c if np.isfinite(hub.x_c) else 1.0
    through = 1 / (1 + 1j * hub.rest.eta * np.sign(omega))
    return np.asarray(max(shift, 1.0) * (np.abs(centre - through) + radius))


def quick_error(hub: Hub, kept: tuple[int, ...], omega: Real, *, static: bool = False) -> tuple[Real, Real]:
    """Guaranteed error of keeping the modes ``kept``: weighted (w,), entries (w, p, m).

    static: with the exact static remainder as feedthrough (displacement outputs only). Any hub serves, one without
    levels included.

    Raises ChoiceError for a static remainder of velocity or acceleration outputs.
    """
    if static and (np.any(hub.terms.cv) or np.any(hub.terms.ca)):
        raise ChoiceError(
            "no static remainder", expected="displacement outputs", got="velocity or acceleration outputs"
        )
    gap = _dropped(hub, kept, omega, static)
    total, entry = rest_bound(hub, omega, static=static)
    rounding = hub.rounding(omega) + hub.defect(omega)
    whole = largest_singular_value(hub.weigh(gap)) + total + frobenius(hub.weigh(rounding))
    return whole, np.abs(gap) + entry + rounding


def _dropped(hub: Hub, kept: tuple[int, ...], omega: Real, static: bool) -> Complex:
    """Exact response of the computed modes that are not kept, less their static part if that stays."""
    gone = np.setdiff1d(np.arange(hub.computed), np.asarray(sorted(kept), dtype=int) - 1)
    only = hub.system.select(gone)
    gap = only.response(omega) - only.through(omega)
    if static:
        terms = hub.terms.select(gone)
        still = (terms.cq / terms.x) @ terms.b
        gap = gap - still / (1 + 1j * hub.rest.eta * np.sign(omega))[:, None, None]
    return gap


def computed_gap(hub: Hub, small: SmallSystem, omega: Real) -> tuple[Real, Real]:
    """Guaranteed error of any small model by this route: computed modes less ``small``, plus the uncomputed part."""
    only = hub.system.select(np.arange(hub.computed))
    gap = only.response(omega) - small.response(omega)
    total, entry = rest_bound(hub, omega)
    rounding = hub.rounding(omega) + hub.defect(omega)
    return largest_singular_value(hub.weigh(gap)) + total + frobenius(hub.weigh(rounding)), np.abs(
        gap
    ) + entry + rounding


def _inf(values: Real) -> Real:
    return np.where(np.isnan(values), np.inf, values)
