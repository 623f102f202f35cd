"""Cutting: the kept terms, and what replaces the static part of the dropped ones.

``feedthrough`` adds ``X = C K^-1 F - sum_kept c_i b_i^T / omega_i^2`` to the small model (residual flexibility, the
mode acceleration idea of D. Williams, Aeronautical Quarterly 1, 1949, 123-136, read as a constant); for state space
``-C A^-1 B`` takes the place of ``C K^-1 F``. With a loss factor the remainder is ``X/(1 + j eta)``. For velocity and
acceleration outputs it would be ``s X`` and ``s^2 X``, improper.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Structure
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem

_FLOATING = ("rigid body", "integrating")


def terms_of(modes: Modes, numbers: Any) -> Ints:
    """Terms (ascending) of the given mode numbers."""
    index = np.asarray(sorted(numbers), dtype=int) - 1
    return np.unique(modes.term[index]).astype(np.int64)


@dataclass(frozen=True, kw_only=True, eq=False)
class Cutter:
    """Makes the small system of any kept set of one list of modes with one kind of statics.

    parts: the static part of every term (``feedthrough``); hub: the reference model whose tail gives pseudo-modes
    (``vectors``), ``levels`` of them.
    """

    modes: Modes
    statics: str
    parts: Real | None = None
    hub: Any = None
    levels: int = 0

    def __call__(self, numbers: Any) -> SmallSystem:
        """The small system that keeps the mode ``numbers``."""
        if self.statics == "vectors":
            return self.tailed(numbers).system
        keep = terms_of(self.modes, numbers)
        small = self.modes.system.select(keep)
        if self.statics == "none":
            return small
        return with_remainder(small, remainder(self.modes, keep, self.parts), loss_factor(self.modes.system))

    def tailed(self, numbers: Any) -> Any:
        from modesieve.reduce.truncation.tails import with_tail_levels

        return with_tail_levels(self.hub, tuple(int(i) for i in numbers), self.levels)

    def notes(self, numbers: Any, band: tuple[float, float] | None) -> tuple[str, ...]:
        """What to say about pseudo-modes."""
        if self.statics != "vectors":
            return ()
        tailed = self.tailed(numbers)
        swings = band is not None and self.modes.origin.kind == "structure"  # real poles bring no resonance
        inside = tailed.inside(band) if swings else ()
        told = [f"{len(tailed.pseudo_omega)} pseudo-modes in {self.levels} tail levels"]
        if len(inside):
            told.append(f"{len(inside)} pseudo-modes lie inside the band: keep more modes")
        return tuple(told)


def cutter(modes: Modes, statics: str, levels: int) -> Cutter:
    """The cutter of checked ``statics``; for ``vectors`` it makes the hub (one factorisation, a few solves)."""
    if statics == "vectors":
        from modesieve.reduce.truncation.build import build_hub

        return Cutter(modes=modes, statics=statics, hub=build_hub(modes), levels=levels)  # three levels bound any fewer
    return Cutter(modes=modes, statics=statics, parts=static_terms(modes) if statics == "feedthrough" else None)


def with_remainder(small: SmallSystem, X: Real, eta: float) -> SmallSystem:
    """``small`` plus the static remainder X (p, m)."""
    if isinstance(small, FirstOrderModal):
        return replace(small, D=small.D + X)
    if small.eta_X and not eta:
        eta = small.eta_X
    return replace(small, X=small.X + X, eta_X=eta)


def loss_factor(system: SmallSystem) -> float:
    """The loss factor that the dropped part shares with the modes; 0 without hysteretic damping."""
    if isinstance(system, FirstOrderModal):
        return 0.0
    return float(system.eta.max(initial=system.eta_X))


def remainder(modes: Modes, keep: Ints, parts: Real | None = None) -> Real:
    """Exact static part of everything that is not in the terms ``keep``, (p, m)."""
    assert modes.static is not None
    parts = static_terms(modes) if parts is None else parts
    return modes.static - parts[np.asarray(keep, dtype=int)].sum(axis=0)


def static_terms(modes: Modes) -> Real:
    """``c_i b_i^T / omega_i^2`` (or ``-C_i A_i^-1 B_i``) of every term, (q, p, m).

    0 for rigid-body and integrating modes, which have no static part.
    """
    system = modes.system
    floating = {int(modes.term[i]) for i, reason in enumerate(modes.always_kept) if reason in _FLOATING}
    out = np.zeros((system.terms, system.p, system.m))
    for i in range(system.terms):
        if i not in floating:
            out[i] = _static_term(system, i)
    return out


def _static_term(system: SmallSystem, i: int) -> Real:
    if isinstance(system, FirstOrderModal):
        rows = system.states_of(i)
        moving = np.asarray(-system.C[:, rows] @ np.linalg.solve(system.blocks[i], system.B[rows]))
        return moving if system.direct is None else moving + system.direct[i]
    return np.outer(system.cq[:, i], system.b[i]) / system.x[i]


# ---- what is legal -------------------------------------------------------------------------------------------------


def refusal(modes: Modes) -> str:
    """Why ``feedthrough`` is not possible for these modes; "" if it is."""
    rates = _rates(modes)
    if rates:
        return f"the static remainder of {rates} outputs is improper: it would grow with the frequency"
    if modes.static is None:
        return modes.static_reason or "the static response was not computed"
    return ""


def _rates(modes: Modes) -> str:
    system, model = modes.system, modes.model
    if isinstance(model, Structure):
        velocity, acceleration = (C is not None and bool(np.any(C)) for C in (model.Cv, model.Ca))
    elif isinstance(system, FirstOrderModal):
        return ""
    else:
        velocity, acceleration = bool(np.any(system.cv)), bool(np.any(system.ca))
    return " and ".join(name for name, there in (("velocity", velocity), ("acceleration", acceleration)) if there)


def legal(modes: Modes, statics: str | None) -> str:
    """``statics``, or for None the best that is legal.

    Raises ChoiceError for statics that this model cannot have.
    """
    reason = refusal(modes)
    if statics is None:
        return "none" if reason else "feedthrough"
    if statics in ("none", "vectors") or (statics == "feedthrough" and not reason):
        return statics  # vectors: the hub says whether it can be made
    if statics == "feedthrough":
        raise ChoiceError(
            "statics feedthrough is not possible here",
            expected="displacement (or only) outputs and a static response",
            got=reason,
            remedy="use statics vectors, or none with modes to 1.5 or 2 times the band's top",
        )
    raise ChoiceError(
        f"statics {statics} is not available",
        expected="none or vectors" if reason else "none, feedthrough or vectors",
        got=str(statics),
    )
