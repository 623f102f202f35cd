"""Complex modes of structures with local damping, dense: ``(lambda^2 M + lambda D + K) phi = 0``.

In real block form every pair is a term of its own, so that cutting modes keeps the others' eigenvalues exactly.
An imaginary stiffness means something over frequency only; in these modes it acts as viscous damping with the same
decay at each mode's own frequency (zeta = eta/2 for a single mode).
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from scipy.linalg import block_diag

from modesieve.reduce.arrays import DENSE_LIMIT, Complex, Real
from modesieve.reduce.errors import ModelError, SolveError
from modesieve.reduce.fingerprint import origin_of
from modesieve.reduce.linalg.factor import SolverName
from modesieve.reduce.modal.blockform import BlockForm, Term, block_form
from modesieve.reduce.modal.certified import find_pairs
from modesieve.reduce.modal.dense import Listing, block_warnings, certificate_of, cut_at, listing
from modesieve.reduce.modal.hysteretic import hysteretic_form
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.modal.request import Request, request
from modesieve.reduce.modal.rigid import find_zeros
from modesieve.reduce.modal.secondorder import Dense, Linear, dense_structure, linearised
from modesieve.reduce.modal.statics import workspace_of
from modesieve.reduce.model import Structure
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.small import FirstOrderModal


@dataclass(frozen=True, kw_only=True, eq=False)
class _Parts:
    """Everything in block coordinates: A block diagonal (r, r), B (r, m), displacements Q (n, r), direct X (n, m);
    jump: ``Q B`` (n, m) of the viscous structure, what a displacement does at once, and the size of its summands."""

    form: BlockForm
    A: Real
    B: Real
    Q: Real
    X: Real
    jump: tuple[Real, Real]


def damped_modes(
    model: Structure, band: tuple[float, float] | None, *, count: int | None, solver: SolverName, progress: Listener
) -> Modes:
    """All complex modes; with ``count`` the lowest so many.

    Raises SolveError above `DENSE_LIMIT` states, ChoiceError for more modes than exist, ModelError for the velocity or
    acceleration of a forced unknown that has neither mass nor a damper.
    """
    began = time.perf_counter()
    request(band, count, model.n)
    _refuse_large(model)
    tell(progress, "modes", message=f"{model.n} unknowns, complex modes, dense")
    pairs = find_pairs(model.K, model.M, Request(), None, solver=solver).pairs
    zeros = find_zeros(model, pairs.x, pairs.vectors)
    s = dense_structure(model, np.where(zeros.zero, 0.0, pairs.x), pairs.vectors, zeros.zero)
    parts = _parts(model, s)
    system, warnings = _system(model, s, parts)
    table = listing(parts.form, "rigid body")
    keep = cut_at(table, count)
    shapes = _shapes(parts, table)
    return Modes(
        origin=origin_of(model),
        system=system.select(np.arange(keep.terms)),
        eigenvalue=table.value[: keep.modes],
        term=table.term[: keep.modes],
        residual=_residuals(s, parts, table)[: keep.modes],
        condition=table.condition[: keep.modes],
        cluster=table.cluster[: keep.modes],
        always_kept=table.reasons[: keep.modes],
        certificate=certificate_of(table, keep, system.states),
        model=model,
        vectors=shapes[:, : keep.modes],
        static=_static(system, table),
        warnings=(*zeros.warnings, *warnings, *block_warnings(table)),
        solver="LAPACK, dense complex modes",
        workspace=workspace_of(model.K, model.M, pairs, solver, None),
        seconds=time.perf_counter() - began,
    )


def _refuse_large(model: Structure) -> None:
    if 2 * model.n > DENSE_LIMIT:
        raise SolveError(
            f"complex modes of {model.n} unknowns are too many for the dense solver",
            expected=f"at most {DENSE_LIMIT // 2} unknowns with local damping",
            got=f"{model.n}",
            remedy="leave the local damping out and use base damping (ratios, Rayleigh, loss factor): sparse",
        )


def _parts(model: Structure, s: Dense) -> _Parts:
    linear = linearised(s)
    rows = [np.asarray(C) / model.resolutions[:, None] for C in (model.Cq, model.Cv, model.Ca) if C is not None]
    C = np.vstack(rows) @ linear.Q if rows else np.zeros((0, len(linear.A)))
    form = block_form(linear.A, linear.B * model.amplitudes, C) if len(linear.A) else _nothing(linear)
    parts = _with_free(s, form, linear)
    return parts if s.H is None else hysteretic(model, s, parts)


def _nothing(linear: Linear) -> BlockForm:
    return BlockForm(terms=(), right=np.zeros((0, 0)), left=np.zeros((0, 0)))


def _with_free(s: Dense, form: BlockForm, linear: Linear) -> _Parts:
    """The free motions in front, each a double integrator ``[[0, 1], [0, 0]]`` of its own."""
    f = s.free.shape[1]
    blocks = [np.array([[0.0, 1.0], [0.0, 0.0]])] * f + [t.block for t in form.terms]
    Q = np.zeros((len(s.K), 2 * f))
    Q[:, 0::2] = s.free
    B = np.zeros((2 * f, s.F.shape[1]))
    B[1::2] = s.free.T @ s.F
    B, Q = np.vstack([B, form.left @ linear.B]), np.hstack([Q, linear.Q @ form.right])
    return _Parts(
        form=BlockForm(terms=(*_free_terms(f), *form.terms), right=form.right, left=form.left),
        A=block_diag(*blocks),
        B=B,
        Q=Q,
        X=linear.X,
        jump=(Q @ B, np.abs(Q) @ np.abs(B)),
    )


def _free_terms(count: int) -> list[Term]:
    """One mode each; together one group, as any basis of them is as good."""
    one = np.ones(1)
    return [
        Term(
            basis=np.zeros((0, 2)),
            block=np.array([[0.0, 1.0], [0.0, 0.0]]),
            eigenvalues=np.zeros(1, dtype=complex),
            condition=one,
            rounding=0 * one,
            group=1_000_000 if count > 1 else -1,
        )
        for _ in range(count)
    ]


def hysteretic(model: Structure, s: Dense, parts: _Parts) -> _Parts:
    """The same with the eigenvalues of ``lambda^2 M + lambda D + K + j H`` for the oscillating modes."""
    f = 2 * s.free.shape[1]
    linear = linearised(s, hysteretic=True)
    oscillating = sum(int(np.count_nonzero(t.eigenvalues.imag > 0)) for t in parts.form.terms)
    found = hysteretic_form(linear, oscillating)
    blocks = [np.array([[0.0, 1.0], [0.0, 0.0]])] * (f // 2) + [t.block for t in found.terms]
    # Whether rate outputs are proper is a matter of mass and dampers; the pairs below sum to zero only to order eta.
    return _Parts(
        form=BlockForm(terms=(*parts.form.terms[: f // 2], *found.terms), right=parts.form.right, left=parts.form.left),
        A=block_diag(*blocks),
        B=np.vstack([parts.B[:f], found.B]),
        Q=np.hstack([parts.Q[:, :f], found.Q]),
        X=np.real(linear.X),
        jump=parts.jump,
    )


# ---- the small system ----------------------------------------------------------------------------------------------


def _system(model: Structure, s: Dense, parts: _Parts) -> tuple[FirstOrderModal, list[str]]:
    """``y = Cq q + Cv q' + Ca q''`` with ``q = Q z + X u``, ``q' = Q (A z + B u)``, ``q'' = Q (A^2 z + A B u)``.

    What velocities and accelerations answer at once, ``(Cv Q_i + Ca Q_i A_i) B_i``, belongs to the terms: with it each
    answers nothing at frequency 0, so that what is dropped leaves no constant behind in the band.
    """
    V = parts.Q @ parts.A
    C, D, rates = np.zeros((model.p, len(parts.A))), np.array(model.Du), None
    if model.Cq is not None:
        C, D = C + model.Cq @ parts.Q, D + model.Cq @ parts.X
    if model.Cv is not None:
        _proper(model, model.Cv, parts.X, np.abs(parts.X))
        C, rates = C + model.Cv @ V, model.Cv @ parts.Q
    if model.Ca is not None:
        _proper(model, model.Ca, parts.X, np.abs(parts.X))
        _proper(model, model.Ca, *parts.jump)
        C, rates = C + model.Ca @ (V @ parts.A), model.Ca @ V + (0.0 if rates is None else rates)
    blocks = tuple(t.block for t in parts.form.terms)
    direct = None if rates is None else _direct(blocks, rates, parts.B)
    system = FirstOrderModal(blocks=blocks, B=parts.B, C=C, D=D, direct=direct)
    warnings = []
    if s.H is not None:
        warnings.append(
            "the imaginary stiffness is taken as viscous damping of the same decay in each mode (zeta = eta/2): the "
            "difference to the full model, which keeps it, is part of the measured error"
        )
    return system, warnings


def _direct(blocks: tuple[Real, ...], rates: Real, B: Real) -> Real:
    """``rates_i B_i`` of every block, (q, p, m)."""
    edges = np.cumsum([0, *(len(A) for A in blocks)])
    out = [rates[:, a:b] @ B[a:b] for a, b in pairwise(edges)]
    return np.array(out).reshape(len(blocks), len(rates), B.shape[1])


def _proper(model: Structure, C: Real, value: Real, size: Real) -> None:
    """Refuse rate outputs that follow the derivative of an input."""
    at, scale = np.abs(C @ value), np.abs(C) @ size
    bad = np.argwhere(at > 1e-7 * np.where(scale > 0, scale, 1.0))
    if len(bad):
        k, l = (int(i) for i in bad[0])
        raise ModelError(
            "velocity or acceleration of a forced unknown without enough inertia",
            expected="rate outputs on unknowns whose mass (for a velocity: or damper) holds them back",
            got=f"output {model.outputs[k].name} follows the derivative of input {model.inputs[l].name}",
            where=model.source,
            remedy="measure the displacement there, or give the unknown a mass",
        )


def _static(system: FirstOrderModal, table: Listing) -> Real:
    """``-sum C_i A_i^-1 B_i`` of everything but the rigid-body modes, (p, m)."""
    floating = {int(table.term[i]) for i, reason in enumerate(table.reasons) if reason == "rigid body"}
    out = np.zeros((system.p, system.m))
    for i, block in enumerate(system.blocks):
        if i not in floating:
            rows = system.states_of(i)
            out -= system.C[:, rows] @ np.linalg.solve(block, system.B[rows])
            out += 0.0 if system.direct is None else system.direct[i]
    return out


# ---- shapes and residuals ------------------------------------------------------------------------------------------


def _residuals(s: Dense, parts: _Parts, table: Listing) -> Real:
    """``norm(M Q A_i^2 + (D Q) A_i + (K + j H) Q)`` of every term over the sum of the three norms, per mode."""
    out, at = np.zeros(len(parts.form.terms)), 0
    for i, term in enumerate(parts.form.terms):
        rows = slice(at, at + len(term.block))
        at = rows.stop
        sides = _sides(s, parts.Q[:, rows], term)
        size = sum(np.linalg.norm(side) for side in sides)
        spread = np.linalg.norm(np.abs(s.K) @ np.abs(parts.Q[:, rows]))
        size = size if size > 1e4 * np.finfo(float).eps * spread else spread
        out[i] = np.linalg.norm(sum(sides)) / max(float(size), 1e-300)
    return np.asarray(out[table.term])


def _sides(s: Dense, Q: Real, term: Term) -> list[Any]:
    if s.H is None or len(term.block) == 1:
        return [s.M @ Q @ term.block @ term.block, s.D @ Q @ term.block, s.K @ Q]
    value, phi = complex(term.eigenvalues[0]), Q[:, 0] + 1j * Q[:, 1]
    if value == 0:
        return [s.K @ Q]
    return [value**2 * (s.M @ phi), value * (s.D @ phi), (s.K + 1j * s.H) @ phi]


def _shapes(parts: _Parts, table: Listing) -> Complex:
    """Displacement shapes (n, k), complex: ``Q_i`` times the right eigenvector of the mode in its block."""
    out = np.zeros((len(parts.Q), len(table.value)), dtype=complex)
    edges = np.cumsum([0, *(len(t.block) for t in parts.form.terms)])
    for i, term in enumerate(parts.form.terms):
        Q = parts.Q[:, edges[i] : edges[i + 1]]
        members = np.flatnonzero(table.term == i)
        if len(term.block) == 1 or (len(members) == 1 and term.eigenvalues[0] == 0):
            out[:, members[0]] = Q[:, 0]
        elif len(term.block) == 2 and len(members) == 1:
            out[:, members[0]] = Q[:, 0] + 1j * Q[:, 1]
        else:
            value, vector = np.linalg.eig(term.block)
            for k in members:
                out[:, k] = Q @ vector[:, int(np.argmin(np.abs(value - table.value[k])))]
    return out
