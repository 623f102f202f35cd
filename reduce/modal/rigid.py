"""Eigenvalues that are zero: rigid-body and integrating modes, told from flexible ones by rounding, not by frequency.

A relative change eps of every entry of K moves ``x`` by at most ``eps abs(phi)^T abs(K) abs(phi)``; what is smaller
than that for the rounding of double precision, or of the digits that a file holds, is zero as far as anyone can tell.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.modal.clusters import strain
from modesieve.reduce.model import Structure, Thermal

#: Share of ``abs(phi)^T abs(K) abs(phi)`` below which x is rounding: some hundred eps.
ROUNDING = 2e-14
#: A negative x below this share is taken for a stiffness with too few digits if those digits explain it.
FEW_DIGITS = range(3, 11)


@dataclass(frozen=True, kw_only=True, eq=False)
class Zeros:
    """zero (k,): mask of the modes whose eigenvalue counts as 0; reason: what they are called; warnings."""

    zero: Any
    reasons: tuple[str, ...]
    warnings: tuple[str, ...] = ()


def find_zeros(model: Structure | Thermal, x: Real, phi: Real) -> Zeros:
    """Which of the ascending x (k,), with M-orthonormal phi (n, k), are zero, and which are unstable."""
    share = _share(model.K, x, phi)
    zero = share <= ROUNDING
    digits = digits_of(model.K) if np.any(~zero & (x < 0)) or np.any(share < 1e-3) else None
    suspect = ~zero & (share <= _resolution(digits))
    warnings = []
    if np.any(suspect & (x < 0)):
        warnings.append(_few_digits(model, x[suspect & (x < 0)], digits, "is taken as"))
        zero = zero | (suspect & (x < 0))
    if np.any(suspect & (x > 0)):
        warnings.append(_few_digits(model, x[suspect & (x > 0)], digits, "may be"))
    name = "rigid body" if isinstance(model, Structure) else "integrating"
    reasons = tuple(name if z else "unstable" if xi < 0 else "" for z, xi in zip(zero, x, strict=True))
    return Zeros(zero=zero, reasons=reasons, warnings=tuple(warnings))


def _share(K: Sparse, x: Real, phi: Real) -> Real:
    size = strain(K, phi)
    return np.abs(x) / np.where(size > 0, size, 1.0)


def digits_of(K: Sparse, sample: int = 20_000) -> int | None:
    """Significant decimal digits of K's entries, if so few that a file must have rounded them; None otherwise.

    Integers and short decimals have few digits as well: so fewer than four are not taken for rounded.

    >>> digits_of(np.array([[1.23457, -0.333333], [-0.333333, 0.666667]]))
    6
    """
    data = np.unique(np.abs(K.data if hasattr(K, "indptr") else np.asarray(K).ravel()))
    data = data[data > 0][:: max(1, len(data) // sample)]
    for digits in FEW_DIGITS:
        rounded = np.array([float(f"{v:.{digits - 1}e}") for v in data])
        if np.all(np.abs(rounded - data) <= 4 * np.finfo(float).eps * data):
            return digits if digits >= 4 else None
    return None


def _resolution(digits: int | None) -> float:
    """Relative size of the rounding to so many digits."""
    return 0.0 if digits is None else 0.5 * 10.0 ** (1 - digits)


def _few_digits(model: Structure | Thermal, x: Real, digits: int | None, verb: str) -> str:
    if isinstance(model, Structure):
        values = ", ".join(f"{np.sqrt(abs(v)) / (2 * np.pi):.3g} Hz" for v in x)
        name = "rigid-body motion"
    else:
        values, name = ", ".join(f"{abs(v):.3g} 1/s" for v in x), "uniform temperature"
    sign = "imaginary frequency " if np.all(x < 0) and isinstance(model, Structure) else ""
    return (
        f"the matrix holds {digits} significant digits: {len(x)} mode{'s' * (len(x) > 1)} at {sign}{values} {verb} "
        f"{name}, which rounding to so few digits can move that far; export with 16 digits to be sure"
    )
