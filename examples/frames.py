"""Space frames of straight beams: six unknowns a node, Timoshenko or Euler-Bernoulli elements, consistent mass.

Element matrices after Przemieniecki, Theory of Matrix Structural Analysis, 1968, sections 5.6 and 11.3-11.4.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.model import Damping, Input, Output, Structure, Unknowns

DIRECTIONS = ("x", "y", "z", "rx", "ry", "rz")


@dataclass(frozen=True, kw_only=True)
class Section:
    """A beam's cross section and material, SI units. shear: shear area over area, 0 for a shear-rigid beam."""

    E: float
    G: float
    rho: float
    area: float
    Iy: float
    Iz: float
    J: float
    shear: float = 0.0


def tube(diameter: float, wall: float, *, E: float = 210e9, nu: float = 0.3, rho: float = 7850.0) -> Section:
    """A round tube (m); steel by default."""
    inner = diameter - 2 * wall
    area = np.pi / 4 * (diameter**2 - inner**2)
    inertia = np.pi / 64 * (diameter**4 - inner**4)
    return Section(E=E, G=E / 2 / (1 + nu), rho=rho, area=area, Iy=inertia, Iz=inertia, J=2 * inertia, shear=0.5)


@dataclass(frozen=True, kw_only=True, eq=False)
class Frame:
    """nodes (N, 3) in m; members (e, 2) node indices; K and M (6N, 6N), unknowns node by node."""

    nodes: Real
    members: Ints
    K: sp.csr_array
    M: sp.csr_array

    def row(self, node: int, direction: str) -> int:
        return 6 * node + DIRECTIONS.index(direction)


def frame(nodes: Real, members: Ints, sections: list[Section]) -> Frame:
    """Assemble beams (one section a member) into a frame without supports."""
    nodes, members = np.asarray(nodes, dtype=float), np.asarray(members, dtype=int)
    rows, columns, k_data, m_data = [], [], [], []
    for (a, b), section in zip(members, sections, strict=True):
        k, m = beam(nodes[a], nodes[b], section)
        at = np.concatenate([6 * a + np.arange(6), 6 * b + np.arange(6)])
        rows.append(np.repeat(at, 12))
        columns.append(np.tile(at, 12))
        k_data.append(k.ravel())
        m_data.append(m.ravel())
    index, shape = (np.concatenate(rows), np.concatenate(columns)), (6 * len(nodes),) * 2
    K = sp.csr_array(sp.coo_array((np.concatenate(k_data), index), shape=shape))
    M = sp.csr_array(sp.coo_array((np.concatenate(m_data), index), shape=shape))
    return Frame(nodes=nodes, members=members, K=(K + K.T) / 2, M=(M + M.T) / 2)


def beam(a: Real, b: Real, s: Section) -> tuple[Real, Real]:
    """Stiffness and consistent mass (12, 12) of one beam in global axes."""
    axis = b - a
    L = float(np.linalg.norm(axis))
    R = np.kron(np.eye(4), _local_axes(axis / L))
    k, m = np.zeros((12, 12)), np.zeros((12, 12))
    _bar(k, m, (0, 6), s.E * s.area / L, s.rho * s.area * L / 6)
    _bar(k, m, (3, 9), s.G * s.J / L, s.rho * (s.Iy + s.Iz) * L / 6)
    _bending(k, m, (1, 5, 7, 11), s, s.Iz, L, 1.0)
    _bending(k, m, (2, 4, 8, 10), s, s.Iy, L, -1.0)
    return R.T @ k @ R, R.T @ m @ R


def _local_axes(x: Real) -> Real:
    """Rows: the beam's axis and two normals; vertical beams take global y as reference."""
    up = np.array([0.0, 0.0, 1.0]) if abs(x[2]) < 0.99 else np.array([0.0, 1.0, 0.0])
    y = np.cross(up, x)
    y /= np.linalg.norm(y)
    return np.vstack([x, y, np.cross(x, y)])


def _bar(k: Real, m: Real, at: tuple[int, int], stiff: float, mass: float) -> None:
    k[np.ix_(at, at)] += stiff * np.array([[1.0, -1.0], [-1.0, 1.0]])
    m[np.ix_(at, at)] += mass * np.array([[2.0, 1.0], [1.0, 2.0]])


