"""The symmetric pencil of a model with its ports, massless unknowns condensed out of the ports.

For a massless unknown s with regular ``K_ss`` a load on it acts on the rest as ``F_c = [F_m - K_ms K_ss^-1 F_s; 0]``,
likewise an output, and what remains is the feedthrough ``C_s K_ss^-1 F_s``. K and M are left as they are: every
solution of ``(a K + b M) x = F_c`` already follows its massless unknowns.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.errors import ChoiceError, SolveError
from modesieve.reduce.linalg import factorise
from modesieve.reduce.model import Model, Structure, Thermal


@dataclass(frozen=True, kw_only=True, eq=False)
class Pencil:
    """K, M (n, n) sparse symmetric, M at least semidefinite; load (n, m); outputs: the columns of the transposed
    output matrices of displacement, velocity and acceleration kind, each (n, p) or None; static (p, m): what condensed
    massless unknowns answer, to be divided by a(w)."""

    K: Sparse
    M: Sparse
    load: Real
    outputs: tuple[Real | None, Real | None, Real | None]
    static: Real

    @property
    def n(self) -> int:
        return int(self.K.shape[0])

    @property
    def m(self) -> int:
        return int(self.load.shape[1])

    @property
    def p(self) -> int:
        return int(self.static.shape[0])


def pencil_of(model: Model) -> Pencil:
    """The pencil of a structure (K, M) or a thermal model (K, E).

    Raises ChoiceError for other kinds, SolveError where loaded or observed massless unknowns cannot be condensed.
    """
    if isinstance(model, Thermal):
        columns = (_columns(model.C), None, None)
        return _condensed(
            Pencil(K=model.K, M=model.E, load=np.asarray(model.F), outputs=columns, static=np.zeros_like(model.D))
        )
    if isinstance(model, Structure):
        outputs = (_columns(model.Cq), _columns(model.Cv), _columns(model.Ca))
        return _condensed(
            Pencil(K=model.K, M=model.M, load=np.asarray(model.F), outputs=outputs, static=np.zeros_like(model.Du))
        )
    raise ChoiceError(
        "tail vectors need a symmetric pencil", expected="a structure or a thermal model", got=f"a {model.kind} model"
    )


def massless(M: Sparse) -> Any:
    """Mask (n,) of the unknowns whose rows of M hold nothing but zeros."""
    return np.asarray(abs(M).sum(axis=1)).ravel() == 0.0


def _columns(C: Real | None) -> Real | None:
    return None if C is None or not np.any(C) else np.ascontiguousarray(C.T)


def _condensed(pencil: Pencil) -> Pencil:
    light = massless(pencil.M)
    if not light.any():
        return pencil
    touched = [P for P in (pencil.load, *pencil.outputs) if P is not None and np.any(P[light])]
    if not touched:
        return pencil
    rows = np.flatnonzero(light)
    solve = _factor(pencil.K[rows][:, rows])
    away = pencil.K[:, rows]
    outputs = [None if C is None else _move(C, rows, away, solve) for C in pencil.outputs]
    q, v, a = outputs
    load = _move(pencil.load, rows, away, solve)
    static = pencil.static if pencil.outputs[0] is None else pencil.outputs[0][rows].T @ solve(pencil.load[rows])
    return Pencil(K=pencil.K, M=pencil.M, load=load, outputs=(q, v, a), static=static)


def _move(port: Real, rows: Any, away: Sparse, solve: Any) -> Real:
    moved = port - away @ solve(port[rows])
    moved[rows] = 0.0
    return np.asarray(moved)


def _factor(K_ss: Sparse) -> Any:
    try:
        factor = factorise(K_ss, symmetry="indefinite")
    except SolveError as error:
        raise SolveError(
            "the massless unknowns that carry loads or outputs cannot be condensed",
            expected="a regular stiffness among the massless unknowns",
            got="a singular one, as of constraint multipliers",
            remedy="move loads and outputs to unknowns with mass",
        ) from error
    return factor.solve
