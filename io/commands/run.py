"""`modesieve run BRIEF.toml`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from modesieve.io.atomic import output_folder
from modesieve.io.brief import brief_model, brief_settings, read_brief
from modesieve.io.brief_text import relocated
from modesieve.io.commands.options import FILE, json_option
from modesieve.io.json_output import dumps, run_object
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.report import run_report, run_text
from modesieve.io.run import Result, Written, write_run
from modesieve.io.run import run as do_run
from modesieve.io.tables import written_table
from modesieve.io.terminal import screen, show


@click.command()
@click.argument("brief_file", metavar="BRIEF.toml", type=FILE)
@click.option("--out", type=FILE, metavar="DIR", help="Folder for the results, in place of the brief's own.")
@json_option
def run(brief_file: Path, out: Path | None, as_json: bool) -> None:
    """Do the whole job that a brief describes and write its results into a folder."""
    brief = read_brief(brief_file)
    base = brief_file.resolve().parent
    model = brief_model(brief, base)
    settings = brief_settings(brief, model, base)
    folder = output_folder(out if out is not None else _folder(brief_file, brief.folder))
    with ProgressDisplay() as progress:
        result = do_run(model, settings, progress)
    written = write_run(
        folder, result, brief=relocated(brief_file.read_text("utf-8"), base, folder.resolve()), report=run_text(result)
    )
    if as_json:
        click.echo(dumps(run_object(result) | {"files": [str(one.path) for one in written]}), nl=False)
    else:
        tell(result, written)


def _folder(brief_file: Path, stated: str) -> Path:
    """The brief's folder (relative to the brief), else one named after the brief."""
    if stated:
        return brief_file.parent / stated
    return brief_file.parent / f"{brief_file.stem}-results"


def tell(result: Result, written: list[Written], extra: Any = ()) -> None:
    """The report of a run and its list of files."""
    console = screen()
    show(console, *run_report(console, result), "", *extra, written_table(console, written))
