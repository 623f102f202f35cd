"""`modesieve demo`: the whole job on a model that the program builds itself."""

from __future__ import annotations

from pathlib import Path

import click

from modesieve.examples import Demo, cold_plate, mast
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
    example = _example(kind)
    settings = settings_of(example)
    save(folder / MODEL, example.model)
    with ProgressDisplay() as progress:
        result = run(example.model, settings, progress)
    text = brief_text(example.model, MODEL, settings)
    written = write_run(folder, result, brief=text, report=run_text(result))
    tell(result, [Written(path=folder / MODEL, purpose="the full model"), *written])


def _example(kind: str) -> Demo:
    return mast() if kind == "structure" else cold_plate()


def settings_of(example: Demo) -> Settings:
    """What its user would ask; where pseudo-modes hold the rest, one tail level of them is enough."""
    levels = 1 if example.statics == "vectors" else 2
    return Settings(band=example.band, choice=example.tolerance, statics=example.statics, levels=levels)
