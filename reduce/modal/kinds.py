"""Which modes are never dropped, and which belong together."""

from __future__ import annotations

import numpy as np

from modesieve.reduce.arrays import Real, Sparse

EPS = float(np.finfo(float).eps)
#: An eigenvalue is zero when it is below this many roundings of its own quadratic form.
ROUNDINGS = 1e3
#: Relative distance of neighbours in one cluster: discretised symmetry repeats eigenvalues to about 1e-10.
SAME = 1e-8
#: A negative eigenvalue this small against the stiffness entries is a rigid body exported with few digits.
FEW_DIGITS = 1e-5


def rounding_of(K: Sparse, vectors: Real) -> Real:
    """Rounding level of every eigenvalue: ``eps abs(phi)^T abs(K) abs(phi)`` for M-orthonormal phi, shape (k,)."""
    size = np.abs(vectors)
    return EPS * np.einsum("ij,ij->j", size, abs(K) @ size)


def always_kept(x: Real, rounding: Real, zero_name: str) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Per mode the reason it is always kept ("" if none), and warnings.

    zero_name: "rigid body" or "integrating" for eigenvalues that are zero to rounding; below zero: "unstable", unless
    the size shows a zero spoilt by a stiffness written with too few digits.
    """
    reasons, warnings = [], []
    for value, level in zip(x, rounding, strict=True):
        few = value < 0 and abs(value) <= FEW_DIGITS / EPS * level
        if abs(value) <= ROUNDINGS * level or few:
            reasons.append(zero_name)
        else:
            reasons.append("unstable" if value < 0 else "")
        if few and abs(value) > ROUNDINGS * level:
            warnings.append(_few_digits(value, zero_name))
    return tuple(reasons), tuple(warnings)


def _few_digits(value: float, name: str) -> str:
    hz = np.sqrt(abs(value)) / (2 * np.pi)
    return (
        f"a {name} mode came out at {hz:.3g} Hz below zero: the stiffness seems to be written with too few digits; "
        "export it again with at least 15 significant digits"
    )


def groups(x: Real, rounding: Real) -> list[list[int]]:
    """Indices of neighbours (ascending x) that are one eigenvalue to working precision, groups of two and more."""
    out: list[list[int]] = []
    current = [0] if len(x) else []
    for i in range(1, len(x)):
        near = abs(x[i] - x[i - 1]) <= SAME * max(abs(x[i]), abs(x[i - 1])) + 50 * max(rounding[i], rounding[i - 1])
        if near:
            current.append(i)
            continue
        out.append(current)
        current = [i]
    out.append(current)
    return [g for g in out if len(g) > 1]


def fewest_coupled(b: Real, c: Real) -> tuple[Real, int, int]:
    """Rotation U (g, g) of a repeated eigenvalue's vectors, and the numbers of controllable and of coupled ones.

    b (g, m) and c (p, g), weighted. After ``b <- U^T b``, ``c <- c U`` only the first ``rank(c b)`` members are both
    reached and seen; the controllable ones come first, the rest have b = 0.
    """
    Ub, sb, _ = np.linalg.svd(b, full_matrices=True)
    rank_b = _rank(sb)
    _, sc, Wt = np.linalg.svd(c @ Ub[:, :rank_b], full_matrices=True)
    scale = float(np.linalg.norm(c, 2)) if c.size else 0.0
    U = np.hstack([Ub[:, :rank_b] @ Wt.T, Ub[:, rank_b:]]) if rank_b else Ub
    return U, rank_b, _rank(sc, scale)


def _rank(s: Real, scale: float | None = None) -> int:
    top = (s[0] if len(s) else 0.0) if scale is None else scale
    return int(np.count_nonzero(s > 1e-9 * top)) if top > 0 else 0
