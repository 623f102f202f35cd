"""The two demos, in places that do not exist: a lantern mast on a harbour mole, the cold plate of a weather buoy."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sp

from modesieve.examples.frames import frame, structure_of, tube
from modesieve.reduce.arrays import Real
from modesieve.reduce.model import Damping, Input, ModalRatio, Output, Structure, Thermal, UnitSystem, Unknowns
from modesieve.reduce.truncation.records import Statics, Tolerance

HZ = 2 * np.pi


@dataclass(frozen=True, kw_only=True, eq=False)
class Demo:
    """A model with what its user would ask: the band (rad/s), the tolerance, and how dropped statics are held."""

    name: str
    model: Structure | Thermal
    band: tuple[float, float]
    tolerance: Tolerance
    statics: Statics | None = None


# ---- the mast --------------------------------------------------------------------------------------------------------

STOREYS, SIDE, STOREY_HEIGHT = 14, 1.6, 2.2


def mast() -> Demo:
    """The lantern mast of Gull Mole: a square lattice of steel tubes, 30.8 m, with a slender pole and lantern on top.

    The square plan repeats every bending pair exactly. Welded steel, damping ratio 0.4 %.
    """
    nodes, members, thick = _lattice()
    legs, braces = tube(0.114, 0.005), tube(0.060, 0.003)
    body = frame(nodes, np.array(members), [legs if heavy else braces for heavy in thick])
    top = len(nodes) - 1
    lantern = np.zeros(body.M.shape[0])
    lantern[6 * top : 6 * top + 3] = 85.0  # kg
    body = type(body)(nodes=body.nodes, members=body.members, K=body.K, M=body.M + sp.diags_array(lantern))
    deck = 4 * (STOREYS // 2)
    model = structure_of(
        body,
        fixed=[body.row(i, d) for i in range(4) for d in ("x", "y", "z", "rx", "ry", "rz")],
        loads=[
            (body.row(top, "x"), Input(name="wind at lantern", unit="N", amplitude=4.0)),
            (body.row(deck, "y"), Input(name="winch at deck", unit="N", amplitude=60.0)),
        ],
        sensors=[
            (body.row(top, "x"), Output(name="lantern x", unit="m", resolution=1e-6)),
            (body.row(top, "y"), Output(name="lantern y", unit="m", resolution=1e-6)),
            (body.row(deck + 2, "x"), Output(name="deck x", unit="m", resolution=1e-6)),
        ],
        damping=Damping(base=ModalRatio(ratio=0.004)),
        title="lantern mast, Gull Mole",
    )
    units = UnitSystem(length="m", mass="kg", time="s")
    model = _with_units(model, units)
    return Demo(name="mast", model=model, band=(0.2 * HZ, 15 * HZ), tolerance=Tolerance(value=0.05))


def _with_units(model: Structure, units: UnitSystem) -> Structure:
    from dataclasses import replace

    return replace(model, units=units)


def _lattice() -> tuple[Real, list[tuple[int, int]], list[bool]]:
    """Nodes storey by storey, members, and which of them are legs (thick)."""
    half = SIDE / 2
    ring = [(-half, -half), (half, -half), (half, half), (-half, half)]
    nodes = [(x, y, STOREY_HEIGHT * s) for s in range(STOREYS + 1) for x, y in ring]
    members, thick = [], []

    def add(a: int, b: int, heavy: bool) -> None:
        members.append((a, b))
        thick.append(heavy)

    for s in range(STOREYS):
        for c in range(4):
            below, above, beside = 4 * s + c, 4 * (s + 1) + c, 4 * (s + 1) + (c + 1) % 4
            add(below, above, True)
            add(above, beside, False)
            add(below, beside, False)  # the same hand on every face: a quarter turn maps the mast onto itself
    height = STOREY_HEIGHT * STOREYS
    foot = len(nodes)
    nodes += [(0.0, 0.0, height + 0.9 * i) for i in range(6)]
    for c in range(4):
        add(4 * STOREYS + c, foot, True)
    for i in range(5):
        add(foot + i, foot + i + 1, False)
    return np.array(nodes), members, thick


# ---- the cold plate --------------------------------------------------------------------------------------------------


def cold_plate() -> Demo:
    """The cold plate of Petrel Buoy: 0.30 m by 0.20 m of 6 mm aluminium, five sources, six sensors, sea water behind.

    48 by 32 bilinear elements, conduction in the plane, a film on the whole back towards water at its own temperature.
    """
    nx, ny, (lx, ly), t = 48, 32, (0.30, 0.20), 0.006
    conductivity, heat, film = 167.0, 2700.0 * 896.0, 95.0
    hx, hy = lx / nx, ly / ny
    Kx, Mx = _line(nx, hx)
    Ky, My = _line(ny, hy)
    area = sp.kron(Mx, My)
    K = t * conductivity * (sp.kron(Kx, My) + sp.kron(Mx, Ky)) + film * area
    E = t * heat * area
    mesh = np.meshgrid(np.linspace(0, lx, nx + 1), np.linspace(0, ly, ny + 1), indexing="ij")
    x, y = (part.ravel() for part in mesh)
    weight = np.asarray(area.sum(axis=1)).ravel()
    patches = {
        "radio": (0.05, 0.05, 0.03, 12.0),
        "processor": (0.15, 0.11, 0.02, 18.0),
        "sonar driver": (0.25, 0.05, 0.03, 9.0),
        "camera": (0.06, 0.15, 0.02, 5.0),
        "regulator": (0.25, 0.16, 0.02, 7.0),
    }
    F = np.column_stack([_patch(x, y, weight, *where[:3]) for where in patches.values()] + [film * weight])
    sensors = {**{k: v[:2] for k, v in patches.items()}, "rim": (0.0, 0.1)}
    C = np.zeros((len(sensors), x.size))
    for line, (u, v) in enumerate(sensors.values()):
        C[line, int(np.argmin((x - u) ** 2 + (y - v) ** 2))] = 1.0
    model = Thermal(
        K=sp.csr_array(K),
        E=sp.csr_array(E),
        F=F,
        C=C,
        inputs=(
            *(Input(name=name, unit="W", amplitude=where[3]) for name, where in patches.items()),
            Input(name="sea water", unit="K", amplitude=8.0),
        ),
        outputs=tuple(Output(name=f"T {name}", unit="K", resolution=0.1) for name in sensors),
        units=UnitSystem(length="m", mass="kg", time="s", temperature="K"),
        unknowns=Unknowns(node=tuple(str(i + 1) for i in range(x.size)), xyz=np.column_stack([x, y, np.zeros(x.size)])),
        title="cold plate, Petrel Buoy",
    )
    return Demo(
        name="cold-plate",
        model=model,
        band=(1 / 3600.0, 1 / 5.0),
        tolerance=Tolerance(value=0.5, of="absolute", unit="K"),
        statics="vectors",
    )


def _line(n: int, h: float) -> tuple[sp.csr_array, sp.csr_array]:
    """Stiffness and mass of n linear elements of length h."""
    ends = np.ones(n + 1)
    ends[1:-1] = 2.0
    off = np.ones(n)
    K = sp.diags_array([-off, ends, -off], offsets=[-1, 0, 1]) / h
    M = sp.diags_array([off, 2 * ends, off], offsets=[-1, 0, 1]) * (h / 6)
    return sp.csr_array(K), sp.csr_array(M)


def _patch(x: Real, y: Real, weight: Real, u: float, v: float, size: float) -> Real:
    """One watt spread evenly over a square patch of the plate."""
    inside = (np.abs(x - u) <= size / 2) & (np.abs(y - v) <= size / 2)
    return np.where(inside, weight, 0.0) / weight[inside].sum()
