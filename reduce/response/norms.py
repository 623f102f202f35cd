"""Norms of transfer matrices: largest singular values, H2 and H-infinity norms of small systems."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from scipy.linalg import solve_continuous_lyapunov

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem

_PIECE = 1 << 22  # entries of a batch handed to LAPACK at once


def largest_singular_value(G: Any) -> Real:
    """Largest singular value of every matrix of ``G`` (..., p, m), shape (...); 0 for an empty matrix.

    >>> largest_singular_value(np.array([[[3.0, 4.0]], [[0.0, 1.0]]])).tolist()
    [5.0, 1.0]
    """
    G = np.asarray(G)
    if 0 in G.shape[-2:]:
        return np.zeros(G.shape[:-2])
    if 1 in G.shape[-2:]:
        return _vector_norm(G.reshape(*G.shape[:-2], -1))
    flat = G.reshape(-1, *G.shape[-2:])
    step = max(1, _PIECE // (flat.shape[1] * flat.shape[2]))
    parts = [_largest(flat[i : i + step]) for i in range(0, len(flat), step)]
    return np.concatenate(parts).reshape(G.shape[:-2]) if parts else np.zeros(G.shape[:-2])


def _vector_norm(v: Any) -> Real:
    """Euclidean norm along the last axis; inf where a value is not finite."""
    parts = np.ascontiguousarray(v)
    parts = parts.view(np.float64) if np.iscomplexobj(parts) else parts.astype(np.float64, copy=False)
    square = np.einsum("...i,...i->...", parts, parts)
    # Squares that overflow or lose digits (and entries that are not finite) are formed again, scaled.
    doubtful = ~((square > 1e-200) & (square < 1e200)) & ~np.all(parts == 0, axis=-1)
    norm = np.sqrt(square)
    if np.any(doubtful):
        norm = np.array(norm)
        norm[doubtful] = _scaled_norm(parts[doubtful])
    return norm


def _scaled_norm(v: Real) -> Real:
    top = np.abs(v).max(axis=-1)
    fine = np.isfinite(top)
    unit = np.where(fine, top, 1.0)[:, None]
    with np.errstate(invalid="ignore", over="ignore"):
        norm = unit[:, 0] * np.sqrt(((v / unit) ** 2).sum(axis=-1))
    return np.where(fine, norm, np.inf)


def _largest(batch: Any) -> Real:
    """Not finite matrices give inf rather than an error from LAPACK."""
    good = np.isfinite(batch).all(axis=(1, 2))
    out = np.full(len(batch), np.inf)
    if good.any():
        out[good] = np.linalg.svd(batch[good], compute_uv=False)[:, 0]
    return out


def frobenius(G: Any) -> Real:
    """Frobenius norm of every matrix, shape (...): between sigma_max and sqrt(min(p, m)) sigma_max."""
    return _vector_norm(np.asarray(G).reshape(*np.shape(G)[:-2], -1))


def worst_ratio(G: Any, scale: Real) -> tuple[float, int]:
    """``max_w sigma_max(G[w]) / scale[w]`` and where it is.

    The Frobenius norm bounds sigma_max from above, so singular values are only computed where they can still win:
    the same answer as computing all of them, at a fraction of the price for many channels.
    """
    if len(scale) == 0 or 0 in np.shape(G):
        return 0.0, 0
    bound = frobenius(G) / scale
    order = np.argsort(-bound, kind="stable")
    best, at, start, step = -1.0, 0, 0, 1
    while start < len(order) and bound[order[start]] > best:
        pick = order[start : start + step]
        values = largest_singular_value(G[pick]) / scale[pick]
        top = int(np.argmax(values))
        if values[top] > best:
            best, at = float(values[top]), int(pick[top])
        start, step = start + step, min(2 * step, 64)
    return best, at


# ---- norms of small systems ----------------------------------------------------------------------------------------


def h2_norm(system: SmallSystem) -> float:
    """``sqrt(tr(C P C^T))`` with ``A P + P A^T + B B^T = 0``: the H2 norm of a stable system without feedthrough.

    The square is the output variance under unit white noise (Skogestad and Postlethwaite, Multivariable Feedback
    Control, 2nd ed. 2005, section 4.10).

    Raises ChoiceError where the norm is infinite: a feedthrough, or a pole that is not in the left half plane.
    """
    A, B, C, D = system.state_space()
    _finite_norm(system, D)
    if len(A) == 0:
        return 0.0
    P = solve_continuous_lyapunov(A, -B @ B.T)
    return float(np.sqrt(max(np.trace(C @ P @ C.T), 0.0)))


def _finite_norm(system: SmallSystem, D: Real) -> None:
    if np.any(D):
        raise ChoiceError(
            "the H2 norm is undefined", expected="no direct feedthrough", got=f"up to {np.abs(D).max():.3g}"
        )
    _stable(system, "H2")


def _stable(system: SmallSystem, name: str) -> None:
    worst = system.poles.real.max(initial=-np.inf)
    if worst >= 0:
        raise ChoiceError(
            f"the {name} norm is undefined", expected="poles in the open left half plane", got=f"Re = {worst:.3g} 1/s"
        )


def h_infinity_norm(system: SmallSystem, *, tolerance: float = 1e-10) -> tuple[float, float]:
    """``sup_w sigma_max(G(j w))`` of a stable system and an angular frequency where it is reached (inf: at infinity).

    gamma is above the norm exactly if the Hamiltonian matrix of (A, B, C, D, gamma) has no eigenvalue on the axis;
    the middles of the intervals it shows give the next gamma (Bruinsma and Steinbuch, Syst. Control Lett. 14, 1990,
    287-293, doi:10.1016/0167-6911(90)90094-Z).

    Raises ChoiceError for a pole that is not in the left half plane.
    """
    _stable(system, "H-infinity")
    A, B, C, D = system.state_space()
    seeds = np.concatenate([[0.0], np.abs(system.poles), np.abs(system.poles.imag)])
    gains = largest_singular_value(_transfer(system, seeds))
    best, at = float(gains.max()), float(seeds[int(np.argmax(gains))])
    at_infinity = float(largest_singular_value(D[None])[0])
    if at_infinity > best:
        best, at = at_infinity, np.inf
    for _ in range(60):
        crossings = _crossings(A, B, C, D, best * (1 + 2 * tolerance))
        if crossings.size == 0:
            break
        edges = np.concatenate([[0.0], crossings])
        middles = (edges[:-1] + edges[1:]) / 2
        gains = largest_singular_value(_transfer(system, middles))
        if gains.max() <= best * (1 + tolerance):
            break
        best, at = float(gains.max()), float(middles[int(np.argmax(gains))])
    return best, at


def _transfer(system: SmallSystem, omega: Real) -> Complex:
    """The state-space form's response: the same as `response` but with loss factors as viscous damping."""
    return system.response(omega) if isinstance(system, FirstOrderModal) else _viscous(system).response(omega)


