"""What massless unknowns answer at once: the feedthrough ``C N (N^T K N)^-1 N^T F``, N a basis of null(M).

For single massless unknowns s this is ``C_s K_ss^-1 F_s``. No condensed matrix is formed: mode shapes of the full
pencil follow their massless unknowns already, and what is left over is this one constant.
"""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.errors import ModelError, SolveError
from modesieve.reduce.linalg import factorise
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.model import Model, Structure, Thermal

#: Unknowns that share mass entries are looked at together up to this many (offset masses of a node).
LARGEST_GROUP = 64
_ROUNDING = 1e-12


def null_basis(M: Sparse) -> Sparse:
    """Orthonormal sparse basis N (n, q) of null(M): massless unknowns, and massless combinations within small groups.

    Groups of more than `LARGEST_GROUP` unknowns coupled by mass are taken as positive definite.
    """
    n = M.shape[0]
    _, group = connected_components(M, directed=False)
    size = np.bincount(group)
    rows = np.asarray(abs(M).sum(axis=1)).ravel()
    light = np.flatnonzero(rows == 0)
    blocks = [sp.csc_array((np.ones(len(light)), (light, np.arange(len(light)))), shape=(n, len(light)))]
    order = np.argsort(group, kind="stable")
    first = np.concatenate([[0], np.cumsum(size)])
    for g in np.flatnonzero((size > 1) & (size <= LARGEST_GROUP)):
        at = order[first[g] : first[g + 1]]
        null = _null_of_group(M[at][:, at].toarray())
        if null.shape[1]:
            place = (np.repeat(at, null.shape[1]), np.tile(np.arange(null.shape[1]), len(at)))
            blocks.append(sp.csc_array((null.ravel(), place), shape=(n, null.shape[1])))
    return sp.hstack(blocks, format="csc")


def _null_of_group(M: Real) -> Real:
    d = np.sqrt(np.maximum(np.diag(M), 0.0))
    if np.any(d == 0):
        return np.zeros((len(M), 0))  # a mass coupling without its own mass: indefinite, refused elsewhere
    value, vector = np.linalg.eigh(M / d / d[:, None])
    null = vector[:, value <= 8 * len(M) * np.finfo(float).eps * value[-1]] / d[:, None]
    return np.linalg.qr(null)[0] if null.shape[1] else null


def massless_answer(model: Model, *, solver: SolverName = "auto") -> Real:
    """``C N (N^T K N)^-1 N^T F`` of the displacement (or only) outputs, shape (p, m); zero where nothing is massless.

    Raises ModelError where it would need the velocity or acceleration of a forced massless unknown (improper), and
    SolveError where the massless unknowns have no stiffness of their own.
    """
    assert isinstance(model, (Structure, Thermal))
    M, outputs = (model.M, model.Cq) if isinstance(model, Structure) else (model.E, model.C)
    none = np.zeros((model.p, model.m))
    N = null_basis(M)
    load = N.T @ model.F if N.shape[1] and model.m else np.zeros((0, 0))
    if not np.any(load):
        return none
    rates = [C for C in (model.Cv, model.Ca) if C is not None] if isinstance(model, Structure) else []
    seen = [np.asarray(C @ N) for C in (outputs, *rates) if C is not None]
    if not any(np.any(C) for C in seen):
        return none
    answer = _inner_solve(model.K, N, load, solver)
    for C in rates:
        _refuse_rates(np.asarray(C @ N) @ answer, C @ N, answer, model)
    return none if outputs is None else np.asarray(outputs @ N) @ answer


def _inner_solve(K: Sparse, N: Sparse, load: Real, solver: SolverName) -> Real:
    inner = sp.csr_array(N.T @ K @ N)
    try:
        factor = factorise(inner, symmetry="indefinite", solver=solver)
        answer = factor.solve(load)
        factor.release()
    except SolveError as error:
        raise _no_stiffness(str(error.got)) from error
    if not np.linalg.norm(inner @ answer - load) <= 1e-6 * np.linalg.norm(load):
        raise _no_stiffness("a singular matrix")
    return np.asarray(answer)


def _no_stiffness(got: str) -> SolveError:
    return SolveError(
        "loaded massless unknowns cannot be condensed",
        expected="a regular stiffness among the unknowns without mass",
        got=got,
        remedy="move the load to unknowns with mass, or give these a mass",
    )


def _refuse_rates(value: Real, C: Real, answer: Real, model: Structure | Thermal) -> None:
    size = np.abs(C) @ np.abs(answer)
    bad = np.argwhere(np.abs(value) > _ROUNDING * np.where(size > 0, size, 1.0))
    if len(bad):
        k, l = (int(i) for i in bad[0])
        raise ModelError(
            "velocity or acceleration of a forced unknown without mass",
            expected="rate outputs on unknowns that have mass",
            got=f"output {model.outputs[k].name} follows input {model.inputs[l].name} without inertia",
            where=model.source,
            remedy="measure the displacement there, or give the unknown a mass",
        )
