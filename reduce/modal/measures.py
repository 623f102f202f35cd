"""The measures, each one value per term (theory: modal cost, Skelton 1980; peaks, Litz 1979 and Varga 1995)."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.modal.blockgain import Block
from modesieve.reduce.modal.gains import Gains, gains
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.response.small import FirstOrderModal

MEASURES: dict[str, str] = {
    "decay": "time constant 1/-Re lambda, longest first: what is still alive after t",
    "coupling": "norm(c) norm(b): controllable and observable at all",
    "peak-share": "largest gain over all frequencies",
    "band-share": "largest gain in the band",
    "static-share": "gain at frequency 0",
    "energy-share": "squared H2 norm: random loads, transients",
    "balanced-gain": "approximate Hankel singular value: lightly damped, well separated modes",
    "effective-mass-x": "effective modal mass, base motion in x",
    "effective-mass-y": "effective modal mass, base motion in y",
    "effective-mass-z": "effective modal mass, base motion in z",
}


@dataclass(frozen=True, kw_only=True, eq=False)
class Scores:
    """Values (k,) per mode, nan where undefined; reason: why any is undefined, "" if none is."""

    values: Real
    reason: str = ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Table:
    """What all measures are made from."""

    modes: Modes
    gains: Gains
    blocks: dict[int, Block]
    band: tuple[float, float]

    def spread(self, per_term: Real, of_block: Callable[[Block], float]) -> Real:
        """Values per term, blocks filled in, as values per mode."""
        out = np.array(per_term, dtype=float)
        for term, block in self.blocks.items():
            out[term] = of_block(block)
        return np.asarray(out[self.modes.term])


def table_of(modes: Modes, band: tuple[float, float]) -> Table:
    """Couplings of every term, weighted."""
    g = gains(modes.system, modes.origin)
    blocks = {}
    if isinstance(modes.system, FirstOrderModal):
        a, r = modes.origin.amplitudes, modes.origin.resolutions[:, None]
        for term in g.blocks:
            at = modes.system.states_of(int(term))
            B, C = modes.system.B[at] * a, modes.system.C[:, at] / r
            D = 0.0 if modes.system.direct is None else modes.system.direct[int(term)] * a / r
            blocks[int(term)] = Block(A=modes.system.blocks[int(term)], B=B, C=C, D=D)
    return Table(modes=modes, gains=g, blocks=blocks, band=band)


def score(name: str, table: Table) -> Scores:
    """One measure by name (a key of MEASURES)."""
    match name:
        case "decay":
            return _decay(table)
        case "coupling":
            return Scores(values=table.spread(table.gains.size, lambda block: block.size))
        case "peak-share":
            return _finite(table.spread(table.gains.supremum(0.0, np.inf), lambda b: b.supremum(0.0, np.inf)), _PEAK)
        case "band-share":
            low, high = table.band
            return _finite(table.spread(table.gains.supremum(low, high), lambda b: b.supremum(low, high)), _BAND)
        case "static-share":
            return _static(table)
        case "energy-share":
            return _energy(table)
        case "balanced-gain":
            return _balanced(table)
    return _effective(table, "xyz".index(name[-1]))


_PEAK = "the largest gain of an undamped, rigid-body or integrating mode is infinite"
_BAND = "undamped, rigid-body or integrating modes inside the band have an infinite gain"


def _finite(values: Real, reason: str) -> Scores:
    fine = np.isfinite(values)
    return Scores(values=np.where(fine, values, np.nan), reason="" if fine.all() else reason)


def _decay(table: Table) -> Scores:
    """Undamped, rigid-body and integrating modes last for ever: inf, first of all."""
    values = np.array(table.modes.time_constant)
    parts = []
    if np.isinf(values).any():
        parts.append("undamped, rigid-body and integrating modes never decay")
    if np.isnan(values).any():
        parts.append("unstable modes grow")
    return Scores(values=values, reason="; ".join(parts))


def _static(table: Table) -> Scores:
    g = table.gains
    with np.errstate(divide="ignore", invalid="ignore"):
        values = np.sqrt(g.squared(np.zeros(len(g.x))))
    return _finite(
        table.spread(values, lambda block: block.static()),
        "rigid-body and integrating modes have no static gain",
    )


def _viscous(g: Gains) -> Real:
    """Viscous coefficient of oscillating terms; a loss factor as zeta = eta/2."""
    return g.d + g.eta * np.sqrt(np.maximum(np.where(g.oscillating, g.x, 0.0), 0.0))


def _energy(table: Table) -> Scores:
    """Second order ``(A0/x + A1)/(2 d)``, real pole ``A0/(2 abs(lambda))``; needs decay and no feedthrough."""
    g, d = table.gains, _viscous(table.gains)
    with np.errstate(divide="ignore", invalid="ignore"):
        swing = (np.where(g.A0 > 0, g.A0 / g.x, 0.0) + g.A1) / (2 * d)
        swing = np.where((d > 0) & ((g.x > 0) | ((g.x == 0) & (g.A0 == 0))) & (g.A2 == 0), swing, np.nan)
        real = np.where((g.x > 0) & (g.A1 == 0), g.A0 / (2 * g.x), np.nan)
    values = np.where(g.oscillating, swing, real)
    values = np.where((g.size == 0) & (g.A2 == 0), 0.0, values)
    reason = "undamped, rigid-body, integrating and unstable modes have no finite H2 norm"
    if np.any(g.A2 > 0) or np.any(~g.oscillating & (g.A1 > 0)):
        reason = "acceleration outputs pass the load through at once: no finite H2 norm"
    return _finite(table.spread(values, lambda block: block.energy()), reason)


def _balanced(table: Table) -> Scores:
    """``norm(c) norm(b)/(4 zeta omega^2)`` (Gregory 1984; Gawronski); real: ``norm(c) norm(b)/(2 abs(lambda))``."""
    g, d = table.gains, _viscous(table.gains)
    with np.errstate(divide="ignore", invalid="ignore"):
        root = np.sqrt(np.maximum(g.x, 0.0))
        at_pole = np.sqrt(np.maximum(g.A0 + g.A1 * g.x + g.A2 * g.x**2, 0.0))
        swing = np.where((d > 0) & (g.x > 0), at_pole / (2 * d * root), np.nan)
        real = np.where(g.x > 0, g.size / (2 * g.x), np.nan)
    values = np.where(g.size == 0, 0.0, np.where(g.oscillating, swing, real))
    return _finite(
        table.spread(values, lambda block: block.hankel()),
        "undamped, rigid-body, integrating and unstable modes have no Hankel singular value",
    )


def _effective(table: Table, axis: int) -> Scores:
    masses = table.modes.effective_mass
    if masses is None:
        missing = "effective masses need a structure with uncoupled real modes and direction labels on its unknowns"
        return Scores(values=np.full(len(table.modes), np.nan), reason=missing)
    return Scores(values=np.array(masses[:, axis]))