def _viscous(system: SecondOrderModal) -> SecondOrderModal:
    rest = replace(system, D=system.D + system.X, X=np.zeros_like(system.X), eta_X=0.0)
    return replace(rest, d=system.d + system.eta * np.sqrt(np.maximum(system.x, 0.0)), eta=np.zeros(system.terms))


def _crossings(A: Real, B: Real, C: Real, D: Real, gamma: float) -> Real:
    """Frequencies (ascending, w >= 0) where some singular value of G equals gamma."""
    if gamma <= 0 or len(A) == 0:
        return np.zeros(0)
    R = D.T @ D - gamma**2 * np.eye(D.shape[1])
    S = D @ D.T - gamma**2 * np.eye(D.shape[0])
    if np.linalg.cond(R) > 1e14 or np.linalg.cond(S) > 1e14:
        return np.zeros(0)
    F = A - B @ np.linalg.solve(R, D.T @ C)
    H = np.block([[F, -gamma * B @ np.linalg.solve(R, B.T)], [gamma * C.T @ np.linalg.solve(S, C), -F.T]])
    values = np.linalg.eigvals(H)
    on_axis = np.abs(values.real) <= 1e-8 * np.maximum(np.abs(values), 1e-3 * np.abs(values).max())
    return np.sort(values[on_axis & (values.imag >= 0)].imag)
