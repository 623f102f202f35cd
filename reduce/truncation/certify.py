"""From modes and a small model to a guarantee: the hub, the worst figures over the whole band, the spot checks."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError, ModesieveError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Interface
from modesieve.reduce.progress import Listener, tell
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.records import ErrorFigure, FullResponse
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.build import build_hub, counting_point
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal, is_diagonal
from modesieve.reduce.truncation.guarantee import Guarantee
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.spot_checks import Solver, broken, checked, spot_checks, spot_places
from modesieve.reduce.truncation.supremum import Gap, Supremum, suprema

_FORMULA = (
    "abs(norm(G - R) - norm(H - R)) <= q(w) norm(r) norm(r') in the inner product of (K - sigma M)^-1, "
    "q = sup over x >= x_c of (x - sigma)/abs(a x + b)"
)
#: Without resolutions, what lies this far below the band's peak does not count as a local reference.
_FLOOR = 1e-3


def certify(
    modes: Modes,
    small: SmallSystem,
    band: tuple[float, float],
    *,
    hub: Hub | None = None,
    kept: tuple[int, ...] = (),
    full: FullResponse | None = None,
    solve: Solver | None = None,
    threshold: float | None = None,
    spots: int = 7,
    pairs: bool = True,
    progress: Listener = None,
) -> Guarantee:
    """The guaranteed error of ``small`` against the full model of ``modes``, over ``band`` (rad/s).

    hub: made if not given. kept: mode numbers, to place the spot checks. full: responses that are at hand, checked as
    well. solve: solves the full model at the spot frequencies (the verified response if not given); spots = 0 makes
    none. threshold: weighted level below which the response is no local reference (resolutions, else 1e-3 of the
    elastic peak). pairs: also every pair's own figure.

    Never raises for a model that allows no guarantee: the result says why, and its figures are None.
    """
    try:
        listed(modes)
        hub = build_hub(modes) if hub is None else hub
    except ModesieveError as error:
        return _nothing(modes, band, error)
    tell(progress, "guarantee", message="worst error over the band")
    grid = grid_of(hub, small, band)
    promise = _curve(modes, hub, small, band, grid)
    promise = _figures(promise, modes.origin, hub, small, grid, threshold, pairs)
    if spots or full is not None:
        tell(progress, "guarantee", message="spot checks")
        promise = _spotted(promise, modes, hub, small, kept, full, solve, spots)
    return promise


def listed(modes: Modes) -> None:
    """Raise ChoiceError unless the list is complete and still holds every mode that was counted."""
    certificate, x_c = modes.certificate, counting_point(modes)
    if certificate.complete != "counted" or certificate.expected is None or not is_diagonal(modes.system):
        return
    here = int(np.count_nonzero(diagonal(modes.system).x < x_c))
    if here != certificate.expected:
        raise ChoiceError(
            "the list of modes is not the one that was counted",
            expected=f"{certificate.expected} modes below the counting point",
            got=str(here),
            remedy="compute the modes again",
        )


def grid_of(hub: Hub, small: SmallSystem, band: tuple[float, float], base: int = 120) -> Real:
    """Edges of the first intervals, ascending over the band: at and around every mode and pseudo-mode in it.

    The lower end 0 becomes a tiny positive number: a loss factor jumps there, and rigid-body motion is infinite.
    """
    low, high = max(float(band[0]), 1e-12 * float(band[1])), float(band[1])
    parts = [np.array([low, high])]
    for terms in (hub.terms, *([diagonal(small)] if is_diagonal(small) else [])):
        parts.append(_around(terms))
    smallest = max(low, 1e-4 * high if hub.rest.order == 2 else 1e-3 * min(_smallest(hub), high))
    parts.append(np.geomspace(smallest, high, base))
    if hub.rest.order == 2:
        parts.append(np.linspace(low, high, base))
    every = np.unique(np.concatenate(parts))
    return np.asarray(every[(every >= low) & (every <= high)])


def _around(terms: Diagonal) -> Real:
    if terms.order == 1:
        return terms.x[terms.x > 0]
    w = np.sqrt(np.maximum(terms.x, 0.0))
    half = np.maximum((terms.d + terms.eta * w) / 2, 1e-3 * w)
    return np.asarray((w[:, None] + half[:, None] * np.array([-6.0, -2.0, -0.7, 0.0, 0.7, 2.0, 6.0])).ravel())


def _smallest(hub: Hub) -> float:
    x = hub.terms.x
    return float(x[x > 0].min(initial=np.inf))


def _curve(modes: Modes, hub: Hub, small: SmallSystem, band: tuple[float, float], grid: Real) -> Guarantee:
    H, own = hub.response(grid), hub.error(grid)
    certificate = modes.certificate
    return Guarantee(
        holds=True,
        reason="",
        formula=_FORMULA + "; " + hub.rest.formula,
        band=(float(band[0]), float(band[1])),
        x_c=hub.x_c,
        modes_below=int(certificate.expected if certificate.expected is not None else len(modes)),
        shift=hub.sigma,
        levels=hub.levels,
        worst_residual=float(modes.residual.max(initial=0.0)),
        relative_rounding=hub.relative_rounding,
        omega=grid,
        difference=largest_singular_value(hub.weigh(H - small.response(grid))),
        hub_error=own,
        reference=_below(largest_singular_value(hub.weigh(H)), own),
    )


def _below(size: Real, own: Real) -> Real:
    """Lower bound of the full response's size: 0 where the hub knows nothing."""
    known = np.isfinite(own)
    return np.where(known, np.maximum(size - np.where(known, own, 0.0), 0.0), 0.0)


