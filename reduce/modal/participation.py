"""Effective modal mass: how much of the mass a mode moves when the base shakes in x, y or z."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.model import Structure, Unknowns

AXES = "xyz"


def axis_rows(unknowns: Unknowns | None, axis: int) -> Real:
    """Rows whose direction is the translation along axis 0, 1 or 2; spellings x, ux, 1 and their likes."""
    if unknowns is None:
        return np.zeros(0, dtype=int)
    spellings = {AXES[axis], "u" + AXES[axis], "t" + AXES[axis], str(axis + 1)}
    return np.flatnonzero([d.strip().lower() in spellings for d in unknowns.direction])


def rigid_translations(model: Structure) -> Real | None:
    """Unit translations r along x, y, z as columns (n, 3); None when no direction is labelled."""
    rows = [axis_rows(model.unknowns, axis) for axis in range(3)]
    if not any(len(r) for r in rows):
        return None
    out = np.zeros((model.n, 3))
    for axis, at in enumerate(rows):
        out[at, axis] = 1.0
    return out


def effective_mass(M: Sparse, vectors: Real, r: Real) -> tuple[Real, Real]:
    """``(phi_i^T M r)^2`` (k, 3) and the total ``r^T M r`` (3,)."""
    Mr = M @ r
    return np.square(vectors.T @ Mr), np.einsum("ij,ij->j", r, Mr)
