"""Stage 2: from ranked modes and a typed choice to a small model with its error."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.model import Thermal
from modesieve.reduce.progress import Listener
from modesieve.reduce.response.grid import checked_band
from modesieve.reduce.response.records import ErrorFigure, FullResponse
from modesieve.reduce.response.simulate import steady_state
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.choice import Kept, resolve, sequence
from modesieve.reduce.truncation.gauge import (
    Solver,
    default_band,
    estimated_full,
    grid_for,
    refined,
    response,
    solver_of,
    told,
    yardstick_for,
)
from modesieve.reduce.truncation.records import Above, Band, Choice, Count, ReducedModel, Statics, Tolerance
from modesieve.reduce.truncation.statics import Cutter, cutter, legal, refusal
from modesieve.reduce.truncation.tolerance import smallest


@dataclass(frozen=True, kw_only=True, eq=False)
class _Measured:
    """An error with the full response it was measured on."""

    figure: ErrorFigure | None
    full: FullResponse | None
    notes: tuple[str, ...] = ()


def truncate(
    ranking: Ranking | Modes,
    choice: Choice,
    *,
    statics: Statics | None = None,
    levels: int = 2,
    band: tuple[float, float] | None = None,
    full: FullResponse | None = None,
    progress: Listener = None,
) -> ReducedModel:
    """Keep the modes that ``choice`` names, ``G(s) ~ D + X + sum_kept c_i b_i^T h_i(s)``, and measure the error.

    ranking: ranked modes; bare modes are ranked by the default measure where the choice needs an order. choice: Count,
    Band, Keep, Tolerance or a tuple of Above (any of them suffices). statics: "none", "feedthrough" (adds the exact
    static remainder X of everything dropped), "vectors" (adds pseudo-modes, ``levels`` tail levels of them: exact
    statics for every kind of output), None: feedthrough where it is legal for all outputs, else none. band (rad/s):
    where the error is measured; by default the ranking's, the choice's own, or 0 to the counted range over 1.5 (not for
    a Tolerance, which needs a stated band). full: a response of the full model to measure on, else computed here.

    Always-kept modes (rigid-body, integrating, unstable) are kept whatever the choice, and count. The notes of the
    result say what was added or taken fewer.

    Raises ChoiceError for choices that cannot be met, each with its reason.
    """
    modes, table = _parts(ranking, choice, band)
    make = cutter(modes, legal(modes, statics), levels)
    around = _band(choice, band, table, modes)
    if isinstance(choice, Tolerance) and table is not None and around is not None:
        kept, measured = _by_tolerance(table, choice, make, around, full, progress)
    else:
        kept = resolve(choice, modes, table)
        measured = _measure(modes, make(kept.numbers), around, full, progress)
    system = make(kept.numbers)
    return ReducedModel(
        modes=modes,
        kept=kept.numbers,
        system=system,
        statics=make.statics,  # type: ignore[arg-type]
        choice=choice,
        ranked_by=table.by if table is not None else "",
        band=around,
        error=measured.figure,
        samples=measured.full,
        uniform=_uniform(modes, kept.numbers, make.statics, system),
        notes=(*_why_none(modes, statics), *make.notes(kept.numbers, around), *kept.notes, *measured.notes),
        ranking=table,
        levels=make.levels,
        hub=make.hub,
    )


def _uniform(modes: Modes, kept: tuple[int, ...], statics: str, system: SmallSystem) -> Real | None:
    """The state of one degree everywhere: the kept modes' share of it.

    With pseudo-modes it is the steady state under the inputs that hold the full model there, ``F u = K 1`` (ambients at
    one degree, no heat), where such inputs exist: statics are exact then.
    """
    if modes.uniform is None:
        return None
    if statics != "vectors":
        return modes.uniform[np.asarray(kept, dtype=int) - 1]
    model = modes.model
    if not isinstance(model, Thermal):
        return None
    hold = model.K @ np.ones(model.n)
    u = np.linalg.lstsq(model.F, hold, rcond=None)[0]
    if np.linalg.norm(model.F @ u - hold) > 1e-9 * np.linalg.norm(hold) or not np.any(hold):
        return None
    return steady_state(system, u)


def _parts(ranking: Ranking | Modes, choice: Choice, band: tuple[float, float] | None) -> tuple[Modes, Ranking | None]:
    """Modes and their ranking; bare modes are only ranked where the choice needs it."""
    if isinstance(ranking, Ranking):
        return _some(ranking.modes), ranking
    modes = _some(ranking)
    if not isinstance(choice, (Count, Tolerance)) and not _is_above(choice):
        return modes, None
    from modesieve.reduce.modal.rank import rank

    return modes, rank(modes, band=band)


def _is_above(choice: Choice) -> bool:
    return isinstance(choice, tuple) and any(isinstance(one, Above) for one in choice)


def _some(modes: Modes) -> Modes:
    if len(modes) == 0:
        raise ChoiceError(
            "there are no modes to keep", expected="at least one computed mode", got="none", remedy="widen the band"
        )
    return modes


def _why_none(modes: Modes, asked: str | None) -> tuple[str, ...]:
    """Why nobody's choice became none."""
    reason = refusal(modes) if asked is None else ""
    return (f"statics none: {reason}",) if reason else ()


