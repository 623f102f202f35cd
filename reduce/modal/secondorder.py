"""Structures with local damping as first-order systems: ``M q'' + D q' + K q = F u`` with any semidefinite M.

With ``M = L L^T`` and ``p = L^T q'`` the pencil ``[[D, L], [L^T, 0]] x' = [[-K, 0], [0, I]] x + [F; 0] u`` holds
exactly one state per finite eigenvalue: two per unknown with mass, one per damped unknown without.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.linalg.dense import mass_root
from modesieve.reduce.modal.clusters import rotation
from modesieve.reduce.modal.damping import modal_damping
from modesieve.reduce.modal.descriptor import Plain, plain
from modesieve.reduce.model import LossFactor, Rayleigh, Structure


@dataclass(frozen=True, kw_only=True, eq=False)
class Dense:
    """Dense matrices of a structure: K, M, viscous D, imaginary stiffness H (None: none), F; free (n, f): M-orthonormal
    rigid-body motions that nothing damps; phi_d: what the modal base adds to D, for reports."""

    K: Real
    M: Real
    D: Real
    H: Real | None
    F: Real
    free: Real


def dense_structure(model: Structure, x: Real, phi: Real, zero: Any) -> Dense:
    """The matrices with the base damping in them; x (k,), phi (n, k): all undamped modes, zero: which are rigid."""
    K, M = model.K.toarray(), model.M.toarray()
    base, n = model.damping.base, model.n
    D = np.zeros((n, n)) if model.damping.viscous is None else model.damping.viscous.toarray()
    H = None if model.damping.stiffness_loss is None else model.damping.stiffness_loss.toarray()
    if isinstance(base, Rayleigh):
        D = D + base.alpha * M + base.beta * K
    elif isinstance(base, LossFactor):
        H = base.eta * K + (0.0 if H is None else H)
    elif base is not None:
        d, _ = modal_damping(base, x, zero)
        Mphi = M @ phi
        D = D + (Mphi * d) @ Mphi.T
    return Dense(K=K, M=M, D=D, H=H, F=np.asarray(model.F), free=_free(model, D, H, M, phi[:, np.asarray(zero)]))


def _free(model: Structure, D: Real, H: Real | None, M: Real, rigid: Real) -> Real:
    """The rigid-body motions that no damper resists, turned so that their coupling sits in few of them."""
    if rigid.shape[1] == 0:
        return rigid
    resisted = np.vstack([D @ rigid, *([] if H is None else [H @ rigid])])
    scale = max(np.linalg.norm(np.abs(part) @ np.abs(rigid)) for part in (D, H) if part is not None)
    _, s, Vt = np.linalg.svd(resisted, full_matrices=True)
    size = np.zeros(rigid.shape[1])
    size[: len(s)] = s
    free = rigid @ Vt.T[:, size <= 1e-10 * max(float(scale), 1e-300)]
    if free.shape[1] < 2 or not (model.m and model.p):
        return free
    C = np.vstack([np.asarray(C) / model.resolutions[:, None] for C in (model.Cq, model.Cv, model.Ca) if C is not None])
    return free @ rotation(free.T @ (model.F * model.amplitudes), C @ free)


@dataclass(frozen=True, kw_only=True, eq=False)
class Linear:
    """``z' = A z + B u``, ``q = Q z + X u``: A (r, r), B (r, m), Q (n, r), X (n, m)."""

    A: Any
    B: Any
    Q: Any
    X: Any


def linearised(s: Dense, *, hysteretic: bool = False) -> Linear:
    """The dynamic part without the free motions; with ``hysteretic`` K + j H takes the place of K.

    Raises ModelError where unknowns without mass and damping have no stiffness of their own.
    """
    n = len(s.K)
    Z = _complement(s.M, s.free)
    K = Z.T @ s.K @ Z
    if hysteretic and s.H is not None:
        K = K + 1j * (Z.T @ s.H @ Z)
    L = mass_root(Z.T @ s.M @ Z)
    k, r = L.shape
    E = np.block([[Z.T @ s.D @ Z, L], [L.T, np.zeros((r, r))]])
    A = np.block([[-K, np.zeros((k, r))], [np.zeros((r, k)), np.eye(r)]])
    B = np.vstack([Z.T @ s.F, np.zeros((r, s.F.shape[1]))])
    dynamic: Plain = plain(A, E, B, name="mass and damping")
    Q = Z @ dynamic.right[:k] if n else dynamic.right
    return Linear(A=dynamic.A, B=dynamic.left @ B, Q=Q, X=Z @ dynamic.direct[:k])


def _complement(M: Real, free: Real) -> Real:
    """Orthonormal basis (n, n - f) of everything M-orthogonal to the free motions."""
    if free.shape[1] == 0:
        return np.eye(len(M))
    return np.asarray(np.linalg.qr(M @ free, mode="complete")[0][:, free.shape[1] :])
