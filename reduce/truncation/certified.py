"""Reduced models with their guarantee: certify one that exists, or choose the smallest one that meets a tolerance."""

from __future__ import annotations

from dataclasses import replace

from modesieve.reduce.errors import ModesieveError
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.progress import Listener
from modesieve.reduce.response.grid import checked_band
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.certify import certify, listed
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.records import ReducedModel, Statics, Tolerance
from modesieve.reduce.truncation.search import smallest_guaranteed
from modesieve.reduce.truncation.spot_checks import Solver


def certified(
    small: ReducedModel, *, solve: Solver | None = None, spots: int = 7, progress: Listener = None
) -> ReducedModel:
    """``small`` with its hub and guarantee over its own band; its error becomes the guaranteed figure if that holds.

    The figure keeps its reference (peak, local or absolute; local where none was asked for) and its threshold. Where no
    guarantee is possible the measured error stays, and a note says why. Spot checks solve the full model at ``spots``
    frequencies that nothing else has used.
    """
    if small.band is None:
        return replace(small, notes=(*small.notes, "no guarantee: no band"))
    hub = small.hub if small.hub is not None else _hub(small.modes)
    error = small.error
    promise = certify(
        small.modes,
        small.system,
        small.band,
        hub=hub,
        kept=small.kept,
        solve=solve,
        threshold=error.threshold if error is not None else None,
        spots=spots,
        progress=progress,
    )
    if not promise.holds:
        return replace(small, hub=hub, guarantee=promise, notes=(*small.notes, f"no guarantee: {promise.reason}"))
    figure = promise.figure(error.relative_to if error is not None else "local")
    return replace(small, hub=hub, guarantee=promise, error=figure if figure is not None else error)


def guaranteed(
    ranking: Ranking | Modes,
    tolerance: Tolerance,
    band: tuple[float, float],
    *,
    statics: Statics | None = None,
    levels: int | None = None,
    solve: Solver | None = None,
    spots: int = 7,
    progress: Listener = None,
) -> ReducedModel:
    """The smallest reduced model, modes and tail levels together, whose guaranteed error over ``band`` is within
    ``tolerance``. The notes say what half the tolerance would cost and which in-band modes were left out.

    statics, levels: only these; None: whatever is smallest.

    Raises ChoiceError where no set meets it or no guarantee is possible, with the reason.
    """
    table = ranking if isinstance(ranking, Ranking) else None
    modes = table.modes if table is not None else ranking
    assert isinstance(modes, Modes)
    listed(modes)
    hub, around = build_hub(modes), checked_band(band)
    found = smallest_guaranteed(
        modes, hub, tolerance, around, statics=statics, levels=levels, solve=solve, spots=spots, progress=progress
    )
    promise = found.guarantee
    return ReducedModel(
        modes=modes,
        kept=found.kept,
        system=found.system,
        statics=found.static.kind,
        choice=tolerance,
        ranked_by="the error of the set",
        band=around,
        error=promise.figure(tolerance.of),
        notes=found.notes if promise.holds else (*found.notes, f"no guarantee: {promise.reason}"),
        ranking=table,
        levels=found.static.levels,
        hub=hub,
        guarantee=promise,
    )


def _hub(modes: Modes) -> Hub | None:
    try:
        return build_hub(modes)
    except ModesieveError:
        return None  # `certify` says why
