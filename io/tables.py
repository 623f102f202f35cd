"""Records as terminal tables, in the words and the order of every report."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
from rich.console import Console, RenderableType
from rich.text import Text

from modesieve.io.terminal import bar, bullets, clean, labelled, on_point, table
from modesieve.io.wording import format_frequency, format_number, format_quantity, pretty_unit
from modesieve.reduce.comparison.records import Check, Comparison, Sweep
from modesieve.reduce.inspection import Facts
from modesieve.reduce.modal.rank import MEASURES, share
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.report import runs
from modesieve.reduce.truncation.records import ReducedModel

if TYPE_CHECKING:
    from modesieve.io.run import Written
    from modesieve.io.verdict import Verdict


# ---- modes -----------------------------------------------------------------------------------------------------------

_SIDE_BY_SIDE = ("coupling", "peak-share", "band-share", "static-share", "energy-share", "balanced-gain", "decay")


Column: TypeAlias = tuple[str, Sequence[str]]


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


# ---- small models and comparison -------------------------------------------------------------------------------------


def reduced_report(console: Console, small: ReducedModel) -> RenderableType:
    """What was kept and how wrong it is."""
    kept = f"{len(small.kept)} of {len(small.modes)} computed modes ({runs(small.kept)}), " if small.kept else ""
    rows = [
        ("model", origin_words(small.modes)),
        ("kept", f"{kept}{small.states} states"),
        ("ranked by", small.ranked_by),
        ("statics", small.statics + (f", {small.levels} tail levels" if small.levels else "")),
        ("band", band_words(small.band, small.modes)),
        ("error", str(small.error) if small.error is not None else "not measured"),
        ("guarantee", guarantee_words(small)),
    ]
    return labelled(console, [*rows, *(("note", note) for note in small.notes)])


def guarantee_words(small: ReducedModel) -> str:
    """What is guaranteed over the band, or why nothing is; "" where nobody asked."""
    found = small.guarantee
    if found is None:
        return ""
    if not found.holds:
        return f"none: {found.reason}"
    figures = [figure for figure in (found.local, found.peak) if figure is not None and figure.defined]
    sizes = ", ".join(f"{figure.size} of {figure.relative_to}" for figure in figures)
    passed = sum(spot.passed for spot in found.spot_checks)
    return f"at most {sizes} at every frequency; {passed} of {len(found.spot_checks)} spot checks passed"


def band_words(band: tuple[float, float] | None, modes: Modes) -> str:
    """The band as the user thinks of it."""
    from modesieve.io.verdict import band_end

    return "" if band is None else " to ".join(band_end(w, modes.origin.kind) for w in band)


def comparison_head(console: Console, comparison: Comparison) -> RenderableType:
    """With what the small models were compared, and how well that is known."""
    return labelled(
        console,
        [
            ("full model", origin_words(comparison.modes)),
            ("band", band_words(comparison.band, comparison.modes)),
            (
                "frequencies",
                f"{comparison.frequency_count}, backward error of the full solution at most "
                f"{format_number(comparison.worst_backward_error, 2)}",
            ),
            ("threshold", comparison.threshold_note),
        ],
    )


def checks_table(console: Console, comparison: Comparison, files: Sequence[str] = ()) -> RenderableType:
    """One line per small model."""
    checks = comparison.checks
    names = list(files) if files else [check.label for check in checks]
    columns: list[Column] = [
        ("small model", names),
        ("states", [str(check.small.states) for check in checks]),
        ("% of peak", [_figure(check.peak_error.value) for check in checks]),
        ("% of local", [_figure(check.local_error.value) for check in checks]),
        ("phase deg", [_figure(np.degrees(check.worst_phase) / 100) for check in checks]),
        ("% at 0 Hz", [_dc(check) for check in checks]),
        ("certainty", [check.certainty for check in checks]),
    ]
    return table(console, columns, left=(0, 6))


def _figure(value: float) -> str:
    return format_number(100 * value)


def _dc(check: Check) -> str:
    if check.dc_error is None:
        return "none"
    return "0" if check.dc_error < 1e-12 else format_number(100 * check.dc_error)


def outputs_table(console: Console, verdict: Verdict) -> RenderableType:
    """Worst error per output in its unit, all inputs at their amplitudes."""
    lines = verdict.outputs
    columns = [
        ("output", [line.output for line in lines]),
        ("largest response", [line.response for line in lines]),
        ("worst error", [line.error for line in lines]),
        ("certainty", [line.certainty for line in lines]),
    ]
    if any(line.step for line in lines):
        columns.append(("after switching all on", [line.step for line in lines]))
        columns.append(("certainty", [line.step_certainty for line in lines]))
    return table(console, columns, "Per output, all inputs at their amplitudes", left=(0, 3, 5))


def pairs_table(console: Console, comparison: Comparison, check: Check) -> RenderableType | None:
    """Worst error of every input-output pair in percent of that pair's own peak; None where it would not fit."""
    origin = comparison.modes.origin
    counts = np.abs(origin.weigh(comparison.full.G)).max(axis=0, initial=0.0) >= comparison.threshold
    if origin.m * origin.p <= 1 or origin.m > 6 or origin.p > 20:
        return None
    columns: list[Column] = [("to \\ from", [c.name for c in origin.outputs])]
    for l, channel in enumerate(origin.inputs):
        shown = zip(check.pair_peak[:, l], counts[:, l], strict=True)
        columns.append((channel.name, [_figure(float(v)) if counted else "-" for v, counted in shown]))
    title = "Worst error of every pair, % of the pair's own peak"
    return table(console, columns, title + ("" if counts.all() else "; -: never above the threshold"))


