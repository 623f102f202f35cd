"""Modes on a terminal: what was computed, in rank order, every measure beside the others."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from rich.console import Console, RenderableType

from modesieve.io.terminal import Column, bar, labelled, on_point, table
from modesieve.io.wording import format_frequency, format_number, format_quantity
from modesieve.reduce.modal.rank import MEASURES, share
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.report import runs

_SIDE_BY_SIDE = ("coupling", "peak-share", "band-share", "static-share", "energy-share", "balanced-gain", "decay")


def certificate_words(modes: Modes) -> str:
    """Whether a mode may be missing, in words."""
    certificate = modes.certificate
    match certificate.complete:
        case "all":
            return "complete: every mode of the model is known"
        case "counted":
            return (
                f"complete below {rate_words(certificate.below_omega or 0.0, modes)} by {certificate.reason or 'count'}"
            )
    return f"not proven complete: {certificate.reason or 'not counted'}"


def rate_words(omega: float, modes: Modes) -> str:
    """A frequency, or the time constant of a thermal model's decay rate."""
    if modes.origin.kind == "thermal":
        return f"a time constant of {format_quantity(1 / omega, 's')}" if omega > 0 else "steady state"
    return format_frequency(omega)


def modes_head(console: Console, ranking: Ranking) -> RenderableType:
    """What was computed, and how it is ranked."""
    modes = ranking.modes
    return labelled(
        console,
        [
            ("model", origin_words(modes)),
            ("damping", modes.origin.damping),
            ("modes", f"{len(modes)} computed, {certificate_words(modes)}"),
            ("solver", modes.solver),
            ("residual", f"at most {format_number(float(modes.residual.max(initial=0.0)))}"),
            ("ranked by", f"{ranking.by} ({MEASURES.get(ranking.by, '')})"),
        ],
    )


def origin_words(modes: Modes) -> str:
    """Title, kind and size of the full model."""
    origin = modes.origin
    noun = "states" if origin.kind == "state space" else "unknowns"
    channels = f"{origin.m} input{'s' * (origin.m != 1)}, {origin.p} output{'s' * (origin.p != 1)}"
    return f"{origin.title + ', ' if origin.title else ''}{origin.kind}, {origin.n} {noun}, {channels}"


def modes_table(console: Console, ranking: Ranking, limit: int = 40, kept: Sequence[int] = ()) -> RenderableType:
    """Modes in rank order, a cluster as one row, every measure as a share of its largest."""
    modes = ranking.modes
    rows = cluster_rows(ranking)[:limit]
    lead = [row[0] - 1 for row in rows]
    columns: list[Column] = [("mode", [_numbers(row) for row in rows])]
    if kept:
        columns.insert(0, ("kept", [_kept_mark(row, kept) for row in rows]))
    columns.append(_speed_column(modes, lead))
    if modes.origin.kind != "thermal":
        columns.append(("damping %", [_percent(float(modes.damping_ratio[i])) for i in lead]))
    columns.append((ranking.by, _bars(ranking, rows)))
    last: Column = ("", [modes.always_kept[i] for i in lead])
    columns = [*_fitting(columns, last, _side_columns(ranking, rows), console.width), last]
    left = (0, 1, len(columns) - 1) if kept else (0, len(columns) - 1)
    return table(console, columns, "Modes in rank order, shares in % of the largest", left=left)


def _bars(ranking: Ranking, rows: Sequence[tuple[int, ...]]) -> list[str]:
    """The ranking measure: a bar and its number."""
    best = _best_shares(ranking, ranking.by, rows)
    if ranking.by == "decay":
        times = on_point([format_number(float(v), 3) for v in best])
        return [f"{text} s {bar(float(v))}" for text, v in zip(times, share(best), strict=True)]
    numbers = on_point([_short_share(float(v)) for v in best])
    return [f"{text} {bar(float(v))}" for text, v in zip(numbers, best, strict=True)]


def _side_columns(ranking: Ranking, rows: Sequence[tuple[int, ...]]) -> list[Column]:
    """The other measures, for comparison."""
    return [
        (
            name.replace("-share", "").replace("balanced-gain", "balanced"),
            [_short_share(float(v)) for v in _best_shares(ranking, name, rows)],
        )
        for name in _side_by_side(ranking)
    ]


