"""`modesieve review SMALL.h5`."""

from __future__ import annotations

import tempfile
import zipfile
from pathlib import Path

import click

from modesieve.io.commands.options import FILE
from modesieve.io.handover.bundle import open_bundle
from modesieve.io.review import Finding
from modesieve.io.review import review as look


@click.command()
@click.argument("small", metavar="SMALL.h5", type=FILE)
@click.option("--page", type=FILE, metavar="PAGE.html", help="The page that came with it.")
@click.option("--full", type=FILE, metavar="MODEL.h5", help="The full model, to solve stored samples again.")
def review(small: Path, page: Path | None, full: Path | None) -> None:
    """Recompute what a small model's file, or a hand-over zip, can prove; exit status 1 if anything disagrees."""
    with tempfile.TemporaryDirectory() as scratch:
        if zipfile.is_zipfile(small):
            small, page = open_bundle(small, Path(scratch))
        result = look(small, page=page, full=full)
    width = max(len(f.what) for f in result.findings)
    for finding in result.findings:
        click.echo(f"{_word(finding):<8}  {finding.what:<{width}}  {finding.seen}")
    click.echo("rests on trust:")
    for text in result.trusted:
        click.echo(f"  {text}")
    if not result.passed:
        click.echo("something disagrees: do not use this file before it is explained", err=True)
        raise click.exceptions.Exit(1)


def _word(finding: Finding) -> str:
    return {True: "agrees", False: "DIFFERS", None: "not here"}[finding.ok]