def _bending(k: Real, m: Real, at: tuple[int, ...], s: Section, I: float, L: float, sign: float) -> None:
    """Timoshenko bending in one plane; phi = 12 E I/(G A_s L^2)."""
    phi = 12 * s.E * I / (s.G * s.shear * s.area * L**2) if s.shear > 0 else 0.0
    T = np.diag([1.0, sign, 1.0, sign])
    stiff = np.array(
        [
            [12, 6 * L, -12, 6 * L],
            [6 * L, (4 + phi) * L**2, -6 * L, (2 - phi) * L**2],
            [-12, -6 * L, 12, -6 * L],
            [6 * L, (2 - phi) * L**2, -6 * L, (4 + phi) * L**2],
        ]
    )
    k[np.ix_(at, at)] += s.E * I / (L**3 * (1 + phi)) * (T @ stiff @ T)
    m[np.ix_(at, at)] += T @ (_translation(s, L, phi) + _rotation(s, I, L, phi)) @ T


def _translation(s: Section, L: float, p: float) -> Real:
    a = 13 / 35 + 7 * p / 10 + p**2 / 3
    b = 9 / 70 + 3 * p / 10 + p**2 / 6
    c = (11 / 210 + 11 * p / 120 + p**2 / 24) * L
    d = (13 / 420 + 3 * p / 40 + p**2 / 24) * L
    e = (1 / 105 + p / 60 + p**2 / 120) * L**2
    f = (1 / 140 + p / 60 + p**2 / 120) * L**2
    M = np.array([[a, c, b, -d], [c, e, d, -f], [b, d, a, -c], [-d, -f, -c, e]])
    return s.rho * s.area * L / (1 + p) ** 2 * M


def _rotation(s: Section, I: float, L: float, p: float) -> Real:
    a, b = 6 / 5, (1 / 10 - p / 2) * L
    e = (2 / 15 + p / 6 + p**2 / 3) * L**2
    f = (-1 / 30 - p / 6 + p**2 / 6) * L**2
    M = np.array([[a, b, -a, b], [b, e, -b, f], [-a, -b, a, -b], [b, f, -b, e]])
    return s.rho * I / (L * (1 + p) ** 2) * M


def structure_of(
    body: Frame,
    *,
    fixed: list[int],
    loads: list[tuple[int, Input]],
    sensors: list[tuple[int, Output]],
    damping: Damping,
    title: str,
) -> Structure:
    """A frame with the unknowns ``fixed`` removed, unit loads and displacement sensors at global rows."""
    keep = np.setdiff1d(np.arange(body.K.shape[0]), fixed)
    place = np.full(body.K.shape[0], -1)
    place[keep] = np.arange(len(keep))
    F, C = np.zeros((len(keep), len(loads))), np.zeros((len(sensors), len(keep)))
    for column, (row, _) in enumerate(loads):
        F[place[row], column] = 1.0
    for line, (row, _) in enumerate(sensors):
        C[line, place[row]] = 1.0
    return Structure(
        K=body.K[keep][:, keep],
        M=body.M[keep][:, keep],
        F=F,
        Cq=C,
        damping=damping,
        inputs=tuple(channel for _, channel in loads),
        outputs=tuple(channel for _, channel in sensors),
        unknowns=Unknowns(
            node=tuple(str(r // 6 + 1) for r in keep),
            direction=tuple(DIRECTIONS[r % 6] for r in keep),
            xyz=body.nodes[keep // 6],
        ),
        title=title,
    )


def straight_beam(
    elements: int, length: float, section: Section, *, supports: str = "clamped-free", damping: Damping | None = None
) -> Structure:
    """A beam along x in the x-y plane (v and rotation only), pushed and read at its end, or middle if that is held.

    supports: "clamped-free", "clamped-clamped", "clamped-pinned", "pinned-pinned" or "free-free".
    """
    nodes = np.column_stack([np.linspace(0, length, elements + 1), np.zeros((elements + 1, 2))])
    body = frame(nodes, np.column_stack([np.arange(elements), np.arange(1, elements + 1)]), [section] * elements)
    fixed = [body.row(i, d) for i in range(elements + 1) for d in ("x", "z", "rx", "ry")]
    for node, support in zip((0, elements), supports.split("-"), strict=True):
        fixed += [body.row(node, d) for d in {"clamped": ("y", "rz"), "pinned": ("y",), "free": ()}[support]]
    at = body.row(elements if supports.endswith("free") else elements // 2, "y")
    return structure_of(
        body,
        fixed=fixed,
        loads=[(at, Input(name="push", unit="N"))],
        sensors=[(at, Output(name="deflection", unit="m"))],
        damping=damping or Damping(),
        title=f"{supports} beam",
    )
