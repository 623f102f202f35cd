"""Real block modal form of a dense matrix: single modes where they mean something, blocks where only groups do.

``kappa_i = norm(w_i) norm(v_i)/abs(v_i^H w_i)`` tells how far eigenvalue i moves when perturbed. Where it is large
(near-defective groups, strongly non-normal matrices) the sum over single modes loses as many digits as kappa has; such
eigenvalues are taken together by a reordered real Schur form and decoupled from the rest by a Sylvester equation
(C. A. Bavely and G. W. Stewart, SIAM J. Numer. Anal. 16 (1979) 359-367).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import eig, eigh, eigvals, matrix_balance, schur, solve_sylvester, solve_triangular
from scipy.linalg.lapack import dtrsen

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.modal.clusters import rotation

EPS = float(np.finfo(float).eps)
#: Largest condition number of a single mode, and largest norm that a decoupling may have.
LARGEST = 1e5
#: Terms this much larger than their sum leave it half the digits of double precision.
CANCELLED = 1e7
#: Eigenvalues further apart than this (relative) are never one.
_NEAR = 1e-6
#: An eigenvalue within so many roundings of zero is zero.
_ROUNDINGS = 100.0


@dataclass(frozen=True, kw_only=True, eq=False)
class Term:
    """One term: a real basis X (r, g) of an invariant subspace, its block (g, g), the eigenvalues with imaginary part
    >= 0 that are in it, their condition numbers, and the rounding that each may have."""

    basis: Real
    block: Real
    eigenvalues: Complex
    condition: Real
    rounding: Real
    group: int = -1  # terms of one repeated, non-defective eigenvalue share a number >= 0


@dataclass(frozen=True, kw_only=True, eq=False)
class BlockForm:
    """``A T = T diag(blocks)``: the terms in ascending abs(eigenvalue), T (r, r) and its inverse."""

    terms: tuple[Term, ...]
    right: Real
    left: Real


def block_form(A: Real, B: Real, C: Real) -> BlockForm:
    """The block modal form of A (r, r); B (r, m) and C (p, r), weighted, only turn repeated eigenvalues' vectors.

    Condition numbers are those of the balanced matrix (states rescaled by powers of two, so that their units do not
    matter), unless the modes' own contributions to the channels cancel: then those of A as it is.
    """
    balanced, (scale, _) = matrix_balance(A, permute=False, separate=True)
    form = _form(balanced, scale, B, C)
    return _form(A, np.ones(len(A)), B, C) if _cancels(form, A, B, C) else form


def _form(A: Real, scale: Real, B: Real, C: Real) -> BlockForm:
    """The block form of ``diag(scale) A diag(1/scale)``, given A in the scaled states."""
    lam, left, right = _eigen(A)
    terms = _terms(A, lam, left, right, B / scale[:, None], C * scale)
    terms.sort(key=lambda term: (float(np.abs(term.eigenvalues).min()), -float(term.eigenvalues.real.max())))
    T = np.hstack([term.basis for term in terms])
    inverse = np.linalg.inv(T)
    return BlockForm(terms=tuple(terms), right=scale[:, None] * T, left=inverse / scale)


def _cancels(form: BlockForm, A: Real, B: Real, C: Real) -> bool:
    """True when single terms are so much larger than their sum that half the digits are lost.

    Balancing can hide a near-defective chain of states. It shows in the projectors ``X_i Y_i^T`` in the given states,
    and in the channels: ``norm(C_i) norm(B_i)`` against ``norm(s G(s))`` at s well above all eigenvalues.
    """
    edges = np.cumsum([0, *(len(term.block) for term in form.terms)])[:-1]
    right = np.sqrt(np.add.reduceat(np.sum(form.right**2, axis=0), edges))
    left = np.sqrt(np.add.reduceat(np.sum(form.left**2, axis=1), edges))
    wide = right * left > CANCELLED
    if not wide.any() or not (B.size and C.size):
        return False
    size_b = np.sqrt(np.add.reduceat(np.sum((form.left @ B) ** 2, axis=1), edges))
    size_c = np.sqrt(np.add.reduceat(np.sum((C @ form.right) ** 2, axis=0), edges))
    s = 10 * max(float(np.abs(term.eigenvalues).max()) for term in form.terms) or 1.0
    total = np.linalg.norm(s * (C @ np.linalg.solve(s * np.eye(len(A)) - A, B)))
    return bool(np.any((size_b * size_c)[wide] > CANCELLED * total))


def _eigen(A: Real) -> tuple[Complex, Complex, Complex]:
    """Eigenvalues, unit left and right vectors as columns."""
    if np.abs(A - A.T).max(initial=0.0) <= 4 * EPS * np.abs(A).max(initial=0.0):
        value, vector = eigh((A + A.T) / 2)
        return value.astype(complex), vector.astype(complex), vector.astype(complex)
    value, left, right = eig(A, left=True, right=True)
    return value, left, right


# ---- who belongs together ------------------------------------------------------------------------------------------


def _terms(A: Real, lam: Complex, left: Complex, right: Complex, B: Real, C: Real) -> list[Term]:
    upper = np.flatnonzero(lam.imag >= 0)
    overlap = np.sum(left.conj() * right, axis=0)
    kappa = 1 / np.maximum(np.abs(overlap), EPS)
    bad = kappa > LARGEST
    lam = _refined(A, lam, left, right, overlap, bad)
    rounding = _rounding(A, left, right, overlap)
    out: list[Term] = []
    for number, members in enumerate(_repeated(lam, rounding, upper[~bad[upper]])):
        out += _single_terms(A, lam, left, right, kappa, rounding, members, number, B, C)
    if bad.any():
        out += _joint_terms(A, lam[bad])
    return out


def _refined(A: Real, lam: Complex, left: Complex, right: Complex, overlap: Complex, bad: Any) -> Complex:
    """Two-sided Rayleigh quotients, whose error is of second order in the vectors'; real ones stay real."""
    quotient = np.sum(left.conj() * (A @ right), axis=0) / np.where(bad, 1.0, overlap)
    quotient = np.where(lam.imag == 0, quotient.real + 0j, quotient)
    return np.asarray(np.where(bad, lam, quotient))