def _band(
    choice: Choice, band: tuple[float, float] | None, table: Ranking | None, modes: Modes
) -> tuple[float, float] | None:
    if band is None and table is not None:
        band = table.band
    if band is None and isinstance(choice, Band):
        band = (choice.low, choice.high)
    if band is not None:
        return checked_band(band)
    if isinstance(choice, Tolerance):
        raise ChoiceError(
            "a tolerance needs a band to hold in", expected="a band", got="none", remedy="give the band of interest"
        )
    return default_band(modes)


# ---- measuring -----------------------------------------------------------------------------------------------------


def _by_tolerance(
    table: Ranking,
    choice: Tolerance,
    make: Cutter,
    band: tuple[float, float],
    full: FullResponse | None,
    progress: Listener,
) -> tuple[Kept, _Measured]:
    modes = table.modes
    _ported(modes)
    ordered = sequence(modes, table)
    solve = None if full is not None else solver_of(modes, progress)
    samples = _first_samples(modes, band, full, solve, progress)
    found = smallest(modes, ordered, choice, make, samples, band, solve=solve, progress=progress)
    numbers = ordered.kept(found.count)
    R = response(make(numbers), found.full.omega)
    notes = (*found.notes, found.yard.threshold_note) if choice.of == "local" else found.notes
    return Kept(numbers=numbers), _Measured(figure=found.yard.figure(R, choice.of), full=found.full, notes=notes)


def _ported(modes: Modes) -> None:
    if 0 in (modes.origin.m, modes.origin.p):
        raise ChoiceError(
            "a tolerance needs a response to hold for",
            expected="at least one input and one output",
            got=f"{modes.origin.m} inputs and {modes.origin.p} outputs",
            remedy="give the model loads and outputs, or choose by count or band",
        )


def _measure(
    modes: Modes,
    system: SmallSystem,
    band: tuple[float, float] | None,
    full: FullResponse | None,
    progress: Listener,
) -> _Measured:
    """The local error of ``system``: measured, or estimated where the full model is not at hand."""
    if band is None or 0 in (modes.origin.m, modes.origin.p):
        return _Measured(figure=None, full=full, notes=("no error: no band, or no inputs and outputs",))
    if full is None and modes.model is None:
        return _estimated(modes, system, band)
    solve = None if full is not None else solver_of(modes, progress)
    samples = _first_samples(modes, band, full, solve, progress)
    yard = yardstick_for(modes, samples, band)
    if yard.refusal:
        return _Measured(figure=None, full=samples, notes=(f"no relative error: {yard.refusal}",))
    if solve is not None:
        samples, yard, _ = refined(modes, yard, samples, solve, system, "local", band)
    return _Measured(
        figure=yard.figure(response(system, samples.omega), "local"), full=samples, notes=(yard.threshold_note,)
    )


def _estimated(modes: Modes, system: SmallSystem, band: tuple[float, float]) -> _Measured:
    samples = estimated_full(modes, grid_for(modes, band))
    yard = yardstick_for(modes, samples, band)
    if yard.refusal:
        return _Measured(figure=None, full=None, notes=(f"no relative error: {yard.refusal}",))
    figure = yard.figure(response(system, samples.omega), "local", "estimated")
    note = "estimated with all computed modes: the full model is not at hand"
    return _Measured(figure=figure, full=None, notes=(yard.threshold_note, note))


def _first_samples(
    modes: Modes,
    band: tuple[float, float],
    full: FullResponse | None,
    solve: Solver | None,
    progress: Listener,
) -> FullResponse:
    if full is not None:
        return _within(full, band)
    assert solve is not None
    told(progress, "full response")
    full = solve(grid_for(modes, band))
    if len(full.omega) == 0:
        raise ChoiceError(
            "the full model is singular all over the band",
            expected="a regular dynamic stiffness",
            got=f"{len(grid_for(modes, band))} singular frequencies",
            remedy="check the stiffness matrix with inspect",
        )
    return full


def _within(full: FullResponse, band: tuple[float, float]) -> FullResponse:
    """The part of a given response that lies in the band and is finite."""
    from modesieve.reduce.response.deviation import picked

    inside = (full.omega >= band[0] * (1 - 1e-12)) & (full.omega <= band[1] * (1 + 1e-12))
    inside &= np.isfinite(full.G).all(axis=(1, 2))
    if not inside.any():
        raise ChoiceError(
            "the given response has no frequency in the band",
            expected=f"frequencies from {band[0]:.6g} to {band[1]:.6g} rad/s",
            got=f"{full.omega.min(initial=0.0):.6g} to {full.omega.max(initial=0.0):.6g} rad/s",
            remedy="leave the response out and it is computed where it matters",
        )
    return full if inside.all() else picked(full, inside)
