"""Modes of symmetric pencils: structures whose damping leaves the real modes uncoupled, and thermal models.

``K phi = x M phi``, ``phi^T M phi = I``; x = omega^2 for a structure, x = -lambda for a thermal model (M: capacity).
"""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real, Sparse
from modesieve.reduce.fingerprint import origin_of
from modesieve.reduce.linalg import residuals
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.modal import clusters
from modesieve.reduce.modal.certified import find_pairs
from modesieve.reduce.modal.condense import massless_answer
from modesieve.reduce.modal.damping import eigenvalues, modal_damping, overdamped
from modesieve.reduce.modal.effective import effective_masses
from modesieve.reduce.modal.records import Certificate, Modes
from modesieve.reduce.modal.request import Request
from modesieve.reduce.modal.rigid import Zeros, find_zeros
from modesieve.reduce.modal.statics import Workspace, elastic_answer, workspace_of
from modesieve.reduce.model import LossFactor, RatioByMode, Rayleigh, Structure, Thermal, Unknowns
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem

#: Load columns that begin the Krylov space; more cost solves without bringing the spectrum's end nearer.
_START = 16


@dataclass(frozen=True, kw_only=True, eq=False)
class _Shapes:
    """Ascending x (k,), phi (n, k) after rotation, what is zero, and the groups (indices) of repeated x."""

    x: Real
    phi: Real
    zeros: Zeros
    groups: list[tuple[int, ...]]


def symmetric_modes(
    model: Structure | Thermal, wanted: Request, *, solver: SolverName, seed: int, progress: Listener
) -> Modes:
    """Modes of a structure without local damping or of a thermal model."""
    began = time.perf_counter()
    K, M = model.K, mass_of(model)
    edge_x = None if wanted.edge is None else wanted.edge ** (2 if isinstance(model, Structure) else 1)
    start = np.asarray(model.F)[:, :_START] if model.m else None
    groups = node_groups(model.unknowns)
    result = find_pairs(K, M, wanted, edge_x, start=start, groups=groups, solver=solver, seed=seed, progress=progress)
    pairs = result.pairs
    shapes = _shapes(model, pairs.x, pairs.vectors)
    massless = massless_answer(model, solver=solver)
    workspace = workspace_of(K, M, pairs, solver, groups)
    tell(progress, "statics")
    static, reason, solves = _static(model, shapes, massless, workspace)
    modes = _assemble(model, shapes, massless, _in_omega(model, result.certificate))
    return replace(
        modes,
        static=static,
        static_reason=reason,
        warnings=tuple(text for text in (wanted.warning, pairs.message, *modes.warnings) if text),
        workspace=workspace,
        solver=f"{'dense' if pairs.basis is None else 'block Lanczos'}, {workspace.factor.solver}",
        factorisations=pairs.factorisations + int(np.isfinite(result.certificate.below_omega or np.inf)),
        solves=pairs.solves + solves,
        seconds=time.perf_counter() - began,
    )


def mass_of(model: Structure | Thermal) -> Sparse:
    """M of a structure, the capacity of a thermal model."""
    return model.M if isinstance(model, Structure) else model.E


def node_groups(unknowns: Unknowns | None) -> Ints | None:
    """For every row the number of its node; None without labels."""
    if unknowns is None or not unknowns.node:
        return None
    return np.asarray(np.unique(np.asarray(unknowns.node), return_inverse=True)[1], dtype=np.int64)


# ---- shapes --------------------------------------------------------------------------------------------------------


def _shapes(model: Structure | Thermal, x: Real, phi: Real) -> _Shapes:
    zeros = find_zeros(model, x, phi)
    x = np.where(zeros.zero, 0.0, x)
    order = np.argsort(x, kind="stable")
    x, phi = x[order], phi[:, order]
    zeros = replace(zeros, zero=zeros.zero[order], reasons=tuple(zeros.reasons[i] for i in order))
    error = clusters.eigenvalue_error(model.K, x, phi)
    repeated = clusters.groups(x, error)
    x, phi = x.copy(), phi.copy()
    for group in repeated:
        _rotate(model, x, phi, np.array(group))
    return _Shapes(x=x, phi=clusters.fixed_signs(phi), zeros=zeros, groups=repeated)