def _rounding(A: Real, left: Complex, right: Complex, overlap: Complex) -> Real:
    """``eps abs(v)^T abs(A) abs(w)/abs(v^H w)``: how far a relative change eps of all entries moves an eigenvalue."""
    moved = np.sum(np.abs(left) * (np.abs(A) @ np.abs(right)), axis=0)
    return np.asarray(EPS * moved / np.maximum(np.abs(overlap), EPS))


def _repeated(lam: Complex, rounding: Real, candidates: Ints) -> list[Ints]:
    """Runs of eigenvalues that cannot be told apart, singles included."""
    order = candidates[np.lexsort((lam[candidates].imag, np.round(np.abs(lam[candidates]), 300)))]
    groups: list[list[int]] = []
    for i in order:
        home = next((g for g in reversed(groups[-8:]) if _same(lam, rounding, g[-1], int(i))), None)
        if home is None:
            groups.append([int(i)])
        else:
            home.append(int(i))
    return [np.array(g) for g in groups]


def _same(lam: Complex, rounding: Real, i: int, j: int) -> bool:
    if (lam[i].imag == 0) != (lam[j].imag == 0):
        return False
    both_zero = _is_zero(lam[i], rounding[i]) and _is_zero(lam[j], rounding[j])
    known = _ROUNDINGS * (rounding[i] + rounding[j])
    return both_zero or bool(abs(lam[i] - lam[j]) <= min(known, _NEAR * max(abs(lam[i]), abs(lam[j]))))


def _is_zero(value: complex, rounding: float) -> bool:
    return abs(value) <= _ROUNDINGS * rounding


# ---- well-conditioned eigenvalues ----------------------------------------------------------------------------------


def _single_terms(
    A: Real, lam: Complex, left: Complex, right: Complex, kappa: Real, rounding: Real, members: Ints, number: int,
    B: Real, C: Real,
) -> list[Term]:  # fmt: skip
    W = right[:, members]
    if len(members) > 1:
        V: Complex = left[:, members].conj().T
        V = np.asarray(np.linalg.solve(V @ W, V), dtype=np.complex128)
        small = V @ A @ W - np.diag(lam[members])
        if np.linalg.norm(small) > 10 * _ROUNDINGS * np.linalg.norm(rounding[members]):
            return _joint_of_vectors(A, lam[members], W)
        W = W @ rotation(V @ B, C @ W)
    group = number if len(members) > 1 else -1
    return [_single(A, lam[i], W[:, k], float(kappa[i]), float(rounding[i]), group) for k, i in enumerate(members)]


def _single(A: Real, value: complex, w: Complex, kappa: float, rounding: float, group: int) -> Term:
    if _is_zero(value, rounding):
        value = 0.0
    condition, spread = np.array([kappa]), np.array([rounding])
    if value.imag == 0 and np.isreal(value):
        X = _real_direction(w)[:, None]
        block = np.array([[float(np.real(value))]])
    else:
        # The phase that makes real and imaginary parts orthogonal keeps the pair's real basis best conditioned.
        w = w * np.exp(-0.5j * np.angle(np.sum(w * w)))
        X = np.column_stack([w.real, w.imag])
        block = np.array([[value.real, value.imag], [-value.imag, value.real]])
    return Term(
        basis=X, block=block, eigenvalues=np.array([complex(value)]), condition=condition, rounding=spread, group=group
    )


def _real_direction(w: Complex) -> Real:
    """The real unit vector that a complex multiple of it was; its largest entry positive."""
    at = int(np.argmax(np.abs(w)))
    x = (w * (np.abs(w[at]) / w[at])).real
    return np.asarray(x / np.linalg.norm(x))


def _joint_of_vectors(A: Real, lam: Complex, W: Complex) -> list[Term]:
    """A repeated eigenvalue whose vectors do not diagonalise it: one block on their span."""
    both = W if np.all(lam.imag == 0) else np.hstack([W.real, W.imag])
    X = np.linalg.qr(both.real if np.all(lam.imag == 0) else both)[0]
    return [_block_term(X.T @ A @ X, X)]


