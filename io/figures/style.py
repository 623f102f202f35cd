"""The visual language: colours, textures of certainty, axes with units, captions. No pyplot, no global state."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from modesieve.io.wording import format_number

INK, QUIET, LINE = "#1a1a1a", "#6b6f73", "#dddddd"
#: Okabe-Ito, safe for colour-blind readers; reduced models in this order, each with its own dash.
BLUE, VERMILION, GREEN, PURPLE = "#0072B2", "#D55E00", "#009E73", "#CC79A7"
REDUCED = ((BLUE, (0, (6, 2))), (VERMILION, (0, (2, 1.2))), (GREEN, (0, (6, 1.5, 1.2, 1.5))))
SIZE = (7.4, 4.6)

SETTINGS: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.size": 9,
    "axes.edgecolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "grid.color": LINE,
    "grid.linewidth": 0.5,
    "legend.frameon": False,
    "legend.fontsize": 8,
    "svg.fonttype": "path",
    "svg.hashsalt": "modesieve",
    "pdf.fonttype": 42,
}


@contextmanager
def styled() -> Iterator[None]:
    """The settings of every plate, for the time of drawing."""
    settings: Any = SETTINGS  # matplotlib's own type lists every key
    with mpl.rc_context(settings):
        yield


def new_figure(rows: int = 1, heights: tuple[float, ...] = (1.0,), size: tuple[float, float] = SIZE) -> Any:
    """A figure and its stacked axes, sharing their x."""
    figure = Figure(figsize=size, layout="constrained")
    axes = figure.subplots(rows, 1, sharex=True, squeeze=False, height_ratios=list(heights))[:, 0]
    return figure, list(axes)


def caption(figure: Figure, text: str) -> None:
    """The line under the axes by which a picture still tells its story when it is cut out of a report."""
    figure.supxlabel(text, x=0.01, ha="left", fontsize=7.5, color=QUIET, wrap=True)


def finish(axes: Axes, *, x: str, y: str, log_x: bool = True, log_y: bool = True) -> None:
    """Labels, logarithmic axes with plain numbers, a quiet grid."""
    axes.set_xlabel(x)
    axes.set_ylabel(y)
    axes.grid(True, which="major")
    axes.set_axisbelow(True)
    if log_x:
        axes.set_xscale("log")
        plain_log(axes.xaxis)
    if log_y:
        axes.set_yscale("log")
        axes.yaxis.set_minor_formatter(FuncFormatter(lambda value, _: _between(axes, value)))
    else:
        axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: format_number(value, 4)))


def _between(axes: Axes, value: float) -> str:
    """2 and 5 between the decades get a number where hardly a decade is in view."""
    low, high = axes.get_ylim()
    leading = f"{value:.0e}"[0]
    return format_number(value, 3) if high < 30 * low and leading in "25" else ""


def plain_log(axis: Any) -> None:
    """Decades, and 2 and 5 between them, as plain numbers."""
    axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0), numticks=12))
    axis.set_major_formatter(FuncFormatter(lambda value, _: format_number(value, 3)))
    axis.set_minor_formatter(NullFormatter())


def band_window(axes: Axes, low: float, high: float) -> None:
    """The band of interest: a pale window that nobody can drag."""
    axes.axvspan(low, high, color=INK, alpha=0.08, linewidth=0, zorder=0)


# ---- three certainties, three textures -------------------------------------------------------------------------------


def draw_guaranteed(axes: Axes, x: Any, y: Any, *, color: str = PURPLE, label: str = "guaranteed") -> None:
    """A filled region: the error cannot be above its edge."""
    bottom = axes.get_ylim()[0] if axes.get_yscale() == "log" else 0.0
    axes.fill_between(x, bottom, y, color=color, alpha=0.25, linewidth=0, zorder=1, label=label)
    axes.plot(x, y, color=color, linewidth=1.6, zorder=2)


def draw_measured(axes: Axes, x: Any, y: Any, *, color: str = PURPLE, label: str = "measured") -> None:
    """Points on a thin line: only where it was measured."""
    axes.plot(x, y, color=color, linewidth=0.6, marker="o", markersize=2.4, label=label, zorder=3)


def draw_estimated(axes: Axes, x: Any, y: Any, *, color: str = PURPLE, label: str = "estimated") -> None:
    """An open dashed line, never filled."""
    axes.plot(x, y, color=color, linewidth=1.2, linestyle=(0, (5, 3)), label=label, zorder=3)


def draw_as(certainty: str, axes: Axes, x: Any, y: Any, *, color: str, label: str) -> None:
    """The texture that says the certainty."""
    draw = {"guaranteed": draw_guaranteed, "measured": draw_measured, "estimated": draw_estimated}[certainty]
    draw(axes, x, y, color=color, label=label)


def tolerance_line(axes: Axes, value: float) -> None:
    """The asked-for tolerance, with its name at the right edge."""
    axes.axhline(value, color=VERMILION, linewidth=1.0, linestyle=(0, (8, 2, 1.5, 2)), zorder=2)
    axes.annotate(
        "tolerance",
        (1.0, value),
        xycoords=("axes fraction", "data"),
        xytext=(-2, 2),
        textcoords="offset points",
        ha="right",
        fontsize=7.5,
        color=VERMILION,
    )