def _rotate(model: Structure | Thermal, x: Real, phi: Real, at: Ints) -> None:
    """Turn the group's columns of phi in place, x to their Rayleigh quotients."""
    if not (model.m and model.p):
        return
    B = phi[:, at].T @ (model.F * model.amplitudes)
    C = _outputs(model, float(np.sqrt(np.abs(x[at]).max()))) @ phi[:, at]
    Q = clusters.rotation(B, C)
    phi[:, at] = phi[:, at] @ Q
    x[at] = np.einsum("ij,i,ij->j", Q, x[at], Q)


def _outputs(model: Structure | Thermal, omega: float) -> Real:
    """All weighted output rows, the three kinds stacked and scaled to the group's own frequency."""
    if isinstance(model, Thermal):
        rows = [np.asarray(model.C)]
    else:
        kinds = ((model.Cq, 1.0), (model.Cv, omega), (model.Ca, omega**2))
        rows = [np.asarray(C) * (factor or 1.0) for C, factor in kinds if C is not None]
    return np.vstack([C / model.resolutions[:, None] for C in rows])


# ---- statics -------------------------------------------------------------------------------------------------------


def _static(
    model: Structure | Thermal, shapes: _Shapes, massless: Real, workspace: Workspace
) -> tuple[Real | None, str, int]:
    outputs = model.Cq if isinstance(model, Structure) else model.C
    if outputs is None:
        return None, "only displacement outputs have a static remainder, and the model has none", 0
    rigid = shapes.phi[:, np.asarray(shapes.zeros.zero, dtype=bool)]
    answer = elastic_answer(model.K, mass_of(model), np.asarray(model.F), rigid, workspace)
    if answer.u is None:
        return None, answer.reason, answer.solves
    return np.asarray(outputs @ answer.u) - massless, "", answer.solves


# ---- the record ----------------------------------------------------------------------------------------------------


def _assemble(model: Structure | Thermal, shapes: _Shapes, massless: Real, certificate: Certificate) -> Modes:
    x, phi, rigid = shapes.x, shapes.phi, shapes.zeros.zero
    warnings = [*shapes.zeros.warnings]
    system: SmallSystem
    value: Complex
    if isinstance(model, Thermal):
        system, value = _first_order(model, x, phi, massless), (-x).astype(np.complex128)
        masses, total = None, None
    else:
        d, eta = modal_damping(model.damping.base, x, rigid)
        d = _common_in_groups(d, shapes.groups)
        system, value = _second_order(model, x, d, eta, phi, massless), eigenvalues(x, d, eta)
        masses, total = effective_masses(model, phi)
        warnings += _structure_warnings(model, x, d, eta, massless, shapes.groups)
    modes = Modes(
        origin=origin_of(model),
        system=system,
        eigenvalue=value,
        term=np.arange(len(x)),
        residual=residuals(model.K, mass_of(model), x, phi),
        condition=np.ones(len(x)),
        cluster=_numbers(shapes.groups, len(x)),
        always_kept=shapes.zeros.reasons,
        certificate=certificate,
        model=model,
        vectors=phi,
        effective_mass=masses,
        total_mass=total,
        uniform=phi.T @ (model.E @ np.ones(model.n)) if isinstance(model, Thermal) else None,
        warnings=tuple(warnings),
    )
    return in_order(modes)


def _first_order(model: Thermal, x: Real, phi: Real, massless: Real) -> FirstOrderModal:
    blocks = tuple(np.array([[-xi]]) for xi in x)
    return FirstOrderModal(blocks=blocks, B=phi.T @ model.F, C=model.C @ phi, D=model.D + massless)


