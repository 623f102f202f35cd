"""`modesieve modes MODEL.h5`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from modesieve.io import load_model, save
from modesieve.io.choices import band_of
from modesieve.io.commands.options import FILE, band_option, by_option, json_option, model_argument, writable
from modesieve.io.json_output import dumps, modes_object
from modesieve.io.modes_tables import effective_mass_table, modes_head, modes_table
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.terminal import bullets, screen, show
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import MEASURES, rank, unknown_measure
from modesieve.reduce.modal.records import Modes, Ranking


@click.command()
@model_argument
@band_option
@click.option("--count", type=click.IntRange(min=1), metavar="N", help="At least the N lowest modes.")
@by_option
@click.option("-o", "output", type=FILE, metavar="MODES.h5", help="Write the modes for later use.")
@click.option("--limit", type=click.IntRange(min=1), default=40, show_default=True, help="Rows to show.")
@json_option
def modes(
    model_file: Path,
    band: tuple[str, str] | None,
    count: int | None,
    by: str,
    output: Path | None,
    limit: int,
    as_json: bool,
) -> None:
    """Compute, count and rank the modes of a model.

    Every measure is shown as a share (in %) of the largest mode's; a cluster of equal frequencies is one row.
    """
    if band and count is not None:
        raise click.UsageError("give --band or --count, not both")
    if by not in MEASURES:
        raise unknown_measure(by)
    writable(output)
    model = load_model(model_file)
    around = band_of(*band, model, where="--band") if band else None
    with ProgressDisplay() as progress:
        found = find_modes(model, around, count=count, progress=progress)
    ranking = ranked(found, by, around)
    if output is not None:
        save(output, found)
    if as_json:
        click.echo(dumps(modes_object(ranking)), nl=False)
    else:
        _print(ranking, limit, output)


def ranked(found: Modes, by: str, band: tuple[float, float] | None) -> Ranking:
    """The ranking; without channels, where gains mean nothing, by decay unless another measure was asked for."""
    if by == "band-share" and 0 in (found.origin.m, found.origin.p):
        by = "decay"
    return rank(found, by=by, band=band)


def _print(ranking: Ranking, limit: int, output: Path | None) -> None:
    console = screen()
    parts: list[Any] = [modes_head(console, ranking), "", modes_table(console, ranking, limit)]
    if len(ranking.modes) > limit:
        parts.append(f"... and {len(ranking.modes) - limit} more (--limit N, or --json)")
    mass = effective_mass_table(console, ranking)
    if mass is not None:
        parts += ["", mass]
    notes = [*ranking.modes.warnings, *ranking.warnings]
    if notes:
        parts += ["", "Notes", bullets(console, notes)]
    if output is not None:
        parts += ["", f"wrote {output}"]
    show(console, *parts)
