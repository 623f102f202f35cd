"""`modesieve brief MODEL.h5`."""

from __future__ import annotations

from pathlib import Path

import click

from modesieve.io import load_model
from modesieve.io.brief_text import brief_text
from modesieve.io.commands.options import model_argument
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.suggestion import suggest


@click.command()
@model_argument
def brief(model_file: Path) -> None:
    """Print a brief for a model, with a band and a tolerance that suit it, ready to edit and run.

    The brief belongs into the current folder: modesieve brief MODEL.h5 > job.toml
    """
    model = load_model(model_file)
    with ProgressDisplay() as progress:
        suggested = suggest(model, progress)
    click.echo(brief_text(model, str(model_file), suggested.settings, suggested.notes), nl=False)
