"""Modes of symmetric pencils: structures with proportional damping, and thermal models."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real, Sparse
from modesieve.reduce.fingerprint import origin_of
from modesieve.reduce.linalg import CountResult, SymmetricPairs, certified_pairs, residuals, shift_and_factor
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.modal.damping import eigenvalues, modal_damping
from modesieve.reduce.modal.kinds import always_kept, fewest_coupled, groups, rounding_of
from modesieve.reduce.modal.massless import static_share
from modesieve.reduce.modal.participation import effective_mass, rigid_translations
from modesieve.reduce.modal.records import Certificate, Modes
from modesieve.reduce.modal.request import Request
from modesieve.reduce.modal.statics import elastic_solution
from modesieve.reduce.modal.workspace import Workspace
from modesieve.reduce.model import LossFactor, Structure, Thermal
from modesieve.reduce.progress import Listener
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem

#: More start vectors than this would make the first block needlessly wide.
START_COLUMNS = 8


def symmetric_modes(
    model: Structure | Thermal, request: Request, *, solver: SolverName, seed: int, progress: Listener
) -> Modes:
    """Modes of ``K phi = x M phi`` with their count: x = omega^2 (structure) or the decay rate (thermal)."""
    K, M = pencil(model)
    assert model.F is not None
    pairs, count = certified_pairs(
        K,
        M,
        count=request.count,
        below=request.below(model.kind),
        solver=solver,
        start=model.F[:, :START_COLUMNS],
        groups=node_groups(model),
        seed=seed,
        progress=progress,
    )
    pairs = clean(K, pairs)
    rounding = rounding_of(K, pairs.vectors)
    reasons, warnings = always_kept(pairs.x, rounding, "rigid body" if isinstance(model, Structure) else "integrating")
    zero = np.array([r not in ("", "unstable") for r in reasons], dtype=bool)
    clusters = groups(np.where(zero, 0.0, pairs.x), np.where(zero, 0.0, rounding))
    vectors = rotate(model, pairs.vectors, clusters)
    pairs = replace(pairs, vectors=vectors, residuals=residuals(K, M, pairs.x, vectors))
    workspace = keep_factor(K, M, pairs, solver)
    return assemble(model, pairs, count, reasons, warnings, clusters, workspace)


def pencil(model: Structure | Thermal) -> tuple[Sparse, Sparse]:
    """(K, M) of a structure, (K, E) of a thermal model."""
    return (model.K, model.M) if isinstance(model, Structure) else (model.K, model.E)


def node_groups(model: Structure | Thermal) -> Ints | None:
    """Node number per row where labels exist: the ordering then works on the smaller graph of nodes."""
    if model.unknowns is None or not model.unknowns.node:
        return None
    _, index = np.unique(np.array(model.unknowns.node), return_inverse=True)
    return index.astype(np.int64)


def clean(K: Sparse, pairs: SymmetricPairs) -> SymmetricPairs:
    """Rayleigh quotients: x to second order in the vectors' error (x of a zero mode becomes its own rounding)."""
    x = np.einsum("ij,ij->j", pairs.vectors, K @ pairs.vectors)
    order = np.argsort(x, kind="stable")
    return replace(pairs, x=x[order], vectors=pairs.vectors[:, order], residuals=pairs.residuals[order])


def keep_factor(K: Sparse, M: Sparse, pairs: SymmetricPairs, solver: SolverName) -> Workspace:
    """The solve's own factor, or a new one after a dense solve."""
    if pairs.factor is not None:
        return Workspace(sigma=pairs.sigma, factor=pairs.factor, basis=pairs.basis)
    positive = pairs.x[pairs.x > 0]
    shifted = shift_and_factor(K, M, solver=solver, hint=float(positive[0]) if positive.size else None)
    return Workspace(sigma=shifted.sigma, factor=shifted.factor)


def rotate(model: Structure | Thermal, vectors: Real, clusters: list[list[int]]) -> Real:
    """Vectors with every repeated eigenvalue's basis turned so that few of its members couple."""
    out = np.array(vectors)
    for group in clusters:
        b, c = weighted_coupling(model, out[:, group])
        U, _, _ = fewest_coupled(b, c)
        out[:, group] = out[:, group] @ U
    return out


def weighted_coupling(model: Structure | Thermal, vectors: Real) -> tuple[Real, Real]:
    """b (k, m) times amplitudes and every kind of c (3p or p, k) over resolutions."""
    assert model.F is not None
    kinds = [model.Cq, model.Cv, model.Ca] if isinstance(model, Structure) else [model.C]
    c = [C @ vectors / model.resolutions[:, None] for C in kinds if C is not None]
    stacked = np.vstack(c) if c else np.zeros((0, vectors.shape[1]))
    return vectors.T @ model.F * model.amplitudes, stacked