def _figures(
    promise: Guarantee,
    channels: Interface,
    hub: Hub,
    small: SmallSystem,
    grid: Real,
    threshold: float | None,
    pairs: bool,
) -> Guarantee:
    """Worst figures between the samples too; withdrawn where no supremum exists."""
    reason = _no_supremum(hub, small, promise.band)
    if reason:
        return replace(promise, holds=False, reason=reason)
    elastic = largest_singular_value(hub.weigh(hub.elastic().response(grid)))
    peak = float(np.max(_below(elastic, promise.hub_error), initial=0.0))
    threshold = _threshold(hub, peak) if threshold is None else threshold
    gap = Gap(hub=hub, small=diagonal(small))
    error, *rest = suprema(lambda l, r: gap.relative(l, r, threshold=threshold), grid)
    local = rest[0] if rest else None
    absolute = suprema(gap.per_output, grid) if hub.direct.size else ()
    name = _Namer(channels=channels, hub=hub, small=small)
    return replace(
        promise,
        peak=_figure(error, peak, "peak", name) if peak > 0 else None,
        local=None if local is None else _figure(local, 1.0, "local", name, threshold=threshold),
        absolute=tuple(_absolute(s, k, name) for k, s in enumerate(absolute)),
        pair_peak=_pairs(gap, hub, grid) if pairs and hub.direct.size else None,
        peak_reference=peak,
        threshold=threshold,
    )


def _no_supremum(hub: Hub, small: SmallSystem, band: tuple[float, float]) -> str:
    """Why the worst error over the band is infinite or unknown; "" if it is neither."""
    if not is_diagonal(small):
        return "the small model has coupled blocks: proved at the sampled frequencies only, not between them"
    terms = hub.terms
    if terms.order == 1:
        return ""
    bare = (terms.d == 0) & (terms.eta == 0) & (terms.x > 0) & (terms.x >= band[0] ** 2) & (terms.x <= band[1] ** 2)
    if np.any(bare[: hub.computed]):
        first = int(np.argmax(bare)) + 1
        return f"mode {first} is undamped and lies in the band: its response is infinite, and so is every error there"
    if band[1] ** 2 >= hub.x_c and np.isinf(hub.error(np.array([band[1]]))[0]):
        return "the band reaches past the counting point, where an undamped uncomputed mode may lie"
    return ""


