"""From a structure's base damping to the coefficients of every mode."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.model import BaseDamping, LossFactor, ModalRatio, RatioByFrequency, RatioByMode, Rayleigh


def modal_damping(base: BaseDamping, x: Real, flexible: Real) -> tuple[Real, Real]:
    """Viscous coefficient d = 2 zeta omega (1/s) and loss factor eta per mode, shapes (k,).

    x (k,) = omega^2; flexible (k,) bool: ratios apply to these only, numbered in ascending order.
    """
    omega = np.sqrt(np.maximum(x, 0.0))
    zero = np.zeros_like(x)
    match base:
        case Rayleigh(alpha=alpha, beta=beta):
            return alpha + beta * np.where(flexible, x, 0.0), zero
        case LossFactor(eta=eta):
            return zero, np.where(flexible, eta, 0.0)
        case ModalRatio() | RatioByFrequency() | RatioByMode():
            return np.where(flexible, 2 * ratios(base, omega, flexible) * omega, 0.0), zero
    return zero, zero


def ratios(base: ModalRatio | RatioByFrequency | RatioByMode, omega: Real, flexible: Real) -> Real:
    """Damping ratio zeta per mode: a constant, linear in frequency with held ends, or by flexible mode number."""
    match base:
        case ModalRatio(ratio=ratio):
            return np.full(len(omega), ratio)
        case RatioByFrequency(omega=points, ratio=ratio):
            return np.interp(omega, points, ratio)
        case RatioByMode(ratio=ratio):
            number = np.maximum(np.cumsum(flexible) - 1, 0)
            return ratio[np.minimum(number, len(ratio) - 1)]


def eigenvalues(x: Real, d: Real, eta: Real) -> Complex:
    """One eigenvalue a mode, imaginary part >= 0: ``-d/2 + sqrt(d^2/4 - x)``; a loss factor counts as zeta = eta/2.

    An overdamped mode has two real poles: the slower one stands for it; an unstable mode is its growing pole.
    """
    half = (d + eta * np.sqrt(np.maximum(x, 0.0))) / 2
    root = np.sqrt((half**2 - x).astype(complex))
    # The slower pole of a heavily damped mode without cancellation: their product is x.
    real = (root.imag == 0) & (x > 0)
    slow = np.where(real, -x / np.where(real, half + root.real, 1.0), -half + root.real)
    return slow + 1j * np.abs(root.imag)