def sweep_table(console: Console, sweep: Sweep, kept: int, limit: int = 14) -> RenderableType:
    """Error over the number of kept modes, thinned out around the count that was chosen."""
    picks = _picked(sweep.kept, kept, limit)
    columns = [("kept modes", [f"{int(sweep.kept[i])}{' <' if sweep.kept[i] == kept else '  '}" for i in picks])]
    columns.append(("states", [str(int(sweep.states[i])) for i in picks]))
    for (statics, of), values in sweep.errors.items():
        columns.append((f"{statics}: {of}", [_figure(float(values[i])) for i in picks]))
    return table(console, columns, f"Error in % over kept count, by {sweep.ranked_by}, {sweep.certainty}", left=())


def first_kept(ranking: Ranking, kept: Sequence[int]) -> int:
    """How many modes are kept if they are the first of the ranking, else 0: the sweep keeps in rank order only."""
    return len(kept) if set(kept) == {int(i) for i in ranking.order[: len(kept)]} else 0


def _picked(counts: Any, kept: int, limit: int) -> list[int]:
    """Indices to show: spread over the whole curve in equal ratios, and the neighbours of the chosen count."""
    last = len(counts) - 1
    at = int(np.searchsorted(counts, kept))
    near = {i for i in (at - 1, at, at + 1) if 0 <= i <= last} if kept else set[int]()
    spread = np.geomspace(1, last + 1, max(limit - len(near), 2)).round().astype(int) - 1
    return sorted(near | {int(i) for i in spread})


def verdict_report(console: Console, verdict: Verdict) -> list[Any]:
    """The verdict and its cautions."""
    return [Text(clean(verdict.sentence, console), style="bold"), "", *cautions_report(console, verdict)]


def cautions_report(console: Console, verdict: Verdict) -> list[Any]:
    return ["Cautions", bullets(console, verdict.cautions)]


def written_table(console: Console, written: Sequence[Written]) -> RenderableType:
    """The files that a run left and what each is for; the figures as one row."""
    folder = Path(os.path.commonpath([one.path.parent for one in written]))
    plates = [one for one in written if one.path.parent.name == "figures"]
    rows = [(str(one.path.relative_to(folder)), one.purpose) for one in written if one not in plates]
    if plates:
        within = plates[0].path.parent.relative_to(folder)
        kinds = sorted({one.path.suffix for one in plates})
        names = dict.fromkeys(one.purpose for one in plates)
        rows.append((", ".join(str(within / f"*{kind}") for kind in kinds), "figures: " + ", ".join(names)))
    columns: list[Column] = [("file", [name for name, _ in rows]), ("holds", [purpose for _, purpose in rows])]
    return table(console, columns, f"Written into {folder}", left=(0, 1), fold=(1,))


# ---- inspection ------------------------------------------------------------------------------------------------------


def facts_report(console: Console, facts: Facts) -> list[Any]:
    """What a model file holds, whether it can be used, and what would be done."""
    noun = "states" if facts.kind == "state space" else "unknowns"
    mass = pretty_unit(facts.units.mass) or "in the matrices' mass unit"
    rows = [
        ("model", facts.title),
        ("file", facts.source),
        ("kind", f"{facts.kind}, {facts.n} {noun}, {facts.inputs} inputs, {facts.outputs} outputs"),
        ("damping", facts.damping),
        ("units", ", ".join(f"{name} {text}" for name, text in vars(facts.units).items() if text) or "not stated"),
        ("massless", f"{facts.massless} {noun}" if facts.massless else ""),
        ("parts", _parts_words(facts, noun)),
        ("empty rows", "; ".join(facts.zero_rows[:6]) + (" ..." if len(facts.zero_rows) > 6 else "")),
        ("total mass", "" if facts.total_mass is None else _total_mass(facts.total_mass, mass)),
        ("capacity", "" if facts.capacity is None else f"{format_number(facts.capacity, 4)} in all"),
    ]
    names = list(facts.nonzeros)
    matrices: list[Column] = [
        ("matrix", names),
        ("nonzeros", [str(facts.nonzeros[name]) for name in names]),
        ("asymmetry", [format_number(facts.asymmetry[name], 2) if name in facts.asymmetry else "" for name in names]),
        ("definiteness", [facts.definiteness.get(name, "") for name in names]),
    ]
    out: list[Any] = [labelled(console, rows), "", table(console, matrices, left=(0, 3))]
    if facts.problems:
        out += ["", "Problems", bullets(console, facts.problems)]
    return [*out, "", "Next", bullets(console, facts.next_steps)]


def _parts_words(facts: Facts, noun: str) -> str:
    if len(facts.parts) <= 1:
        return "one, connected"
    sizes = ", ".join(str(size) for size in facts.parts[:6]) + (" ..." if len(facts.parts) > 6 else "")
    return f"{len(facts.parts)} that nothing connects, of {sizes} {noun}"


def _total_mass(values: Any, unit: str) -> str:
    x, y, z = (format_number(float(v), 4) for v in values)
    return f"{x} {unit}" if x == y == z else f"x {x}, y {y}, z {z} {unit}"
