"""Response, error, error over kept count, time response and pole map."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from modesieve.io.figures.scale import Scale, positive, scale_of
from modesieve.io.figures.style import (
    BLUE,
    GREEN,
    INK,
    PURPLE,
    QUIET,
    REDUCED,
    VERMILION,
    band_window,
    caption,
    draw_as,
    draw_guaranteed,
    draw_measured,
    finish,
    new_figure,
    tolerance_line,
)
from modesieve.io.wording import pretty_unit
from modesieve.reduce.comparison.records import Comparison, Sweep, TimeResponse
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.truncation.records import Tolerance


def worst_pair(comparison: Comparison) -> tuple[int, int]:
    """Output and input of the pair that the local error is worst for, else the one with the largest response."""
    origin, named = comparison.modes.origin, comparison.checks[0].local_error.pair
    if named and named[0]:
        inputs, outputs = [c.name for c in origin.inputs], [c.name for c in origin.outputs]
        return outputs.index(named[1]), inputs.index(named[0])
    G = np.abs(origin.weigh(comparison.full.G))
    k, l = np.unravel_index(int(np.argmax(np.where(np.isfinite(G), G, 0.0).max(axis=0))), G.shape[1:])
    return int(k), int(l)


def pair_label(comparison: Comparison, k: int, l: int) -> str:
    """Output from input, with the unit of the transfer function."""
    out, into = comparison.modes.origin.outputs[k], comparison.modes.origin.inputs[l]
    unit = pretty_unit(out.unit) + (f" per {pretty_unit(into.unit)}" if into.unit else "") if out.unit else ""
    return f"{out.name} from {into.name}" + (f", {unit}" if unit else "")


def response_plate(comparison: Comparison, k: int, l: int, text: str) -> Figure:
    """Magnitude and phase of one pair, full and reduced."""
    figure, (top, bottom) = new_figure(2, (2.2, 1.0), (7.4, 5.4))
    scale, at = scale_of(comparison.modes, comparison.band), positive(comparison)
    x, G = scale.of(comparison.full.omega[at]), comparison.full.G[at, k, l]
    finish(top, x="", y=pair_label(comparison, k, l))
    finish(bottom, x=scale.label, y="phase, °", log_y=False)
    top.plot(x, np.abs(G), color=INK, linewidth=2.2, label="full")
    bottom.plot(x, np.degrees(np.angle(G)), color=INK, linewidth=2.0)
    for check, (color, dash) in zip(comparison.checks, REDUCED * 9, strict=False):
        R = check.G[at, k, l]
        top.plot(x, np.abs(R), color=color, linewidth=1.6, linestyle=dash, label=check.label)
        bottom.plot(x, np.degrees(np.angle(R)), color=color, linewidth=1.3, linestyle=dash)
    bottom.set_yticks([-180, -90, 0, 90, 180], ["−180", "−90", "0", "90", "180"])
    _frame([top, bottom], scale, comparison)
    top.legend(loc="lower left", bbox_to_anchor=(0, 1.0), ncols=4, borderaxespad=0.2)
    caption(figure, text)
    return figure


def _frame(axes: list[Axes], scale: Scale, comparison: Comparison) -> None:
    omega = comparison.full.omega[positive(comparison)]
    for one in axes:
        band_window(one, *scale.window(comparison.band, float(omega[0])))
        scale.orient(one)


def error_plate(comparison: Comparison, text: str) -> Figure:
    """Local and peak error of the largest singular value, and the worst phase error."""
    figure, (top, bottom) = new_figure(2, (2.2, 1.0), (7.4, 5.4))
    scale, at = scale_of(comparison.modes, comparison.band), positive(comparison)
    x = scale.of(comparison.full.omega[at])
    finish(top, x="", y="error, share of the full response there")
    finish(bottom, x=scale.label, y="worst phase error, °", log_y=False)
    for check, (color, _) in zip(comparison.checks, _colors(comparison), strict=False):
        local = np.asarray(check.local)[at]
        shown = local if np.isfinite(local).any() else np.asarray(check.sigma)[at] / comparison.reference_peak
        draw_measured(top, x, np.maximum(shown, 1e-16), color=color, label=f"{check.label}, {_certainty(check)}")
        bottom.plot(x, _worst_phase(check.phase[at]), color=color, linewidth=0.9)
        guarantee = check.small.guarantee
        if guarantee is not None and guarantee.holds:
            inside = guarantee.omega > 0
            bound = guarantee.upper[inside] / np.maximum(guarantee.reference[inside], guarantee.threshold or 1e-300)
            draw_guaranteed(top, scale.of(guarantee.omega[inside]), bound, color=color)
    choice = comparison.checks[0].small.choice
    if isinstance(choice, Tolerance) and choice.of == "local":
        tolerance_line(top, choice.value)
    _frame([top, bottom], scale, comparison)
    top.legend(loc="lower left", bbox_to_anchor=(0, 1.0), ncols=3, borderaxespad=0.2)
    caption(figure, text)
    return figure


def _colors(comparison: Comparison) -> Any:
    return ((PURPLE, None),) if len(comparison.checks) == 1 else REDUCED * 9


def _certainty(check: Any) -> str:
    return str(check.local_error.certainty)


def _worst_phase(phase: Any) -> Any:
    flat = np.abs(np.degrees(np.asarray(phase))).reshape(len(phase), -1)
    return np.where(np.isfinite(flat), flat, 0.0).max(axis=1, initial=0.0)


def count_plate(sweep: Sweep, comparison: Comparison, text: str) -> Figure:
    """Worst error in the band over the number of kept modes, for every kind of statics."""
    figure, (axes,) = new_figure()
    of = "local" if any(reference == "local" for _, reference in sweep.errors) else "peak"
    finish(axes, x=f"kept modes, in the order of {sweep.ranked_by}", y=f"worst error, {of}", log_x=False)
    curves = [(s, v) for (s, reference), v in sweep.errors.items() if reference == of]
    for (statics, values), color in zip(curves, (BLUE, VERMILION, GREEN), strict=False):
        good = np.isfinite(values)
        draw_as(sweep.certainty, axes, np.asarray(sweep.kept)[good], np.asarray(values)[good], color=color,
                label=f"{statics}, {sweep.certainty}")  # fmt: skip
    now = len(comparison.checks[0].small.kept)
    axes.axvline(now, color=INK, linewidth=1.0)
    axes.annotate("delivered", (now, 0.98), xycoords=("data", "axes fraction"), xytext=(4, 0), va="top",
                  textcoords="offset points", fontsize=7.5, color=QUIET)  # fmt: skip
    choice = comparison.checks[0].small.choice
    if isinstance(choice, Tolerance) and choice.of == of:
        tolerance_line(axes, choice.value)
    axes.legend(loc="lower left", bbox_to_anchor=(0, 1.0), ncols=3, borderaxespad=0.2)
    caption(figure, text)
    return figure


def time_plate(time: TimeResponse, comparison: Comparison, k: int, l: int, text: str) -> Figure:
    """Step or impulse response of one pair, the input at its amplitude."""
    figure, (axes,) = new_figure(size=(7.4, 3.8))
    tick, unit = next((t, u) for t, u in ((3600.0, "h"), (60.0, "min"), (1.0, "s")) if time.t[-1] >= 5 * t or t == 1.0)
    out, into = comparison.modes.origin.outputs[k], comparison.modes.origin.inputs[l]
    rate = "" if time.kind == "step" else "/s" if not out.unit else ""
    finish(axes, x=f"time, {unit}", y=f"{out.name}{', ' + pretty_unit(out.unit) if out.unit else ''}{rate}",
           log_x=False, log_y=False)  # fmt: skip
    dash = "solid" if time.certainty == "measured" else (0, (5, 3))
    axes.plot(
        time.t / tick, time.full[:, k, l], color=INK, linewidth=2.0, linestyle=dash, label=f"full, {time.certainty}"
    )
    for check, y, (color, style) in zip(comparison.checks, time.small, REDUCED * 9, strict=False):
        axes.plot(time.t / tick, y[:, k, l], color=color, linewidth=1.4, linestyle=style, label=check.label)
    axes.set_title(f"{time.kind} of {into.name}", loc="right", fontsize=8, color=QUIET)
    axes.legend(loc="lower left", bbox_to_anchor=(0, 1.0), ncols=3, borderaxespad=0.2)
    caption(figure, text)
    return figure


def pole_plate(modes: Modes, kept: tuple[int, ...], text: str) -> Figure:
    """Poles in the upper half plane (structures), decay rates over the mode number (thermal)."""
    figure, (axes,) = new_figure(size=(7.4, 4.0))
    inside = np.isin(modes.numbers, kept)
    if modes.origin.kind == "thermal":
        x, y = modes.numbers.astype(float), modes.decay_rate
        finish(axes, x="mode number", y="decay rate, 1/s", log_x=False, log_y=bool(np.all(y > 0)))
    else:
        x, y = modes.eigenvalue.real, modes.eigenvalue.imag / (2 * np.pi)
        finish(axes, x="real part, 1/s", y="imaginary part over 2π, Hz", log_x=False, log_y=False)
    for mask, name, face in ((inside, "kept", BLUE), (~inside, "dropped", "white")):
        axes.plot(x[mask], y[mask], "o", color=BLUE if name == "kept" else QUIET, markerfacecolor=face, label=name)
    axes.legend(loc="lower left", bbox_to_anchor=(0, 1.0), ncols=2, borderaxespad=0.2)
    caption(figure, text)
    return figure
