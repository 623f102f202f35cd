"""The report of a run, in the order of every report: verdict, sieve, errors, kept count, cautions."""

from __future__ import annotations

import io
from typing import Any

from rich.console import Console

from modesieve.io.modes_tables import modes_head, modes_table
from modesieve.io.run import Result
from modesieve.io.tables import (
    cautions_report,
    checks_table,
    comparison_head,
    first_kept,
    guarantee_words,
    outputs_table,
    pairs_table,
    sweep_table,
)
from modesieve.io.terminal import bullets, labelled, screen, show
from modesieve.reduce.truncation.records import ReducedModel


def run_report(console: Console, result: Result) -> list[Any]:
    """The parts of the report, for `show`."""
    comparison, small, verdict = result.comparison, result.reduced, result.verdict
    check = comparison.checks[0]
    pairs = pairs_table(console, comparison, check)
    parts: list[Any] = [
        verdict.sentence,
        "",
        outputs_table(console, verdict),
        "",
        modes_head(console, result.ranking),
        "",
        modes_table(console, result.ranking, limit=max(12, min(30, len(small.kept) + 4)), kept=small.kept),
        "",
        comparison_head(console, comparison),
        "",
        checks_table(console, comparison),
        *guarantee_report(console, small),
    ]
    if pairs is not None:
        parts += ["", pairs]
    if comparison.sweep is not None:
        parts += ["", sweep_table(console, comparison.sweep, first_kept(result.ranking, small.kept))]
    notes = report_notes(result)
    if notes:
        parts += ["", "Notes", bullets(console, notes)]
    return [*parts, "", *cautions_report(console, verdict)]


def report_notes(result: Result) -> list[str]:
    """What was decided on the way; what the report says elsewhere is left out."""
    said = {result.comparison.threshold_note, *result.verdict.cautions}
    return [note for note in dict.fromkeys((*result.ranking.warnings, *result.reduced.notes)) if note not in said]


def guarantee_report(console: Console, small: ReducedModel) -> list[Any]:
    """The guarantee in a line of its own."""
    words = guarantee_words(small)
    return ["", labelled(console, [("guarantee", words)])] if words else []


def run_text(result: Result) -> str:
    """The report as plain text, as it is piped."""
    stream = io.StringIO()
    console = screen(stream)
    show(console, *run_report(console, result))
    return stream.getvalue()
