"""`modesieve demo`: the whole job on a model that the program builds itself."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from modesieve.io.atomic import output_folder
from modesieve.io.brief_text import brief_text
from modesieve.io.commands.options import FILE
from modesieve.io.commands.run import tell
from modesieve.io.files import save
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.report import run_text
from modesieve.io.run import Written, run, write_run
from modesieve.io.settings import Settings

MODEL = "model.h5"


@click.command()
@click.argument("kind", type=click.Choice(["structure", "thermal"]), default="structure")
@click.option("--out", type=FILE, metavar="DIR", help="Folder for the results.  [default: modesieve-demo/KIND]")
def demo(kind: str, out: Path | None) -> None:
    """Build a model of KIND (structure or thermal), shrink it, and say how wrong the small one is.

    The folder then holds the model, the brief and all results: `modesieve run` repeats the job from that brief.
    """
    folder = output_folder(out if out is not None else Path("modesieve-demo") / kind)
    example: Any = _example(kind)
    settings = Settings(band=example.band, choice=example.tolerance)
    save(folder / MODEL, example.model)
    with ProgressDisplay() as progress:
        result = run(example.model, settings, progress)
    text = brief_text(example.model, MODEL, settings)
    written = write_run(folder, result, brief=text, report=run_text(result))
    tell(result, [Written(path=folder / MODEL, purpose="the full model"), *written])


def _example(kind: str) -> Any:
    from modesieve.examples import cold_plate, mast

    return mast() if kind == "structure" else cold_plate()
