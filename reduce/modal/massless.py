"""Unknowns without mass or capacity: their static share of the response, without forming a condensed matrix."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Ints, Real, Sparse
from modesieve.reduce.errors import ModelError, SolveError
from modesieve.reduce.linalg.count import find_multipliers, row_sums
from modesieve.reduce.linalg.factor import factorise
from modesieve.reduce.model import Structure, Thermal


def massless_rows(M: Sparse) -> Ints:
    """Rows of M that hold nothing but zeros."""
    return np.flatnonzero(row_sums(M) == 0)


def static_share(model: Structure | Thermal) -> Real:
    """``C_s K_ss^-1 F_s`` (p, m): what forced massless unknowns s add to the response at every frequency.

    Zero where s is empty, unforced or unseen, or holds Lagrange multipliers (which answer statically through the rest).
    Raises ModelError for the velocity or acceleration of a forced massless unknown.
    """
    M = model.M if isinstance(model, Structure) else model.E
    C = model.Cq if isinstance(model, Structure) else model.C
    rows = massless_rows(M)
    nothing = np.zeros((model.p, model.m))
    assert model.F is not None
    if rows.size == 0 or not np.any(model.F[rows]) or find_multipliers(model.K, M).size:
        return nothing
    share = _reach(model.K, rows, model.F[rows])
    if isinstance(model, Structure):
        _refuse_rates(model, rows, share)
    return nothing if C is None else np.asarray(C[:, rows] @ share)


def _reach(K: Sparse, rows: Ints, loads: Real) -> Real:
    try:
        return np.asarray(factorise(K[rows][:, rows], symmetry="indefinite").solve(loads))
    except SolveError as error:
        raise ModelError(
            "forced massless unknowns have no stiffness of their own",
            expected="a regular stiffness among unknowns without mass",
            got=error.what,
            where=f"{rows.size} massless unknowns",
            remedy="give them a small mass, or tie them to unknowns with mass",
        ) from error


def _refuse_rates(model: Structure, rows: Ints, share: Real) -> None:
    for name, C in (("velocity", model.Cv), ("acceleration", model.Ca)):
        if C is not None and np.any(C[:, rows] @ share):
            raise ModelError(
                f"the {name} of a forced massless unknown has no finite response",
                expected=f"{name} outputs at unknowns with mass",
                got=f"an output on {rows.size} massless unknowns",
                where=model.source,
                remedy="measure displacement there, or give these unknowns their mass",
            )
