"""Large test bodies: a solid of trilinear hexahedra, a thermal plate, a plate with flow and conduction."""

from __future__ import annotations

from itertools import product
from typing import Any

import numpy as np
import scipy.sparse as sp

YOUNG, POISSON, DENSITY = 210e9, 0.3, 7850.0


def solid(
    nx: int, ny: int, nz: int, *, size: tuple[float, float, float] = (2.0, 0.4, 0.1), clamped: bool = True
) -> tuple[Any, Any, Any]:
    """K (N/m), M (kg) and node numbers of a steel block of nx x ny x nz elements, clamped at x = 0 or free."""
    h = np.array(size) / np.array([nx, ny, nz])
    Ke, Me = _hexahedron(h)
    shape = (nx + 1, ny + 1, nz + 1)
    number = np.arange(np.prod(shape)).reshape(shape)
    corners = [(i, j, k) for i, j, k in product((0, 1), repeat=3)]
    nodes = np.stack([number[i : i + nx, j : j + ny, k : k + nz].ravel() for i, j, k in corners], axis=1)
    dof = (3 * nodes[:, :, None] + np.arange(3)).reshape(len(nodes), 24)
    K, M = (_assemble(dof, A, 3 * number.size) for A in (Ke, Me))
    if clamped:
        free = np.arange(3 * shape[1] * shape[2], K.shape[0])
        K, M = K[free][:, free], M[free][:, free]
    return sp.csr_array(K), sp.csr_array(M), np.repeat(np.arange(K.shape[0] // 3), 3)


def plate(n: int, *, conductance: float = 1.0, loss: float = 1e-4) -> tuple[Any, Any]:
    """Conductance K (W/K) and capacity E (J/K) of an n x n thermal plate with a small loss to the surroundings."""
    L = _laplacian(n)
    identity = sp.eye_array(n)
    K = conductance * (sp.kron(L, identity) + sp.kron(identity, L)) + loss * sp.eye_array(n * n)
    return sp.csr_array(K), sp.csr_array(sp.eye_array(n * n))


def flow_plate(n: int, *, speed: float = 0.3, loss: float = 1e-4) -> tuple[Any, Any]:
    """A (non-symmetric: conduction and upwind flow along x) and E of ``E x' = A x``, n x n points."""
    K, E = plate(n, loss=loss)
    upwind = sp.diags_array([np.ones(n), -np.ones(n - 1)], offsets=[0, -1])
    return sp.csr_array(-K - speed * sp.kron(upwind, sp.eye_array(n))), E


def _laplacian(n: int) -> Any:
    d = 2 * np.ones(n)
    d[0] = d[-1] = 1
    return sp.diags_array([-np.ones(n - 1), d, -np.ones(n - 1)], offsets=[-1, 0, 1])


def _assemble(dof: Any, element: Any, n: int) -> Any:
    rows = np.repeat(dof, 24, axis=1).ravel()
    columns = np.tile(dof, (1, 24)).ravel()
    return sp.coo_array((np.tile(element.ravel(), len(dof)), (rows, columns)), shape=(n, n)).tocsr()


def _hexahedron(h: Any) -> tuple[Any, Any]:
    """Element stiffness and consistent mass of a brick with edges h, 2 x 2 x 2 Gauss points."""
    lam = YOUNG * POISSON / ((1 + POISSON) * (1 - 2 * POISSON))
    mu = YOUNG / (2 * (1 + POISSON))
    D = np.zeros((6, 6))
    D[:3, :3] = lam
    D[np.arange(3), np.arange(3)] += 2 * mu
    D[np.arange(3, 6), np.arange(3, 6)] = mu
    signs = np.array(list(product((-1.0, 1.0), repeat=3)))
    Ke, Me, volume = np.zeros((24, 24)), np.zeros((24, 24)), np.prod(h) / 8
    for point in signs / np.sqrt(3):
        terms = 1 + signs * point
        N = terms.prod(axis=1) / 8
        dN = np.stack([signs[:, a] * terms[:, (a + 1) % 3] * terms[:, (a + 2) % 3] / 8 * 2 / h[a] for a in range(3)])
        B = np.zeros((6, 24))
        for a in range(3):
            B[a, a::3] = dN[a]
        for row, (a, b) in zip((3, 4, 5), ((0, 1), (1, 2), (0, 2)), strict=True):
            B[row, a::3], B[row, b::3] = dN[b], dN[a]
        Nm = np.kron(N, np.eye(3))
        Ke += B.T @ D @ B * volume
        Me += DENSITY * Nm.T @ Nm * volume
    return Ke, Me
