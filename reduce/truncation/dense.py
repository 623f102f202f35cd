"""Models whose every mode is known: bounds by sums over the dropped terms, and the exact norm of the error system.

Per entry, conjugate poles counted apart, ``sum abs(R_i)/abs(Re lambda_i)`` bounds both the H-infinity norm and the
peak-to-peak gain. Combining conjugates first is sharper for the H-infinity norm and wrong for the peak-to-peak gain.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import h_infinity_norm
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem


@dataclass(frozen=True, kw_only=True, eq=False)
class SumBound:
    """Bounds of what the dropped terms do. peak_to_peak (p, m): every entry, conjugates apart, of the peak-to-peak gain
    and of the H-infinity norm; h_infinity: of the largest singular value, conjugates combined."""

    peak_to_peak: Real
    h_infinity: float


def sum_bound(system: SmallSystem, dropped: Ints) -> SumBound:
    """The sum bounds over the terms ``dropped`` of a system that holds every mode (triangle inequality on partial
    fractions; e.g. Antoulas, Approximation of Large-Scale Dynamical Systems, SIAM 2005, chapter 9).

    Raises ChoiceError for a dropped term that is not asymptotically stable.
    """
    peak = np.zeros((system.p, system.m))
    total = 0.0
    for term in np.asarray(dropped, dtype=int):
        part = one_term(system, int(term))
        peak += _apart(part)
        total += h_infinity_norm(part)[0]
    return SumBound(peak_to_peak=peak, h_infinity=float(total))


def one_term(system: SmallSystem, term: int) -> FirstOrderModal:
    """One term as a system of its own, without the feedthrough that belongs to no term."""
    only = system.select(np.array([term]))
    A, B, C, D = only.state_space()
    through = D - system.D - (system.X if isinstance(system, SecondOrderModal) else 0.0)
    return FirstOrderModal(blocks=(A,), B=B, C=C, D=through)


def _apart(part: FirstOrderModal) -> Real:
    """``sum abs(R_i)/abs(Re lambda_i) + abs(D)`` of one block, every eigenvalue for itself."""
    A = part.blocks[0]
    value, vector = np.linalg.eig(A)
    if np.any(value.real >= 0):
        raise ChoiceError(
            "a dropped mode is not stable", expected="Re lambda < 0", got=f"Re lambda = {value.real.max():.3g} 1/s"
        )
    if np.linalg.cond(vector) > 1e8:
        # A defective block has no partial fractions: its impulse response is integrated instead.
        return _integrated(part)
    left = np.linalg.solve(vector, part.B.astype(complex))
    residues = np.abs((part.C @ vector)[:, :, None] * left[None, :, :]) / np.abs(value.real)[None, :, None]
    return np.asarray(residues.sum(axis=1) + np.abs(part.D))


def _integrated(part: FirstOrderModal) -> Real:
    """Entrywise ``integral of abs(C e^(A t) B)``, by Cauchy-Schwarz: ``sqrt(c^T X c) sqrt(b^T Y b)``-free bound through
    weighted energy, ``integral abs(g) <= sqrt(1/(2 a)) sqrt(integral e^(2 a t) g^2)`` with a half the slowest decay."""
    from scipy.linalg import solve_continuous_lyapunov

    A = part.blocks[0]
    a = -0.5 * float(np.linalg.eigvals(A).real.max())
    out = np.abs(part.D)
    for l in range(part.m):
        b = part.B[:, [l]]
        P = solve_continuous_lyapunov(A + a * np.eye(len(A)), -b @ b.T)
        energy = np.maximum(np.einsum("ki,ij,kj->k", part.C, P, part.C), 0.0)
        out[:, l] += np.sqrt(energy / (2 * a))
    return out


def error_system(full: SmallSystem, small: SmallSystem) -> FirstOrderModal:
    """``G - R`` in real block form; terms of both that agree in every number cancel."""
    mine, theirs = _blocks(full), _blocks(small)
    keep = list(range(len(theirs)))
    left = []
    for block in mine:
        twin = next((i for i in keep if _same(block, theirs[i])), None)
        if twin is None:
            left.append(block)
        else:
            keep.remove(twin)
    right = [(theirs[i][0], theirs[i][1], -theirs[i][2]) for i in keep]
    D = full.state_space()[3] - small.state_space()[3]
    every = [*left, *right]
    m, p = full.m, full.p
    return FirstOrderModal(
        blocks=tuple(b[0] for b in every),
        B=np.vstack([np.zeros((0, m)), *(b[1] for b in every)]),
        C=np.hstack([np.zeros((p, 0)), *(b[2] for b in every)]),
        D=D,
    )


def error_norm(full: SmallSystem, small: SmallSystem, *, tolerance: float = 1e-10) -> tuple[float, float]:
    """Exact H-infinity norm of ``G - R`` and where it is reached (rad/s), by the level-set method.

    Raises ChoiceError where a term that does not cancel is not stable. A loss factor counts as zeta = eta/2.
    """
    return h_infinity_norm(error_system(full, small), tolerance=tolerance)


def _blocks(system: SmallSystem) -> list[tuple[Real, Real, Real]]:
    A, B, C, _ = system.state_space()
    sizes = [2] * system.terms if isinstance(system, SecondOrderModal) else [len(a) for a in system.blocks]
    ends = np.cumsum([0, *sizes])
    spans = [slice(int(i), int(j)) for i, j in pairwise(ends)]
    return [(A[s, s], B[s], C[:, s]) for s in spans]


def _same(one: tuple[Real, Real, Real], other: tuple[Real, Real, Real]) -> bool:
    return all(a.shape == b.shape and np.array_equal(a, b) for a, b in zip(one, other, strict=True))
