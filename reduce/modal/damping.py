"""Base damping, mode by mode: viscous coefficient, loss factor and the eigenvalue they make."""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.model import BaseDamping, LossFactor, ModalRatio, RatioByFrequency, RatioByMode, Rayleigh


def modal_damping(base: BaseDamping, x: Real, rigid: Any) -> tuple[Real, Real]:
    """Viscous coefficient d (k,) in 1/s and loss factor eta (k,) of the modes ``x = omega^2`` (k,), rad^2/s^2.

    Ratios: ``d = 2 zeta omega`` on flexible modes, none on rigid-body (mask ``rigid``) and unstable ones; a table by
    mode number counts flexible modes in ascending x. Rayleigh: ``d = alpha + beta x``, so alpha on rigid-body modes.

    >>> d, eta = modal_damping(Rayleigh(alpha=0.2, beta=0.01), np.array([0.0, 100.0]), np.array([True, False]))
    >>> d.tolist()
    [0.2, 1.2]
    """
    x = np.asarray(x, dtype=float)
    w, none = np.sqrt(np.maximum(x, 0.0)), np.zeros_like(x)
    if isinstance(base, Rayleigh):
        return base.alpha + base.beta * x, none
    if isinstance(base, LossFactor):
        return none, np.full_like(x, base.eta)
    return 2 * ratios(base, x, rigid) * w, none


def ratios(base: BaseDamping, x: Real, rigid: Any) -> Real:
    """Damping ratio zeta (k,) of modal bases; 0 for rigid-body modes and for other bases."""
    flexible = ~np.asarray(rigid, dtype=bool) & (np.asarray(x) > 0)
    zeta = np.zeros(len(flexible))
    match base:
        case ModalRatio(ratio=ratio):
            zeta[flexible] = ratio
        case RatioByFrequency(omega=omega, ratio=ratio):
            zeta[flexible] = np.interp(np.sqrt(np.asarray(x)[flexible]), omega, ratio)
        case RatioByMode(ratio=ratio):
            place = np.minimum(np.arange(np.count_nonzero(flexible)), len(ratio) - 1)
            zeta[flexible] = np.asarray(ratio)[place]
    return zeta


def eigenvalues(x: Real, d: Real, eta: Real) -> Complex:
    """Root (k,) of ``s^2 + (d + eta omega) s + x`` with positive imaginary part; of two real roots the slower one.

    A loss factor counts as zeta = eta/2. An unstable mode (x < 0) has its growing root.

    >>> eigenvalues(np.array([4.0, 4.0, -4.0]), np.array([0.0, 5.0, 0.0]), np.zeros(3)).tolist()
    [2j, (-1+0j), (2+0j)]
    """
    half = (d + eta * np.sqrt(np.maximum(x, 0.0))) / 2
    root = np.sqrt((half**2 - x).astype(complex))
    out = -half + np.where(root.imag < 0, -root, root)
    real = half**2 >= x
    # -half + root cancels when x is small: the product of the roots is x.
    divisor = np.where(real & (half > 0), half + root.real, 1.0)
    return np.asarray(np.where(real & (half > 0), -x / divisor + 0j, out))


def overdamped(x: Real, d: Real, eta: Real) -> Any:
    """Mask (k,) of the modes with two real poles (rigid-body modes aside)."""
    return (x > 0) & ((d + eta * np.sqrt(np.maximum(x, 0.0))) ** 2 >= 4 * x)