def assemble(
    model: Structure | Thermal,
    pairs: SymmetricPairs,
    count: CountResult,
    reasons: tuple[str, ...],
    warnings: tuple[str, ...],
    clusters: list[list[int]],
    workspace: Workspace,
) -> Modes:
    """The record of stage 1."""
    K, M = pencil(model)
    zero = np.array([r not in ("", "unstable") for r in reasons], dtype=bool)
    x = np.where(zero, 0.0, pairs.x)
    values, system = _system(model, x, pairs.vectors, clusters)
    labels: list[tuple[int, ...]] = [()] * len(x)
    for group in clusters:
        for i in group:
            labels[i] = tuple(j + 1 for j in group)
    extra: dict[str, Any] = {}
    if isinstance(model, Structure):
        r = rigid_translations(model)
        if r is not None:
            extra["effective_mass"], extra["total_mass"] = effective_mass(M, pairs.vectors, r)
    static, why = _static(model, K, M, pairs.vectors[:, zero], workspace, "unstable" in reasons)
    return Modes(
        origin=origin_of(model),
        model=model,
        system=system,
        eigenvalue=values,
        term=np.arange(len(x)),
        residual=pairs.residuals,
        condition=np.ones(len(x)),
        cluster=tuple(labels),
        always_kept=reasons,
        certificate=certificate(model, pairs, count),
        vectors=pairs.vectors,
        static=static,
        static_reason=why,
        warnings=warnings + ((pairs.message,) if pairs.message else ()),
        solver=pairs.solver,
        factorisations=pairs.factorisations,
        solves=pairs.solves,
        seconds=pairs.seconds,
        workspace=workspace,
        **extra,
    )


def certificate(model: Structure | Thermal, pairs: SymmetricPairs, count: CountResult) -> Certificate:
    """Complete when the count at the counting point equals the length of the list."""
    mu = np.sqrt(count.mu) if isinstance(model, Structure) and count.mu > 0 else count.mu
    common: dict[str, Any] = {"found": len(pairs.x), "shift": pairs.sigma, "solver": count.solver or pairs.solver}
    if pairs.whole and count.reliable and count.expected == len(pairs.x):
        return Certificate(complete="all", expected=count.expected, reason="every finite mode is known", **common)
    common |= {"expected": count.expected, "negative_pivots": count.negative_pivots}
    if not count.reliable:
        return Certificate(complete="no", reason=f"the count could not be trusted: {count.reason}", **common)
    if count.expected != len(pairs.x):
        point = f"{mu / (2 * np.pi):.6g} Hz" if isinstance(model, Structure) else f"{mu:.6g} 1/s"
        reason = f"{count.expected} modes lie below {point} by the count, {len(pairs.x)} were found"
        return Certificate(complete="no", reason=reason, **common)
    reason = "negative pivots of K - mu M" + (f", {count.corrections}" if count.corrections else "")
    return Certificate(complete="counted", below_omega=float(mu), reason=reason, **common)


def _system(
    model: Structure | Thermal, x: Real, vectors: Real, clusters: list[list[int]]
) -> tuple[Complex, SmallSystem]:
    assert model.F is not None
    b = vectors.T @ model.F
    share = static_share(model)
    if isinstance(model, Thermal):
        assert model.C is not None
        b, (c,) = _clean_clusters(b, [model.C @ vectors], clusters)
        blocks = tuple(np.array([[-value]]) for value in x)
        return (-x).astype(complex), FirstOrderModal(blocks=blocks, B=b, C=c, D=model.D + share)
    empty = np.zeros((model.p, len(x)))
    c = [empty if C is None else C @ vectors for C in (model.Cq, model.Cv, model.Ca)]
    b, (cq, cv, ca) = _clean_clusters(b, c, clusters)
    d, eta = modal_damping(model.damping.base, x, x > 0)
    base = model.damping.base
    loss = base.eta if isinstance(base, LossFactor) else 0.0
    D, X = (model.Du, share) if loss else (model.Du + share, np.zeros_like(share))
    system = SecondOrderModal(x=x, d=d, eta=eta, b=b, cq=cq, cv=cv, ca=ca, D=D, X=X, eta_X=loss)
    return eigenvalues(x, d, eta), system


def _clean_clusters(b: Real, c: list[Real], clusters: list[list[int]]) -> tuple[Real, list[Real]]:
    """Couplings that the rotation made zero are zero to the last digit."""
    b, c = b.copy(), [ci.copy() for ci in c]
    for group in clusters:
        for array in (b.T, *c):
            part = array[:, group]
            size = np.abs(part).max(initial=0.0)
            part[:, np.abs(part).max(axis=0, initial=0.0) <= 1e-9 * size] = 0.0
            array[:, group] = part
    return b, c


def _static(
    model: Structure | Thermal, K: Sparse, M: Sparse, zero: Real, workspace: Workspace, unstable: bool
) -> tuple[Real | None, str]:
    if unstable and workspace.sigma != 0:
        return None, "the static response of a model with unstable modes was not computed"
    C = model.Cq if isinstance(model, Structure) else model.C
    assert model.F is not None
    if C is None:
        return np.zeros((model.p, model.m)), ""
    u = elastic_solution(K, M, model.F, zero, workspace)
    return np.asarray(C @ u) - static_share(model), ""