def _fitting(columns: list[Column], last: Column, more: list[Column], width: int) -> list[Column]:
    """``columns`` and as many of ``more`` as fit beside ``last``."""
    left = width - sum(_width(column) for column in (*columns, last))
    out = list(columns)
    for column in more:
        left -= _width(column)
        if left < 0:
            break
        out.append(column)
    return out


def _width(column: Column) -> int:
    header, cells = column
    return max([len(header), *(len(cell) for cell in on_point(cells))]) + 2


def cluster_rows(ranking: Ranking) -> list[tuple[int, ...]]:
    """Mode numbers in rank order; members of a cluster stand together where the first of them ranks."""
    rows, placed = [], set[int]()
    for number in (int(i) for i in ranking.order):
        if number not in placed:
            members = (number, *(i for i in ranking.modes.cluster[number - 1] if i != number))
            placed.update(members)
            rows.append(members)
    return rows


def _numbers(row: tuple[int, ...]) -> str:
    low, high = min(row), max(row)
    if len(row) > 1 and high - low + 1 == len(row):
        return f"{low}-{high}"
    return runs(sorted(row))


def _kept_mark(row: tuple[int, ...], kept: Sequence[int]) -> str:
    count = sum(i in kept for i in row)
    if count in (0, len(row)):
        return "kept" if count else ""
    return f"{count} of {len(row)}"


def _speed_column(modes: Modes, lead: list[int]) -> Column:
    if modes.origin.kind == "thermal":
        return "time constant s", [format_number(float(modes.time_constant[i]), 4) for i in lead]
    return "frequency Hz", [format_number(float(modes.frequency_hz[i]), 4) for i in lead]


def _best_shares(ranking: Ranking, name: str, rows: Sequence[tuple[int, ...]]) -> Any:
    """Largest share of each row's members, nan where undefined."""
    shares = ranking.measures[name] if name == "decay" else share(ranking.measures[name])
    picked = [[float(shares[i - 1]) for i in row] for row in rows]
    return np.array([max((v for v in one if not np.isnan(v)), default=np.nan) for one in picked])


def _side_by_side(ranking: Ranking) -> list[str]:
    known = [n for n in _SIDE_BY_SIDE if n in ranking.measures and np.isfinite(ranking.measures[n]).any()]
    return [n for n in known if n not in (ranking.by, "decay")][:5]


def _short_share(value: float) -> str:
    """A share in percent, short enough for a column."""
    if np.isnan(value):
        return "-"
    if np.isinf(value):
        return "inf"
    if value and value < 1e-5:
        return f"{100 * value:.0e}".replace("e-0", "e-")
    return f"{100 * value:.3f}" if value < 0.01 else f"{100 * value:.1f}"


def _percent(value: float) -> str:
    return "-" if np.isnan(value) else format_number(100 * value)


def effective_mass_table(console: Console, ranking: Ranking, limit: int = 12) -> RenderableType | None:
    """Effective modal mass as a share of the total with its cumulative sum, ascending; None without directions."""
    modes = ranking.modes
    if modes.effective_mass is None or modes.total_mass is None or not np.any(modes.total_mass > 0):
        return None
    total = np.where(modes.total_mass > 0, modes.total_mass, np.nan)
    shares = 100 * modes.effective_mass / total
    sums = np.cumsum(shares, axis=0)
    picks = np.unique(np.argsort(-np.nan_to_num(shares).max(axis=1), kind="stable")[:limit])
    columns: list[Column] = [("mode", [str(i + 1) for i in picks]), _speed_column(modes, [int(i) for i in picks])]
    for axis, name in enumerate("xyz"):
        columns.append((f"{name} %", [_mass(float(shares[i, axis])) for i in picks]))
        columns.append((f"sum {name} %", [_mass(float(sums[i, axis])) for i in picks]))
    return table(console, columns, f"Effective mass: the {len(picks)} largest, sums over all {len(modes)} modes")


def _mass(value: float) -> str:
    return "-" if np.isnan(value) else f"{value:.2f}"
