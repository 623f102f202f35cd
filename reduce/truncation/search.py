"""The smallest order, modes and tail levels together, whose guaranteed error meets a tolerance.

For every statics that is allowed: the shortest prefix of the modes by what they can do in the band, then kept units are
taken out while the rest still passes, then exchanges two for one. What wins is proved over the whole band, between the
samples too; if the proof asks for more than the samples showed, the search goes on with a tighter limit.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import ModalRatio, RatioByFrequency, RatioByMode
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.certify import certify, grid_of
from modesieve.reduce.truncation.choice import always, groups
from modesieve.reduce.truncation.guarantee import Guarantee
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.records import Statics, Tolerance
from modesieve.reduce.truncation.spot_checks import Solver
from modesieve.reduce.truncation.trial import Static, Trial, small_system

_ROUNDS = 6
_EXCHANGES = 400
#: The sampled error must stay this much below the tolerance: what branch and bound may add.
_MARGIN = 0.985


@dataclass(frozen=True, kw_only=True, eq=False)
class Found:
    """The smallest small model found. static: what its static part is; half: the number of modes and the statics that
    half the tolerance would need, None where even all modes do not meet it; notes: what to say."""

    kept: tuple[int, ...]
    static: Static
    system: SmallSystem
    guarantee: Guarantee
    half: tuple[int, Static] | None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class _Best:
    kept: tuple[int, ...]
    static: Static
    order: int


def smallest_guaranteed(
    modes: Modes,
    hub: Hub,
    tolerance: Tolerance,
    band: tuple[float, float],
    *,
    statics: Statics | None = None,
    levels: int | None = None,
    outputs: Ints | None = None,
    solve: Solver | None = None,
    spots: int = 7,
    progress: Listener = None,
) -> Found:
    """The smallest (modes, levels) whose guaranteed error over ``band`` (rad/s) is within ``tolerance``.

    statics: "none", "feedthrough" or "vectors" only; None: whatever is smallest, without feedthrough. levels: that
    many only. outputs: indices that an absolute tolerance is about. Spot checks and `certify` as usual.

    Raises ChoiceError where no set meets it, saying how near it came, and where no guarantee is possible at all.
    """
    if not tolerance.value > 0:
        raise ChoiceError("the tolerance is none", expected="a number above 0", got=f"{tolerance.value}")
    options = _options(hub, statics, levels)
    everything = tuple(range(1, len(modes) + 1))
    finest = small_system(hub, everything, options[-1])
    whole = certify(modes, finest, band, hub=hub, kept=everything, spots=0, pairs=False)
    if not whole.holds:
        raise ChoiceError("no guaranteed choice here", expected="a guarantee for all computed modes", got=whole.reason)
    trial = _trial(hub, finest, whole, tolerance.of, outputs)
    limit = tolerance.value * _MARGIN
    for _ in range(_ROUNDS):
        best = _best(modes, trial, options, limit, progress)
        if best is None:
            raise _unmet(trial, everything, options, tolerance)
        system = small_system(hub, best.kept, best.static)
        promise = certify(
            modes, system, band, hub=hub, kept=best.kept, threshold=whole.threshold or None, spots=0, pairs=False
        )
        reached = _value(promise, tolerance, outputs)
        if reached <= tolerance.value:
            return _found(modes, hub, trial, best, system, whole, band, tolerance, options, solve, spots, progress)
        limit *= max(tolerance.value / reached, 0.5) * 0.995
        trial = _denser(trial, hub, system, band)
    raise _unmet(trial, everything, options, tolerance)


def _found(
    modes: Modes,
    hub: Hub,
    trial: Trial,
    best: _Best,
    system: SmallSystem,
    whole: Guarantee,
    band: tuple[float, float],
    tolerance: Tolerance,
    options: list[Static],
    solve: Solver | None,
    spots: int,
    progress: Listener,
) -> Found:
    promise = certify(
        modes, system, band, hub=hub, kept=best.kept, solve=solve, threshold=whole.threshold or None, spots=spots
    )
    half = _best(modes, trial, options, 0.5 * tolerance.value * _MARGIN, progress)
    notes = [*_light_dropped(modes, hub, best.kept, band), *_ringing(best), _cost_of_half(best, half)]
    return Found(
        kept=best.kept,
        static=best.static,
        system=system,
        guarantee=promise,
        half=None if half is None else (len(half.kept), half.static),
        notes=tuple(notes),
    )


def _options(hub: Hub, statics: Statics | None, levels: int | None) -> list[Static]:
    """What to try, coarsest first; undamped pseudo-modes last, where they differ from damped ones."""
    if statics in ("none", "feedthrough"):
        return [Static(kind=statics)]
    wanted = [*range(1, hub.levels + 1)] if levels is None else [levels] if levels else []
    out = [] if statics == "vectors" or (levels and levels > 0) else [Static(kind="none")]
    out += [Static(kind="vectors", levels=level) for level in wanted]
    if isinstance(hub.damping, (ModalRatio, RatioByFrequency, RatioByMode)):
        out += [Static(kind="vectors", levels=level, damped=False) for level in wanted]
    return out or [Static(kind="none")]


def _trial(hub: Hub, finest: SmallSystem, whole: Guarantee, of: str, outputs: Ints | None) -> Trial:
    grid = whole.omega
    omega = np.unique(np.concatenate([grid, (grid[1:] + grid[:-1]) / 2]))
    mask = np.ones(hub.direct.shape[0])
    if outputs is not None:
        mask[:] = 0
        mask[np.asarray(outputs, dtype=int)] = 1
    return Trial(hub=hub, omega=omega, of=of, scale=_scale(hub, omega, of, whole), outputs=mask)


def _scale(hub: Hub, omega: Real, of: str, whole: Guarantee) -> Real:
    if of == "absolute":
        return np.ones(len(omega))
    if of == "peak":
        return np.full(len(omega), whole.peak_reference)
    return np.maximum(largest_singular_value(hub.weigh(hub.response(omega))) - hub.error(omega), whole.threshold)


def _denser(trial: Trial, hub: Hub, system: SmallSystem, band: tuple[float, float]) -> Trial:
    """The trial's frequencies with those of a small model's own grid added."""
    omega = np.unique(np.concatenate([trial.omega, grid_of(hub, system, band)]))
    floor = float(trial.scale.min())
    if trial.of != "local":
        return replace(trial, omega=omega, scale=np.full(len(omega), floor))
    size = largest_singular_value(hub.weigh(hub.response(omega))) - hub.error(omega)
    return replace(trial, omega=omega, scale=np.maximum(size, floor))


def _value(promise: Guarantee, tolerance: Tolerance, outputs: Ints | None) -> float:
    if tolerance.of == "absolute":
        chosen = range(len(promise.absolute)) if outputs is None else [int(i) for i in outputs]
        return max((promise.absolute[i].value for i in chosen), default=0.0)
    figure = promise.figure(tolerance.of)
    return float("inf") if figure is None else figure.value


# ---- the search for one limit ----------------------------------------------------------------------------------------


def _best(modes: Modes, trial: Trial, options: list[Static], limit: float, progress: Listener) -> _Best | None:
    """The passing set of the smallest order over all statics; ties go to fewer levels."""
    best: _Best | None = None
    for static in options:
        if not static.damped and best is not None and best.static.damped:
            break  # pseudo-modes that ring are a last resort
        tell(progress, "choosing", message=f"{static.kind}, {static.levels} levels")
        kept = _smallest(modes, trial, static, limit)
        if kept is None:
            continue
        order = small_system(trial.hub, kept, static).states
        if best is None or order < best.order:
            best = _Best(kept=kept, static=static, order=order)
    return best


def _smallest(modes: Modes, trial: Trial, static: Static, limit: float) -> tuple[int, ...] | None:
    held = always(modes)
    units = [tuple(i for i in unit if i not in held) for unit in groups(modes)]
    units = [unit for unit in units if unit]
    strength = trial.strength(static.levels if static.kind == "vectors" else int(static.kind == "feedthrough"))
    rank = np.array([max(strength[modes.term[i - 1]] for i in unit) for unit in units])
    ordered = [units[i] for i in np.argsort(-rank, kind="stable")]

    def passes(chosen: list[tuple[int, ...]]) -> bool:
        kept = tuple(sorted(held.union(*chosen)) if chosen else sorted(held))
        return trial.quickly(kept, static, limit)

    if not passes(ordered):
        return None
    chosen = _exchanged(_thinned(_prefix(ordered, passes), passes), ordered, passes)
    return tuple(sorted(held.union(*chosen))) if chosen else tuple(sorted(held))


_Passes = Callable[[list[tuple[int, ...]]], bool]


def _prefix(ordered: list[tuple[int, ...]], passes: _Passes) -> list[tuple[int, ...]]:
    """A short passing prefix by bisection (the error is nearly monotone in this order), then some steps back."""
    low, high = -1, len(ordered)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if passes(ordered[:middle]) else (middle, high)
    return ordered[:high]


def _thinned(chosen: list[tuple[int, ...]], passes: _Passes) -> list[tuple[int, ...]]:
    """Without every unit that the rest can do without, weakest first, until none is left."""
    again = True
    while again:
        again = False
        for unit in list(reversed(chosen)):
            rest = [other for other in chosen if other != unit]
            if passes(rest):
                chosen, again = rest, True
    return chosen


def _exchanged(chosen: list[tuple[int, ...]], ordered: list[tuple[int, ...]], passes: _Passes) -> list[tuple[int, ...]]:
    """Two weak units against one that was left out, a bounded number of tries."""
    tries = 0
    while True:
        out = [unit for unit in ordered if unit not in chosen][:6]
        weak = [unit for unit in ordered if unit in chosen][-8:]
        better = None
        for pair in combinations(reversed(weak), 2):
            for unit in out:
                tries += 1
                trial = [other for other in chosen if other not in pair] + [unit]
                if passes(trial):
                    better = trial
                    break
            if better or tries > _EXCHANGES:
                break
        if better is None:
            return chosen
        chosen = [unit for unit in ordered if unit in better]


# ---- what to say -----------------------------------------------------------------------------------------------------


def _light_dropped(modes: Modes, hub: Hub, kept: tuple[int, ...], band: tuple[float, float]) -> list[str]:
    """Lightly damped modes inside the band that the set does without: never in silence."""
    if hub.rest.order == 1:
        return []
    low, high = band
    ratio = np.nan_to_num(modes.damping_ratio, nan=1.0)
    terms = hub.terms.select(np.arange(hub.computed))
    coupled = np.linalg.norm(terms.b, axis=1) * np.linalg.norm(terms.outputs, axis=0)
    there = (modes.omega >= low) & (modes.omega <= high) & (ratio < 0.1) & (coupled > 1e-9 * coupled.max(initial=0.0))
    dropped = [int(i) for i in modes.numbers[there] if int(i) not in kept]
    if not dropped:
        return []
    listed = ", ".join(map(str, dropped))
    return [f"lightly damped modes inside the band are left out, within the tolerance: {listed}"]


def _ringing(best: _Best) -> list[str]:
    if best.static.damped:
        return []
    return [
        "the pseudo-modes are undamped, as the full model's uncounted part is: with the modal ratios continued to them"
        " the tolerance is not met; in time responses they ring on above the band"
    ]


def _cost_of_half(best: _Best, half: _Best | None) -> str:
    if half is None:
        return "half the tolerance: not met with the modes computed"
    levels = f" and {half.static.levels} tail levels" if half.static.levels else ""
    return f"half the tolerance would need {len(half.kept)} modes{levels} ({half.order} states, not {best.order})"


def _unmet(trial: Trial, everything: tuple[int, ...], options: list[Static], tolerance: Tolerance) -> ChoiceError:
    nearest = min(trial.error(everything, static) for static in options)
    size = f"{nearest:.3g} {tolerance.unit}".rstrip() if tolerance.of == "absolute" else f"{100 * nearest:.3g} %"
    return ChoiceError(
        "no kept set meets the tolerance with a guarantee",
        expected=f"a guaranteed error within the tolerance, relative to {tolerance.of}",
        got=f"at best {size} with all {len(everything)} computed modes",
        remedy="compute more modes, lower the top of the band, or loosen the tolerance",
    )