def _second_order(model: Structure, x: Real, d: Real, eta: Real, phi: Real, massless: Real) -> SecondOrderModal:
    none = np.zeros((model.p, len(x)))
    cq, cv, ca = (none if C is None else np.asarray(C @ phi) for C in (model.Cq, model.Cv, model.Ca))
    loss = model.damping.base.eta if isinstance(model.damping.base, LossFactor) else 0.0
    return SecondOrderModal(
        x=x,
        d=d,
        eta=eta,
        b=phi.T @ model.F,
        cq=cq,
        cv=cv,
        ca=ca,
        # With a loss factor the massless unknowns answer with the same complex stiffness as everything else.
        D=model.Du if loss else model.Du + massless,
        X=massless if loss else np.zeros_like(massless),
        eta_X=loss,
    )


def _common_in_groups(d: Real, groups: list[tuple[int, ...]]) -> Real:
    """One damping for all members of a group: ratios by mode number would depend on the basis otherwise."""
    d = np.array(d)
    for group in groups:
        d[list(group)] = d[list(group)].mean()
    return d


def _structure_warnings(
    model: Structure, x: Real, d: Real, eta: Real, massless: Real, groups: list[tuple[int, ...]]
) -> list[str]:
    base, out = model.damping.base, []
    slow = np.flatnonzero(overdamped(x, d, eta))
    if slow.size:
        listed = ", ".join(str(i + 1) for i in slow[:5]) + (" ..." if slow.size > 5 else "")
        out.append(
            f"{slow.size} overdamped mode{'s' * (slow.size > 1)} ({listed} by undamped frequency): two real poles "
            "each, the table shows the slower one"
        )
    if isinstance(base, RatioByMode) and any(len(set(np.minimum(g, len(base.ratio) - 1))) > 1 for g in groups):
        out.append("damping ratios by mode number differ inside a repeated mode: its members share their mean")
    if isinstance(base, Rayleigh) and base.beta and np.any(massless):
        out.append(
            "massless unknowns answer a load at once here; with stiffness-proportional damping they would follow with "
            f"a time constant of {base.beta:.3g} s"
        )
    return out


def _numbers(groups: list[tuple[int, ...]], k: int) -> tuple[tuple[int, ...], ...]:
    out: list[tuple[int, ...]] = [()] * k
    for group in groups:
        for i in group:
            out[i] = tuple(j + 1 for j in group)
    return tuple(out)


def _in_omega(model: Structure | Thermal, certificate: Certificate) -> Certificate:
    """The counting point as a frequency."""
    if certificate.below_omega is None or isinstance(model, Thermal):
        return certificate
    return replace(certificate, below_omega=float(np.sqrt(max(certificate.below_omega, 0.0))))


def in_order(modes: Modes) -> Modes:
    """The same modes in ascending ``abs(eigenvalue)``, each keeping a term of its own."""
    size: Any = np.abs(modes.eigenvalue)
    order = np.argsort(size, kind="stable")
    if np.array_equal(order, np.arange(len(order))):
        return modes
    place = np.empty(len(order), dtype=int)
    place[order] = np.arange(len(order)) + 1
    value: Complex = modes.eigenvalue[order]
    system: SmallSystem = modes.system.select(order)
    moved = {name: getattr(modes, name)[order] for name in ("residual", "condition")}
    return replace(
        modes,
        system=system,
        eigenvalue=value,
        cluster=tuple(tuple(sorted(int(place[j - 1]) for j in modes.cluster[i])) for i in order),
        always_kept=tuple(modes.always_kept[i] for i in order),
        vectors=modes.vectors[:, order],
        effective_mass=None if modes.effective_mass is None else modes.effective_mass[order],
        uniform=None if modes.uniform is None else modes.uniform[order],
        **moved,
    )
