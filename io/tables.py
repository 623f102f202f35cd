"""Small models, comparisons and runs as terminal tables, in the words of every report."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from rich.console import Console, RenderableType

from modesieve.io.modes_tables import origin_words
from modesieve.io.terminal import Column, bullets, labelled, table
from modesieve.io.wording import format_number
from modesieve.reduce.comparison.records import Check, Comparison, Sweep
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.report import runs
from modesieve.reduce.truncation.records import ReducedModel

if TYPE_CHECKING:
    from modesieve.io.run import Written
    from modesieve.io.verdict import Verdict


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


def cautions_report(console: Console, verdict: Verdict) -> list[Any]:
    """The cautions, one behind a mark each."""
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