def _threshold(hub: Hub, peak: float) -> float:
    return 1.0 if np.any(hub.resolutions != 1.0) else _FLOOR * peak


@dataclass(frozen=True, kw_only=True, eq=False)
class _Namer:
    """Names the pair that errs most at a frequency, among all or of one output."""

    channels: Interface
    hub: Hub
    small: SmallSystem

    def pair(self, omega: float, output: int | None = None) -> tuple[str, str] | None:
        w = np.array([omega])
        gap = np.abs(self.hub.response(w) - self.small.response(w)) + self.hub.entry_error(w)
        size = np.nan_to_num(np.abs(self.hub.weigh(gap))[0], nan=0.0)
        if size.size == 0:
            return None
        k = int(np.argmax(size.max(axis=1))) if output is None else output
        return self.channels.inputs[int(np.argmax(size[k]))].name, self.channels.outputs[k].name


def _figure(found: Supremum, reference: float, to: Any, name: _Namer, threshold: float | None = None) -> ErrorFigure:
    return ErrorFigure(
        value=found.value / reference,
        certainty="guaranteed",
        relative_to=to,
        pair=name.pair(found.at_omega),
        at_omega=found.at_omega,
        threshold=threshold,
    )


def _absolute(found: Supremum, k: int, name: _Namer) -> ErrorFigure:
    return ErrorFigure(
        value=found.value * float(name.hub.resolutions[k]),
        certainty="guaranteed",
        relative_to="absolute",
        unit=name.channels.outputs[k].unit,
        pair=name.pair(found.at_omega, k),
        at_omega=found.at_omega,
    )


def _pairs(gap: Gap, hub: Hub, grid: Real) -> Real:
    """Every pair's worst error over its own elastic peak (bounded from below), (p, m); nan where that is rounding."""
    shape = hub.direct.shape
    worst = np.array([s.value for s in suprema(gap.per_entry, grid, share=0.05)]).reshape(shape)
    own = np.abs(hub.weigh(hub.elastic().response(grid))) - hub.weigh(hub.entry_error(grid))
    peak = np.max(own, axis=0, initial=0.0)
    return np.asarray(np.divide(worst, peak, out=np.full(shape, np.nan), where=peak > 0))


def _spotted(
    promise: Guarantee,
    modes: Modes,
    hub: Hub,
    small: SmallSystem,
    kept: tuple[int, ...],
    full: FullResponse | None,
    solve: Solver | None,
    spots: int,
) -> Guarantee:
    checks: tuple[Any, ...] = ()
    if spots:
        places = spot_places(hub, modes, kept, promise.band, spots)
        checks = spot_checks(hub, small, places, solve if solve is not None else _verified(modes))
    reason = broken(checks)
    if full is not None and not reason:
        reason = broken(checked(hub, small, full, ["sample"] * len(full.omega)))
    if reason:
        return withdrawn(replace(promise, spot_checks=checks), reason)
    return replace(promise, spot_checks=checks)


def withdrawn(promise: Guarantee, reason: str) -> Guarantee:
    """The same without any guaranteed figure."""
    return replace(promise, holds=False, reason=reason, peak=None, local=None, absolute=(), pair_peak=None)


def _verified(modes: Modes) -> Solver:
    from modesieve.reduce.response.full import full_response

    model = modes.model
    if model is None:
        raise ChoiceError("spot checks need the full model", expected="modes with their model", got="modes alone")
    return lambda omega: full_response(model, omega, modes=modes)


def _nothing(modes: Modes, band: tuple[float, float], error: ModesieveError) -> Guarantee:
    reason = error.what if not error.got else f"{error.what}: {error.got}"
    none = np.zeros(0)
    return Guarantee(
        holds=False,
        reason=reason,
        formula="",
        band=band,
        x_c=0.0,
        modes_below=0,
        shift=0.0,
        levels=0,
        worst_residual=float(modes.residual.max(initial=0.0)),
        relative_rounding=0.0,
        omega=none,
        difference=none,
        hub_error=none,
        reference=none,
    )
