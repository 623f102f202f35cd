"""`modesieve inspect FILE.h5`."""

from __future__ import annotations

from pathlib import Path

import click
from rich.console import Console, RenderableType

from modesieve.io import load
from modesieve.io.commands.options import FILE, json_option
from modesieve.io.facts_tables import facts_report
from modesieve.io.json_output import Object, dumps, facts_object, modes_file_object, reduced_file_object
from modesieve.io.modes_tables import certificate_words, origin_words
from modesieve.io.tables import reduced_report
from modesieve.io.terminal import bullets, labelled, screen, show
from modesieve.io.wording import format_number
from modesieve.reduce.inspection import Facts, inspect_model
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.truncation.records import ReducedModel


@click.command()
@click.argument("file", metavar="FILE.h5", type=FILE)
@json_option
def inspect(file: Path, as_json: bool) -> None:
    """Say what a model, modes or reduced model file holds, whether it can be used, and what would be done next."""
    record = load(file)
    found = record if isinstance(record, (Modes, ReducedModel)) else inspect_model(record)
    if as_json:
        click.echo(dumps(_object(found) | {"file": str(file)}), nl=False)
        return
    console = screen()
    if isinstance(found, Facts):
        show(console, *facts_report(console, found))
    elif isinstance(found, ReducedModel):
        show(console, reduced_report(console, found), "", "Next", bullets(console, _next(file)))
    else:
        show(console, _modes_report(console, found))


def _object(found: Facts | Modes | ReducedModel) -> Object:
    if isinstance(found, Facts):
        return facts_object(found)
    return modes_file_object(found) if isinstance(found, Modes) else reduced_file_object(found)


def _next(file: Path) -> list[str]:
    return [f"hold it against the full model: modesieve compare MODEL.h5 {file}"]


def _modes_report(console: Console, modes: Modes) -> RenderableType:
    return labelled(
        console,
        [
            ("modes of", origin_words(modes)),
            ("count", f"{len(modes)}, {certificate_words(modes)}"),
            ("shapes", "stored" if modes.vectors is not None else "not stored"),
            ("residual", f"at most {format_number(float(modes.residual.max(initial=0.0)))}"),
            ("hash", modes.origin.fingerprint[:16]),
            *(("note", text) for text in modes.warnings),
        ],
    )
