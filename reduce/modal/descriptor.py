"""From ``E x' = A x + B u`` to ``z' = A_0 z + B_0 u``: what is algebraic is solved for, exactly.

With E = U_1 S V_1^T (singular values, scaled) the rest ``A_22 = U_2^T A V_2`` must be regular (index 1); then
``x = W_0 z + X u`` and ``V_0 E W_0 = I``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import LinAlgError, lu_factor, lu_solve, svd
from scipy.linalg.lapack import dgecon, dgetrf

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ModelError

#: A singular value of the scaled E below this share of the largest is zero.
_RANK = 1e-13
#: A scaled E with a reciprocal condition number above this is simply inverted.
_WELL = 1e-8
#: Reciprocal condition number below which the algebraic part counts as singular.
_SINGULAR = 1e-14


@dataclass(frozen=True, kw_only=True, eq=False)
class Plain:
    """A (r, r); right W_0 (n, r), left V_0 (r, n); direct X (n, m): ``x = W_0 z + X u``, ``B_0 = V_0 B``."""

    A: Any
    right: Any
    left: Any
    direct: Any


def plain(A: Any, E: Real | None, B: Real, *, name: str = "E") -> Plain:
    """The dynamic part of a descriptor system; A may be complex.

    Raises ModelError for a singular pencil (``det(A - s E) = 0`` for every s) and for an index above 1.
    """
    n = len(A)
    if E is None:
        return Plain(A=A, right=np.eye(n), left=np.eye(n), direct=np.zeros_like(B))
    rows, columns = _scales(E)
    A_s, E_s = A * rows[:, None] * columns, E * rows[:, None] * columns
    if not np.any(E_s):
        raise ModelError(f"{name} is zero", expected="at least one dynamic state", got="an algebraic system")
    if _reciprocal_of_factor(E_s) > _WELL:
        inverse = np.linalg.inv(E_s)
        return Plain(
            A=columns[:, None] * (inverse @ A_s) / columns,
            right=np.eye(n),
            left=columns[:, None] * inverse * rows,
            direct=np.zeros_like(B),
        )
    U, s, Vt = svd(E_s)
    r = int(np.count_nonzero(s > _RANK * n * s[0]))
    U1, U2, V1, V2 = U[:, :r], U[:, r:], Vt[:r].T, Vt[r:].T
    right, left = V1, U1.T
    direct: Any = np.zeros_like(B)
    if r < n:
        A22 = U2.T @ A_s @ V2
        factor = _regular(A22, A_s, E_s, name)
        right = V1 - V2 @ lu_solve(factor, U2.T @ A_s @ V1)
        left = U1.T - (lu_solve(factor, (U1.T @ A_s @ V2).T, trans=1)).T @ U2.T
        direct = -columns[:, None] * (V2 @ lu_solve(factor, U2.T @ (rows[:, None] * B)))
    left = left / s[:r, None]
    return Plain(A=left @ A_s @ right, right=columns[:, None] * right, left=left * rows, direct=np.asarray(direct))


def _scales(E: Real) -> tuple[Real, Real]:
    """Row and column factors that bring E's entries to the order of one; empty rows and columns keep 1."""
    size = np.abs(E)
    rows = _inverse_root(size.max(axis=1))
    columns = _inverse_root((size * rows[:, None]).max(axis=0))
    rows = rows * _inverse_root((size * rows[:, None] * columns).max(axis=1))
    return rows, columns


def _inverse_root(top: Real) -> Real:
    return 1 / np.sqrt(np.where(top > 0, top, 1.0))


def _regular(A22: Any, A: Any, E: Real, name: str) -> Any:
    if _reciprocal_condition(A22) > _SINGULAR:
        return lu_factor(A22)
    if _is_singular_pencil(A, E):
        raise ModelError(
            "the pencil is singular: A - s E has no inverse for any s",
            expected="equations that determine every unknown",
            got=f"{len(A)} unknowns, fewer independent equations",
            remedy="remove unknowns that no equation determines, or equations that repeat each other",
        )
    raise ModelError(
        f"the system has an index above 1: {name} and A leave a constraint on the states that must be differentiated",
        expected=f"algebraic equations that can be solved for the unknowns without {name}",
        got=f"{len(A22)} algebraic equations that cannot",
        remedy="eliminate the constraints before export",
    )


def _reciprocal_of_factor(E: Real) -> float:
    """Reciprocal condition number of a real matrix in the 1-norm, from its LU factors."""
    factor, _, info = dgetrf(E)
    if info > 0:
        return 0.0
    return float(dgecon(factor, np.abs(E).sum(axis=0).max())[0])


def _reciprocal_condition(A: Any) -> float:
    size = np.abs(A)
    if np.any(size.max(axis=1) == 0) or np.any(size.max(axis=0) == 0):
        return 0.0
    scaled = A / size.max(axis=1)[:, None]
    scaled = scaled / np.abs(scaled).max(axis=0)
    try:
        s = svd(scaled, compute_uv=False)
    except LinAlgError:
        return 0.0
    return float(s[-1] / s[0])


def _is_singular_pencil(A: Any, E: Real) -> bool:
    scale = np.linalg.norm(A) / np.linalg.norm(E)
    shifts = (0.7 + 0.3j, -0.4 + 0.9j, 1.3 - 0.5j)
    return all(_reciprocal_condition(A - scale * s * E) < 1e3 * _SINGULAR for s in shifts)
