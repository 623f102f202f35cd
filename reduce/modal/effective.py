"""Effective modal masses: how much of the structure a base motion in x, y or z moves in each mode."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.model import Structure

#: Spellings of the three translations; anything else (rotations, pressures) takes no part.
AXES = (("x", "ux", "1", "tx", "dx"), ("y", "uy", "2", "ty", "dy"), ("z", "uz", "3", "tz", "dz"))


def influence(model: Structure) -> Real | None:
    """Unit translations r (n, 3) by the direction labels; None where no label names a translation."""
    if model.unknowns is None or not model.unknowns.direction:
        return None
    names = [name.strip().lower() for name in model.unknowns.direction]
    r = np.array([[float(name in axis) for axis in AXES] for name in names])
    return r if r.any() else None


def effective_masses(model: Structure, phi: Real) -> tuple[Real, Real] | tuple[None, None]:
    """``(phi_i^T M r)^2``, shape (k, 3), and ``r^T M r``, shape (3,), in the model's mass unit; None without labels.

    phi (n, k) M-orthonormal. Summed over all modes the first gives the second (R. W. Clough and J. Penzien, Dynamics of
    Structures).
    """
    r = influence(model)
    if r is None:
        return None, None
    Mr = model.M @ r
    return np.asarray((phi.T @ Mr) ** 2), np.asarray(np.einsum("ij,ij->j", r, Mr))
