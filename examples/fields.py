"""Plates and solids of any size, assembled at once: thermal grids, flow with conduction, hexahedra."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

from modesieve.examples.lines import tridiagonal
from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.model import Damping, Input, Output, StateSpace, Structure, Thermal, Unknowns


def grid_plate(
    nx: int, ny: int, *, sources: list[tuple[int, int]], sensors: list[tuple[int, int]], film: float = 0.0
) -> Thermal:
    """Unit-cell heat plate of nx by ny nodes, insulated edges, five-point conduction, unit capacities.

    sources, sensors: grid points (i, j). film: conductance to ambient at every node of the edge i = 0; with none the
    model integrates. Exact decay rates without film: `grid_plate_rates`.
    """
    K = sp.kron(tridiagonal(nx, 1.0, 1.0), sp.eye_array(ny)) + sp.kron(sp.eye_array(nx), tridiagonal(ny, 1.0, 1.0))
    if film:
        edge = np.zeros(nx * ny)
        edge[:ny] = film
        K = K + sp.diags_array(edge)
    F, C = np.zeros((nx * ny, len(sources))), np.zeros((len(sensors), nx * ny))
    for column, (i, j) in enumerate(sources):
        F[i * ny + j, column] = 1.0
    for line, (i, j) in enumerate(sensors):
        C[line, i * ny + j] = 1.0
    return Thermal(K=sp.csr_array(K), E=sp.eye_array(nx * ny, format="csr"), F=F, C=C, title=f"plate {nx} x {ny}")


def grid_plate_rates(nx: int, ny: int) -> Real:
    """Exact decay rates of the insulated `grid_plate`, ascending: ``4 sin^2(i pi/2nx) + 4 sin^2(j pi/2ny)``."""
    x, y = (4 * np.sin(np.arange(n) * np.pi / (2 * n)) ** 2 for n in (nx, ny))
    return np.sort((x[:, None] + y).ravel())


def flow_plate(nx: int, ny: int, *, peclet: float = 0.5) -> StateSpace:
    """Conduction with an upwind flow along x (non-symmetric), inflow held at 0, one source, one sensor downstream."""
    conduct = sp.kron(tridiagonal(nx, 2.0, 1.0), sp.eye_array(ny)) + sp.kron(
        sp.eye_array(nx), tridiagonal(ny, 1.0, 1.0)
    )
    upwind = sp.diags_array([-np.ones(nx - 1), np.ones(nx)], offsets=[-1, 0], shape=(nx, nx))
    A = -conduct - 2 * peclet * sp.kron(upwind, sp.eye_array(ny))
    B, C = np.zeros((nx * ny, 1)), np.zeros((1, nx * ny))
    B[(nx // 4) * ny + ny // 2] = 1.0
    C[0, (3 * nx // 4) * ny + ny // 2] = 1.0
    return StateSpace(A=sp.csr_array(A), B=B, C=C, title=f"flow plate {nx} x {ny}")


# ---- hexahedra -------------------------------------------------------------------------------------------------------


def solid(
    nx: int,
    ny: int,
    nz: int,
    *,
    size: tuple[float, float, float] = (2.0, 0.4, 0.1),
    E: float = 210e9,
    nu: float = 0.3,
    rho: float = 7850.0,
    clamped: bool = True,
    damping: Damping | None = None,
) -> Structure:
    """A block of nx by ny by nz trilinear hexahedra, its face x = 0 clamped (or free); two forces and three sensors.

    40 x 32 x 20 elements clamped have 83,160 unknowns, 24 x 16 x 10 have 13,464.
    """
    nodes = np.arange((nx + 1) * (ny + 1) * (nz + 1), dtype=np.int64).reshape(nx + 1, ny + 1, nz + 1)
    k, m = hexahedron(tuple(s / n for s, n in zip(size, (nx, ny, nz), strict=True)), E, nu, rho)
    corners: Ints = np.stack(
        [nodes[i : nx + i, j : ny + j, l : nz + l].ravel() for i in (0, 1) for j in (0, 1) for l in (0, 1)], axis=1
    )
    first = (ny + 1) * (nz + 1) if clamped else 0
    K, M = (_assemble(corners, e, nodes.size)[3 * first :, 3 * first :] for e in (k, m))
    n = K.shape[0]
    F, C = np.zeros((n, 2)), np.zeros((3, n))

    def row(i: int, j: int, l: int, axis: int) -> int:
        return int(3 * (nodes[i, j, l] - first) + axis)

    F[row(nx, 0, 0, 2), 0] = F[row(nx, ny, nz, 1), 1] = 1.0
    for line, at in enumerate([(nx, ny, nz, 2), (nx, 0, 0, 1), (nx // 2, ny // 2, nz, 2)]):
        C[line, row(*at)] = 1.0
    xyz = np.stack(
        np.meshgrid(*(np.linspace(0, s, q + 1) for s, q in zip(size, (nx, ny, nz), strict=True)), indexing="ij")
    )
    free = np.arange(first, nodes.size)
    return Structure(
        K=K,
        M=M,
        F=F,
        Cq=C,
        damping=damping or Damping(),
        inputs=(Input(name="corner z", unit="N"), Input(name="corner y", unit="N")),
        outputs=tuple(Output(name=name, unit="m") for name in ("top z", "corner y", "middle z")),
        unknowns=Unknowns(
            node=tuple(np.repeat(free + 1, 3).astype(str).tolist()),
            direction=("x", "y", "z") * len(free),
            xyz=np.repeat(xyz.reshape(3, -1).T[free], 3, axis=0),
        ),
        title=f"solid of {nx} x {ny} x {nz} hexahedra",
    )


def hexahedron(h: tuple[float, ...], E: float, nu: float, rho: float) -> tuple[Real, Real]:
    """Stiffness and consistent mass (24, 24) of one brick with edges h, 2 x 2 x 2 Gauss points."""
    lam, mu = E * nu / (1 + nu) / (1 - 2 * nu), E / 2 / (1 + nu)
    law = np.diag([2 * mu] * 3 + [mu] * 3)
    law[:3, :3] += lam
    signs = np.array([[i, j, l] for i in (-1, 1) for j in (-1, 1) for l in (-1, 1)], dtype=float)
    volume = float(np.prod(h)) / 8
    k, m = np.zeros((24, 24)), np.zeros((24, 24))
    for point in signs / np.sqrt(3):
        factors = 1 + signs * point
        N = np.prod(factors, axis=1) / 8
        slopes = np.stack(
            [signs[:, a] * np.prod(np.delete(factors, a, axis=1), axis=1) / 8 * 2 / h[a] for a in range(3)]
        )
        B = np.zeros((6, 24))
        for a in range(3):
            B[a, a::3] = slopes[a]
        for line, (a, b) in enumerate(((0, 1), (1, 2), (0, 2)), start=3):
            B[line, a::3], B[line, b::3] = slopes[b], slopes[a]
        shape = np.kron(N, np.eye(3))
        k += volume * B.T @ law @ B
        m += volume * rho * shape.T @ shape
    return k, m


def _assemble(corners: Ints, element: Real, nodes: int) -> sp.csr_array:
    unknowns = (3 * corners[:, :, None] + np.arange(3)).reshape(len(corners), 24)
    rows, columns = np.repeat(unknowns, 24, axis=1).ravel(), np.tile(unknowns, (1, 24)).ravel()
    data = np.broadcast_to(element.ravel(), (len(corners), 576)).ravel()
    return sp.csr_array(sp.coo_array((data, (rows, columns)), shape=(3 * nodes, 3 * nodes)))
