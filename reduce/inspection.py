"""A look at a model before anything is computed: what it is, whether its matrices can be used, what would be done."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from modesieve.reduce.arrays import DENSE_LIMIT, Real, Sparse
from modesieve.reduce.errors import ModelError
from modesieve.reduce.fingerprint import describe_damping
from modesieve.reduce.modal.matrices import (
    Asymmetry,
    asymmetry,
    definiteness,
    massless_rows,
    negative_eigenvalues,
    zero_rows,
)
from modesieve.reduce.model import Model, StateSpace, Structure, Thermal, UnitSystem

#: Largest difference of two mirrored entries, relative to their diagonal entries, that counts as symmetric.
SYMMETRIC = 1e-8


@dataclass(frozen=True, kw_only=True, eq=False)
class Facts:
    """What `inspect_model` found.

    nonzeros: matrix name to stored nonzeros; asymmetry: matrix name to its largest relative difference of mirrored
    entries; definiteness: matrix name to words. massless: unknowns without mass (capacity); parts: sizes of the parts
    that no matrix entry connects, largest first; zero_rows: names of unknowns that no matrix touches. total_mass (3,):
    ``r^T M r`` in x, y, z, in the model's mass unit, None without direction labels. capacity: sum of a thermal model's
    capacities, None for other kinds. problems: what makes the model unusable, as `check_model` would raise it.
    next_steps: what a run would do.
    """

    kind: str
    n: int
    inputs: int
    outputs: int
    title: str = ""
    source: str = ""
    damping: str = ""
    units: UnitSystem = field(default_factory=UnitSystem)
    nonzeros: dict[str, int]
    asymmetry: dict[str, float]
    definiteness: dict[str, str]
    massless: int = 0
    parts: tuple[int, ...] = ()
    zero_rows: tuple[str, ...] = ()
    total_mass: Real | None = None
    capacity: float | None = None
    problems: tuple[str, ...] = ()
    next_steps: tuple[str, ...] = ()


# ---- the check at the door -----------------------------------------------------------------------------------------


def check_model(model: Model) -> None:
    """Refuse matrices that make no model of their kind.

    Raises ModelError for a stiffness, mass, conductance, capacity or damping that is not symmetric, a mass or capacity
    that is indefinite, a conductance with negative diagonal, and unknowns that no matrix touches (a singular pencil).
    """
    for problem in _problems(model, first=True):
        raise problem


def _problems(model: Model, *, first: bool = False) -> list[ModelError]:
    out: list[ModelError] = []
    for check in (_symmetry, _sign, _mass, _untouched):
        out += check(model)
        if out and first:
            return out[:1]
    return out


def _symmetry(model: Model) -> list[ModelError]:
    out = []
    for name, A in _symmetric_matrices(model):
        found = asymmetry(A)
        if found.worst > SYMMETRIC:
            out.append(_not_symmetric(model, name, found))
    return out


def _not_symmetric(model: Model, name: str, found: Asymmetry) -> ModelError:
    i, j = found.row, found.column
    return ModelError(
        f"{name} is not symmetric",
        expected=f"mirrored entries equal to {SYMMETRIC:g} of their diagonal entries",
        got=f"({i + 1}, {j + 1}) = {found.value:.8g}, ({j + 1}, {i + 1}) = {found.mirrored:.8g}: "
        f"{found.worst:.2g} apart, the largest of {found.count} such pairs",
        where=_where(model, f"{unknown_name(model, i)} and {unknown_name(model, j)}"),
        remedy=_remedy_for_asymmetry(name, found),
    )


def _remedy_for_asymmetry(name: str, found: Asymmetry) -> str:
    if found.triangular:
        return f'only one triangle is stored: mark it with the attribute symmetric = "{found.triangular}"'
    if name == "damping":
        return "gyroscopic and other unsymmetric terms need a state-space model (A, B, C)"
    return "store the matrix as it is before constraints are applied, or give the model as state space (A, B, C)"


def _sign(model: Model) -> list[ModelError]:
    if not isinstance(model, Thermal):
        return []
    diagonal = model.K.diagonal()
    bad = np.flatnonzero(diagonal < 0)
    if bad.size == 0:
        return []
    reversed_ = not np.any(diagonal > 0)
    i = int(bad[np.argmin(diagonal[bad])])
    return [
        ModelError(
            "the conductance has the wrong sign" if reversed_ else "the conductance is negative on its diagonal",
            expected="a positive conductance K in E T' + K T = F u",
            got=f"{bad.size} of {model.n} diagonal entries below 0, the lowest {diagonal[i]:.6g}",
            where=_where(model, unknown_name(model, i)),
            remedy="store -K: the conductance is the negative of the state matrix A"
            if reversed_
            else "check these rows: a conductance to nowhere with the wrong sign makes temperatures run away",
        )
    ]


def _mass(model: Model) -> list[ModelError]:
    if isinstance(model, StateSpace):
        return []
    name, M = ("mass", model.M) if isinstance(model, Structure) else ("capacity", model.E)
    if not np.any(M.data):
        return [ModelError(f"the {name} is zero", expected="at least one unknown with it", got="no nonzero entry")]
    count = negative_eigenvalues(M)
    if count == 0:
        return []
    at = np.flatnonzero(M.diagonal() < 0)
    return [
        ModelError(
            f"the {name} is indefinite",
            expected="no negative eigenvalue",
            got=f"{count} negative eigenvalue{'s' * (count > 1)}"
            + (f", {at.size} of them visible as negative diagonal entries" if at.size else ""),
            where=_where(model, unknown_name(model, int(at[0])) if at.size else ""),
            remedy="a stiffness with a geometric stiffness (buckling) is not a vibration model; store the mass"
            if name == "mass"
            else "check the sign of the capacities",
        )
    ]


def _untouched(model: Model) -> list[ModelError]:
    rows = _unused_rows(model)
    if rows.size == 0:
        return []
    names = [unknown_name(model, int(i)) for i in rows[:4]]
    first, second = ("A", "E") if isinstance(model, StateSpace) else _matrix_names(model)
    return [
        ModelError(
            f"the pencil is singular: {first} and {second} share empty rows",
            expected="every unknown in at least one of them",
            got=f"{rows.size} unknown{'s' * (rows.size > 1)} in neither",
            where=_where(model, ", ".join(names) + (" ..." if rows.size > 4 else "")),
            remedy="remove these unknowns from the matrices, the load and the outputs",
        )
    ]


def _unused_rows(model: Model) -> Any:
    if isinstance(model, StateSpace):
        if model.E is None:
            return np.zeros(0, dtype=int)
        return np.intersect1d(zero_rows(model.A), zero_rows(model.E))
    M = model.M if isinstance(model, Structure) else model.E
    rows = np.intersect1d(zero_rows(model.K), zero_rows(M))
    if isinstance(model, Structure) and model.damping.viscous is not None:
        rows = np.intersect1d(rows, zero_rows(model.damping.viscous))
    return rows


def _matrix_names(model: Structure | Thermal) -> tuple[str, str]:
    return ("stiffness", "mass") if isinstance(model, Structure) else ("conductance", "capacity")


def _symmetric_matrices(model: Model) -> list[tuple[str, Sparse]]:
    if isinstance(model, Structure):
        named = [("stiffness", model.K), ("mass", model.M)]
        local = (("damping", model.damping.viscous), ("stiffness_loss", model.damping.stiffness_loss))
        return named + [(name, A) for name, A in local if A is not None]
    if isinstance(model, Thermal):
        return [("conductance", model.K), ("capacity", model.E)]
    return []


def unknown_name(model: Model, i: int) -> str:
    """Unknown i (0-based) as a person would look for it: its number, node and direction."""
    labels = model.unknowns
    parts = []
    if labels is not None and labels.node:
        parts.append(f"node {labels.node[i]}")
    if labels is not None and labels.direction:
        parts.append(labels.direction[i])
    return f"unknown {i + 1}" + (f" ({' '.join(parts)})" if parts else "")


def _where(model: Model, what: str) -> str:
    return ", ".join(part for part in (model.source, what) if part)


# ---- the facts -----------------------------------------------------------------------------------------------------


def inspect_model(model: Model) -> Facts:
    """Sizes, symmetry, definiteness, massless and unconnected unknowns, total mass, and what a run would do."""
    matrices = _all_matrices(model)
    problems = tuple(str(problem) for problem in _problems(model))
    M = _mass_like(model)
    return Facts(
        kind=model.kind,
        n=model.n,
        inputs=model.m,
        outputs=model.p,
        title=model.title,
        source=model.source,
        damping=describe_damping(model),
        units=model.units,
        nonzeros={name: int(np.count_nonzero(A.data if sp.issparse(A) else A)) for name, A in matrices},
        asymmetry={name: asymmetry(sp.csr_array(A)).worst for name, A in matrices},
        definiteness={name: definiteness(A) for name, A in _symmetric_matrices(model)},
        massless=0 if M is None else len(massless_rows(M)),
        parts=_parts(matrices, model.n),
        zero_rows=tuple(unknown_name(model, int(i)) for i in _unused_rows(model)),
        total_mass=_total_mass(model),
        capacity=float(model.E.sum()) if isinstance(model, Thermal) else None,
        problems=problems,
        next_steps=("nothing until the problems above are solved",) if problems else _next_steps(model),
    )


def _all_matrices(model: Model) -> list[tuple[str, Any]]:
    if isinstance(model, StateSpace):
        return [("A", model.A)] + ([] if model.E is None else [("E", model.E)])
    return list(_symmetric_matrices(model))


def _mass_like(model: Model) -> Any:
    if isinstance(model, StateSpace):
        return None if model.E is None else sp.csr_array(model.E)
    return model.M if isinstance(model, Structure) else model.E


def _parts(matrices: list[tuple[str, Any]], n: int) -> tuple[int, ...]:
    graph = sp.csr_array((n, n))
    for _, A in matrices:
        graph = graph + abs(sp.csr_array(A))
    graph.eliminate_zeros()
    sizes = np.bincount(connected_components(graph, directed=False)[1])
    return tuple(int(size) for size in np.sort(sizes)[::-1])


def _total_mass(model: Model) -> Real | None:
    from modesieve.reduce.modal.effective import influence

    r = influence(model) if isinstance(model, Structure) else None
    if r is None or not isinstance(model, Structure):
        return None
    return np.asarray(np.einsum("ij,ij->j", r, model.M @ r))


def _next_steps(model: Model) -> tuple[str, ...]:
    from modesieve.reduce.modal.request import ALL_LIMIT, DEFAULT_COUNT

    steps = [_path(model, ALL_LIMIT, DEFAULT_COUNT)]
    if not model.m or not model.p:
        missing = " and ".join(name for name, count in (("a load", model.m), ("outputs", model.p)) if not count)
        steps.append(f"modes only: truncation and comparison need {missing}")
    else:
        steps.append(
            f"rank by band-share over {model.m} x {model.p} channel pairs, cut, and hold against the full model"
        )
    return tuple(steps)


def _path(model: Model, all_limit: int, default: int) -> str:
    if isinstance(model, StateSpace):
        if model.n > DENSE_LIMIT:
            return f"nothing: {model.n} states are more than the {DENSE_LIMIT} that are solved dense"
        return f"all {model.n} modes by dense LAPACK with left and right vectors; groups of eigenvalues as blocks"
    if isinstance(model, Structure) and model.damping.is_local:
        if 2 * model.n > DENSE_LIMIT:
            return f"nothing: complex modes of {model.n} unknowns are more than {DENSE_LIMIT} states"
        return f"all complex modes of {model.n} unknowns by dense LAPACK, because of the local damping"
    if model.n <= all_limit:
        return f"all modes of {model.n} unknowns by dense LAPACK, counted"
    return (
        f"real modes by sparse block Lanczos ({_solver()}), to 1.5 times the band's top or the {default} lowest, "
        "with an inertia count as proof that none is missing"
    )


def _solver() -> str:
    from modesieve.reduce.linalg.pardiso import pardiso_available

    return "PARDISO" if pardiso_available() else "SuperLU"
