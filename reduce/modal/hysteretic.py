"""Modes with an imaginary stiffness: ``(lambda^2 M + lambda D + K + j H) phi = 0`` for positive frequencies.

The response to ``w > 0`` is a sum over all eigenvalues of this complex pencil. A real system in time needs conjugate
pairs: the eigenvalues above the real axis with their conjugates, and the real part of those that belong to real poles.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import eig

from modesieve.reduce.arrays import Real
from modesieve.reduce.modal.blockform import Term
from modesieve.reduce.modal.secondorder import Linear


@dataclass(frozen=True, kw_only=True, eq=False)
class Hysteretic:
    """Terms in ascending abs(eigenvalue), with B (r, m) and displacements Q (n, r) in their real block coordinates."""

    terms: tuple[Term, ...]
    B: Real
    Q: Real


def hysteretic_form(linear: Linear, oscillating: int) -> Hysteretic:
    """Real terms of the complex system; oscillating: number of pairs of the same structure without H."""
    value, vector = eig(linear.A)
    inverse = np.linalg.inv(vector)
    kappa = np.linalg.norm(vector, axis=0) * np.linalg.norm(inverse, axis=1)
    # By angle: upper half plane first, their mirror images last, what is real without H in between.
    order = np.argsort(-value.imag / np.maximum(np.abs(value), 1e-300), kind="stable")
    chosen = order[: len(order) - oscillating]
    chosen = chosen[np.argsort(np.abs(value[chosen]), kind="stable")]
    pair = np.isin(chosen, order[:oscillating])
    terms, rows, columns = [], [], []
    for i, swings in zip(chosen, pair, strict=True):
        b, phi = inverse[i] @ linear.B, linear.Q @ vector[:, i]
        lam = complex(value[i]) if swings else complex(value[i].real)
        if swings:
            # c b/(s - lambda) and its conjugate: phi = q_1 + j q_2, b = (b_1 - j b_2)/2.
            rows += [2 * b.real, -2 * b.imag]
            columns += [phi.real, phi.imag]
            block = np.array([[lam.real, lam.imag], [-lam.imag, lam.real]])
        else:
            turn = np.exp(-1j * np.angle(phi[int(np.argmax(np.abs(phi)))]))
            rows.append((b / turn).real)
            columns.append((phi * turn).real)
            block = np.array([[lam.real]])
        terms.append(
            Term(
                basis=np.zeros((0, len(block))),
                block=block,
                eigenvalues=np.array([lam]),
                condition=np.array([kappa[i]]),
                rounding=np.array([np.finfo(float).eps * kappa[i] * np.linalg.norm(linear.A)]),
            )
        )
    return Hysteretic(terms=tuple(terms), B=np.array(rows), Q=np.column_stack(columns))
