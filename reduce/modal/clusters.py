"""Groups of repeated eigenvalues, rotated so that the coupling sits in as few vectors as possible.

Every M-orthonormal basis of a repeated eigenvalue's space is valid. With the group's weighted input rows B and output
columns C, at most rank(C B) vectors matter: a basis of range(B) on which C acts; all others have no coupling.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real, Sparse

#: Relative accuracy to which eigenvalues are known: members that differ by less cannot be told apart.
KNOWN = 1e-10
#: Singular values below this share of the group's largest count as no coupling (vectors are known to about 1e-10).
UNCOUPLED = 1e-9


def eigenvalue_error(K: Sparse, x: Real, phi: Real) -> Real:
    """How well each x (k,) is known: ``KNOWN abs(x)`` and rounding of K, ``4 eps abs(phi)^T abs(K) abs(phi)``."""
    return KNOWN * np.abs(x) + 4 * np.finfo(float).eps * strain(K, phi)


def strain(K: Sparse, phi: Real) -> Real:
    """``abs(phi_i)^T abs(K) abs(phi_i)``, shape (k,): what a relative change of all entries of K moves x by."""
    size = np.abs(phi)
    return np.asarray(np.einsum("ij,ij->j", size, abs(K) @ size))


def groups(x: Real, error: Real) -> list[tuple[int, ...]]:
    """Runs of two or more ascending x (k,) whose neighbours differ by no more than both their errors.

    >>> groups(np.array([1.0, 2.0, 2.0, 3.0]), np.full(4, 1e-9))
    [(1, 2)]
    """
    near = np.diff(x) <= error[:-1] + error[1:]
    edges = np.flatnonzero(~near) + 1
    runs = np.split(np.arange(len(x)), edges)
    return [tuple(int(i) for i in run) for run in runs if len(run) > 1]


def rotation(B: Any, C: Any) -> Any:
    """Unitary Q (g, g): ``phi Q`` has its coupling in the first rank(C B) vectors; real for real B and C.

    B (g, m) and C (p, g) weighted input rows and output columns of the group. The coupled vectors come first, the
    strongest in front; then those without output, then those without input.
    """
    g = B.shape[0]
    U, s, _ = np.linalg.svd(B)
    r_b = _rank(s)
    heard, silent = U[:, :r_b], U[:, r_b:]
    _, t, Vt = np.linalg.svd(C @ heard)
    r = _rank(t, float(np.linalg.norm(C)))
    coupled, blind = heard @ Vt.conj().T[:, :r], heard @ Vt.conj().T[:, r:]
    Q = np.hstack([_by_strength(coupled, B, C), blind, silent])
    return Q if Q.shape == (g, g) else np.eye(g)


def _by_strength(W: Any, B: Any, C: Any) -> Any:
    """The same span turned to the principal axes of what it hears and shows, both scaled to one."""
    if W.shape[1] < 2:
        return W
    b, c = W.conj().T @ B, C @ W
    gram = b @ b.conj().T / np.linalg.norm(b) ** 2 + c.conj().T @ c / np.linalg.norm(c) ** 2
    return W @ np.linalg.eigh(-gram)[1]


def _rank(singular: Real, scale: float | None = None) -> int:
    top = singular.max(initial=0.0) if scale is None else scale
    return int(np.count_nonzero(singular > UNCOUPLED * top)) if top > 0 else 0


def fixed_signs(phi: Real) -> Real:
    """Columns turned so that their largest entry (the first of equals) is positive: the same result on every run."""
    if phi.size == 0:
        return phi
    size = np.abs(phi)
    at = np.argmax(size >= (1 - 1e-6) * size.max(axis=0), axis=0)
    sign = np.sign(phi[at, np.arange(phi.shape[1])])
    return phi * np.where(sign == 0, 1.0, sign)
