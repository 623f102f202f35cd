"""What a solve leaves behind for later steps of the same run: the shifted factor and the Krylov vectors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from modesieve.reduce.arrays import Real
from modesieve.reduce.linalg.factor import Factor


@dataclass(frozen=True, kw_only=True, eq=False)
class Workspace:
    """A live factor of ``K - sigma M``, and M-orthonormal Krylov vectors beyond the modes (n, q), or None."""

    sigma: float
    factor: Factor
    basis: Real | None = None

    def solve(self, B: Any) -> Any:
        """``(K - sigma M)^-1 B``."""
        return self.factor.solve(B)
