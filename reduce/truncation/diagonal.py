"""Small symmetric systems seen as one list of real terms, whatever their order in time.

``G = through + sum_i c_i(w) b_i^T / (a_i(w) x_i + b_i(w))``: structures have x = omega^2, thermal models x = lambda.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem


@dataclass(frozen=True, kw_only=True, eq=False)
class Diagonal:
    """x (k,); load rows b (k, m); output columns cq, cv, ca (p, k); viscous d (k,), loss eta (k,); D, X (p, m)."""

    order: int
    x: Real
    b: Real
    cq: Real
    cv: Real
    ca: Real
    d: Real
    eta: Real
    D: Real
    X: Real
    eta_X: float = 0.0

    @property
    def terms(self) -> int:
        return len(self.x)

    @property
    def outputs(self) -> Real:
        """All output rows of every kind stacked, (3 p, k)."""
        return np.vstack([self.cq, self.cv, self.ca])

    def select(self, keep: Ints) -> Diagonal:
        keep = np.asarray(keep, dtype=int)
        cut: dict[str, Any] = {name: getattr(self, name)[keep] for name in ("x", "b", "d", "eta")}
        cut |= {name: getattr(self, name)[:, keep] for name in ("cq", "cv", "ca")}
        return replace(self, **cut)

    def join(self, other: Diagonal) -> Diagonal:
        """The terms of both; what belongs to no term is added."""
        stacked: dict[str, Any] = {
            n: np.concatenate([getattr(self, n), getattr(other, n)]) for n in ("x", "b", "d", "eta")
        }
        beside: dict[str, Any] = {n: np.hstack([getattr(self, n), getattr(other, n)]) for n in ("cq", "cv", "ca")}
        return replace(self, **stacked, **beside, D=self.D + other.D, X=self.X + other.X)

    def system(self) -> SmallSystem:
        """As a small system; a static remainder of a first-order system is feedthrough."""
        if self.order == 1:
            blocks = tuple(np.array([[-x]]) for x in self.x)
            return FirstOrderModal(blocks=blocks, B=self.b, C=self.cq, D=self.D + self.X)
        names = ("x", "d", "eta", "b", "cq", "cv", "ca", "D", "X", "eta_X")
        return SecondOrderModal(**{name: getattr(self, name) for name in names})


def is_diagonal(system: SmallSystem) -> bool:
    """True when every term is one real mode, without a feedthrough of its own."""
    if isinstance(system, SecondOrderModal):
        return True
    return all(len(a) == 1 for a in system.blocks) and (system.direct is None or not np.any(system.direct))


def diagonal(system: SmallSystem) -> Diagonal:
    """The list of real terms of a symmetric small system (`is_diagonal`)."""
    if isinstance(system, SecondOrderModal):
        names = ("x", "b", "cq", "cv", "ca", "d", "eta", "D", "X", "eta_X")
        return Diagonal(order=2, **{name: getattr(system, name) for name in names})
    x = np.array([-a[0, 0] for a in system.blocks])
    none, zero = np.zeros_like(system.C), np.zeros_like(x)
    D = system.D
    return Diagonal(order=1, x=x, b=system.B, cq=system.C, cv=none, ca=none, d=zero, eta=zero, D=D, X=np.zeros_like(D))