# ---- ill-conditioned eigenvalues -----------------------------------------------------------------------------------


def _joint_terms(A: Real, lam: Complex) -> list[Term]:
    """Blocks that cover the ill-conditioned eigenvalues ``lam`` (conjugates included)."""
    T, Q = schur(A, output="real")
    select = _nearest_to(lam, eigvals_of(T))
    T, Q = _reorder(T, Q, select)
    k = int(np.count_nonzero(select))
    X, T = Q[:, :k], T[:k, :k]
    out: list[Term] = []
    while len(T):
        g, T, X = _grow(T, X)
        R = _decoupling(T, g)
        own = X[:, :g]
        out.append(_block_term(T[:g, :g], own))
        X, T = own @ R + X[:, g:], T[g:, g:]
        if len(T):
            X, upper = np.linalg.qr(X)
            T, turn = schur(solve_triangular(upper, (upper @ T).T, trans="T").T, output="real")
            X = X @ turn
    return out


def _grow(T: Real, X: Real) -> tuple[int, Real, Real]:
    """Size of the leading block that decouples with a moderate Sylvester solution, after reordering T and X."""
    g = _leading(T)
    while g < len(T) and np.linalg.norm(_decoupling(T, g)) > LARGEST:
        values = eigvals_of(T)
        near = np.abs(values[g:, None] - values[:g]).min(axis=1)
        chosen = g + int(np.argmin(near))
        select = np.arange(len(T)) < g
        select |= np.isclose(values, values[chosen], rtol=1e-14) | np.isclose(values, values[chosen].conj(), rtol=1e-14)
        T, X = _reorder(T, X, select)
        g = max(g + 1, int(np.count_nonzero(select)))
    return min(g, len(T)), T, X


def _decoupling(T: Real, g: int) -> Real:
    """R with ``T_11 R - R T_22 = -T_12``: the columns ``[R; I]`` span the rest's invariant subspace."""
    if g >= len(T):
        return np.zeros((g, 0))
    with np.errstate(all="ignore"):
        try:
            R = solve_sylvester(T[:g, :g], -T[g:, g:], -T[:g, g:])
        except np.linalg.LinAlgError:
            return np.full((g, len(T) - g), 1 / EPS)
    return np.where(np.isfinite(R), np.clip(R, -1 / EPS, 1 / EPS), 1 / EPS)


def _leading(T: Real) -> int:
    return 2 if len(T) > 1 and T[1, 0] != 0 else 1


def eigvals_of(T: Real) -> Complex:
    """Eigenvalues of a quasi-triangular T in the order of its diagonal."""
    out, i = np.zeros(len(T), dtype=complex), 0
    while i < len(T):
        g = _leading(T[i:, i:])
        out[i : i + g] = eigvals(T[i : i + g, i : i + g])
        i += g
    return out


def _nearest_to(wanted: Complex, values: Complex) -> Any:
    """Mask of the ``values`` that the ``wanted`` ones are, each used once; conjugates stay together."""
    select = np.zeros(len(values), dtype=bool)
    for value in wanted:
        distance = np.where(select, np.inf, np.abs(values - value))
        select[int(np.argmin(distance))] = True
    for i in np.flatnonzero(select & (values.imag != 0)):
        select |= np.isclose(values, values[i].conj(), rtol=1e-14, atol=0)
    return select


def _reorder(T: Real, Q: Real, select: Any) -> tuple[Real, Real]:
    out = dtrsen(select.astype(np.int32), T, np.eye(len(T)), job="N")
    return np.asarray(out[0]), np.asarray(Q @ out[1])


def _block_term(block: Real, X: Real) -> Term:
    values, left, right = eig(block, left=True, right=True)
    kappa = 1 / np.maximum(np.abs(np.sum(left.conj() * right, axis=0)), EPS)
    # A change eps moves an eigenvalue by kappa eps, a g-fold defective one by its g-th root.
    size = float(np.linalg.norm(block))
    spread = size * np.minimum(EPS * kappa, (_ROUNDINGS * EPS) ** (1 / len(block)) / _ROUNDINGS)
    upper = np.flatnonzero(values.imag >= 0)
    upper = upper[np.argsort(np.abs(values[upper]), kind="stable")]
    values, kappa, spread = values[upper].astype(complex), kappa[upper], spread[upper]
    if np.all(np.abs(values) <= _ROUNDINGS * spread):
        block, values = _nilpotent(block), np.zeros(len(upper), dtype=complex)
    else:
        # Not left triangular: SciPy's expm divides by the differences of a triangular matrix's diagonal entries.
        turn = np.linalg.qr(np.random.default_rng(0).standard_normal(block.shape))[0]
        block, X = turn.T @ block @ turn, X @ turn
    return Term(basis=X, block=block, eigenvalues=values, condition=kappa, rounding=spread)


def _nilpotent(block: Real) -> Real:
    """The block with its eigenvalues, zero to rounding, made exactly zero where its Schur form shows how."""
    T, Z = schur(block, output="complex")
    if not np.allclose(Z.imag, 0, atol=1e-12):
        return block
    return np.asarray((Z @ np.triu(T, 1) @ Z.conj().T).real)
