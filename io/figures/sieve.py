"""The sieve chart: every mode is a grain, the sieve line cuts through."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from modesieve.io.figures.scale import Scale, scale_of
from modesieve.io.figures.style import BLUE, INK, QUIET, band_window, caption, finish, new_figure
from modesieve.reduce.modal.records import Ranking

FLOOR = 1e-6


def sieve_chart(ranking: Ranking, kept: tuple[int, ...], band: tuple[float, float], text: str) -> Figure:
    """Grains over frequency or time constant, height the share of the largest by the ranking's measure."""
    figure, (axes,) = new_figure()
    scale = scale_of(ranking.modes, band)
    finish(axes, x=scale.label, y=f"{ranking.by}, share of the largest")
    grains = _grains(ranking, set(kept), scale)
    _limits(axes, grains, scale, band, ranking)
    for g in grains:
        _draw(axes, g)
    level = _level(ranking, set(kept))
    if level is not None:
        axes.axhline(level, color=BLUE, linewidth=2.0, zorder=4)
        axes.annotate("sieve line", (0.0, level), xycoords=("axes fraction", "data"), xytext=(4, 3), ha="left",
                      textcoords="offset points", fontsize=7.5, color=BLUE)  # fmt: skip
    for filled, name in ((True, "kept"), (False, "dropped")):
        axes.plot([], [], "o", color=BLUE if filled else QUIET, markerfacecolor=BLUE if filled else "none", label=name)
    axes.legend(loc="lower left", bbox_to_anchor=(0, 1.0), ncols=3, borderaxespad=0.2)
    caption(figure, text)
    return figure


def shares(ranking: Ranking) -> Any:
    """The measure of every mode as a share of the largest finite one; undefined values 0, infinite ones 1."""
    values = np.asarray(ranking.measures[ranking.by], dtype=float)
    finite = values[np.isfinite(values)]
    top = float(finite.max(initial=0.0)) or 1.0
    return np.where(np.isinf(values), 1.0, np.nan_to_num(values / top, nan=0.0))


def _grains(ranking: Ranking, kept: set[int], scale: Scale) -> list[dict[str, Any]]:
    modes, height = ranking.modes, shares(ranking)
    grains, seen = [], set()
    for i in range(len(modes)):
        group = modes.cluster[i] or (i + 1,)
        together = tuple(n for n in group if (n in kept) == (i + 1 in kept))
        if together in seen:
            continue
        seen.add(together)
        rate = modes.decay_rate[i] if scale.thermal else modes.omega[i]
        grains.append(
            {
                "x": float(scale.of(rate)) if rate > 0 else None,
                "y": max(float(height[np.array(together) - 1].max()), FLOOR),
                "kept": i + 1 in kept,
                "many": len(together),
                "why": modes.always_kept[i],
            }
        )
    return grains


def _level(ranking: Ranking, kept: set[int]) -> float | None:
    """Between the lowest kept and the highest dropped grain; None where no line separates them."""
    height = shares(ranking)
    loose = [n for n in ranking.modes.numbers if not ranking.modes.always_kept[n - 1]]
    above = [height[n - 1] for n in loose if n in kept]
    below = [height[n - 1] for n in loose if n not in kept]
    low, high = max(below, default=0.0), min(above, default=1.2)
    if low > high:
        return None
    return float(np.sqrt(max(low, FLOOR / 2) * max(high, FLOOR / 2))) if low > 0 else float(0.7 * high)


def _limits(
    axes: Axes, grains: list[dict[str, Any]], scale: Scale, band: tuple[float, float], ranking: Ranking
) -> None:
    xs = [g["x"] for g in grains if g["x"]]
    edge = ranking.modes.certificate.below_omega
    ends = [*xs, float(scale.of(band[1])), *([float(scale.of(band[0]))] if band[0] > 0 else [])]
    ends += [float(scale.of(edge))] if edge else []
    low, high = min(ends) / 1.35, max(ends) * 1.35
    axes.set_xlim((high, low) if scale.thermal else (low, high))
    axes.set_ylim(FLOOR / 1.5, 2.5)
    left = scale.of(band[0]) if band[0] > 0 else (high if scale.thermal else low)
    band_window(axes, float(left), float(scale.of(band[1])))
    if edge:
        axes.axvline(float(scale.of(edge)), color=INK, linewidth=1.0, linestyle=(0, (5, 3)))
        axes.annotate("counted to here", (float(scale.of(edge)), 0.98), xycoords=("data", "axes fraction"),
                      xytext=(-3, 0), textcoords="offset points", rotation=90, ha="right", va="top", fontsize=7.5,
                      color=QUIET)  # fmt: skip


def _draw(axes: Axes, grain: dict[str, Any]) -> None:
    if grain["why"] and grain["x"] is None:
        axes.plot(0.012, grain["y"], "s", color=INK, markersize=6, transform=axes.get_yaxis_transform(), zorder=5)
        axes.annotate(grain["why"] + (f" ({grain['many']})" if grain["many"] > 1 else ""), (0.012, grain["y"]),
                      xycoords=("axes fraction", "data"), xytext=(7, 4), textcoords="offset points",
                      fontsize=7.5)  # fmt: skip
        return
    if grain["x"] is None:
        return
    color = BLUE if grain["kept"] else QUIET
    face = BLUE if grain["kept"] else "white"
    axes.plot(grain["x"], grain["y"], "o", color=color, markerfacecolor=face, markersize=6, zorder=5, clip_on=False)
    if grain["many"] > 1 or grain["why"]:
        axes.annotate(grain["why"] or str(grain["many"]), (grain["x"], grain["y"]), xytext=(4, 4),
                      textcoords="offset points", fontsize=7.5, color=QUIET)  # fmt: skip
