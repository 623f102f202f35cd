"""`modesieve compare MODEL.h5 SMALL.h5...`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from modesieve.io import load_model, load_modes, load_reduced
from modesieve.io.atomic import output_folder, write_text
from modesieve.io.choices import band_of
from modesieve.io.commands.options import FILE, band_option, json_option, model_argument, modes_option
from modesieve.io.json_output import comparison_object, dumps
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.run import Written, write_figures
from modesieve.io.tables import checks_table, comparison_head, first_kept, outputs_table, sweep_table, written_table
from modesieve.io.terminal import bullets, screen, show
from modesieve.io.verdict import Verdict, verdict_of
from modesieve.reduce.comparison.compare import compare as hold
from modesieve.reduce.comparison.records import Comparison
from modesieve.reduce.modal.rank import MEASURES, rank
from modesieve.reduce.modal.records import Ranking


@click.command()
@model_argument
@click.argument("small_files", metavar="SMALL.h5...", type=FILE, nargs=-1, required=True)
@modes_option
@band_option
@click.option("--out", type=FILE, metavar="DIR", help="Write figures and numbers into this folder.")
@click.option("--page", type=FILE, metavar="FILE", help="Write the page of the first small model.")
@click.option("--pdf", type=FILE, metavar="FILE", help="Write the same as a static report.")
@json_option
def compare(
    model_file: Path,
    small_files: tuple[Path, ...],
    modes_file: Path | None,
    band: tuple[str, str] | None,
    out: Path | None,
    page: Path | None,
    pdf: Path | None,
    as_json: bool,
) -> None:
    """Hold small models against the full one: errors in frequency, per output, and over the kept count."""
    if out is not None:
        output_folder(out)
    model = load_model(model_file)
    smalls = [load_reduced(path) for path in small_files]
    around = band_of(*band, model, where="--band") if band else None
    modes = None if modes_file is None else load_modes(modes_file, model)
    with ProgressDisplay() as progress:
        comparison = hold(model, smalls, modes=modes, band=around, times=True, sweep=True, progress=progress)
    content = dumps(comparison_object(comparison, small_files))
    written = [] if out is None else _write(out, comparison, content)
    if page is not None:
        written.append(_write_page(page, comparison, model_file, small_files[0]))
    if pdf is not None:
        written.append(_write_pdf(pdf, comparison, model_file, small_files[0]))
    if as_json:
        click.echo(content, nl=False)
    else:
        _print(comparison, small_files, written)


def _write(folder: Path, comparison: Comparison, content: str) -> list[Written]:
    path = folder / "comparison.json"
    write_text(path, content)
    figures = write_figures(folder, comparison, _ranking(comparison), ("svg",))
    return [Written(path=path, purpose="the numbers for a script"), *figures]


def _write_page(path: Path, comparison: Comparison, model_file: Path, small_file: Path) -> Written:
    from modesieve.io.page import page_text, page_words, reproduce
    from modesieve.io.review import file_seal

    check = comparison.checks[0]
    commands = reproduce(model_file.name, small_file.name, comparison, check, "keep.toml")
    words = page_words(comparison, check, commands=commands)
    write_text(path, page_text(comparison, _ranking(comparison), words, file_seal=file_seal(small_file)[1]))
    return Written(path=path, purpose="the page of the first small model")


def _write_pdf(path: Path, comparison: Comparison, model_file: Path, small_file: Path) -> Written:
    from modesieve.io.figures import save_report
    from modesieve.io.page import page_words, report_lines, reproduce

    commands = reproduce(model_file.name, small_file.name, comparison, comparison.checks[0], "keep.toml")
    words = page_words(comparison, comparison.checks[0], commands=commands)
    save_report(path, comparison, _ranking(comparison), report_lines(words, comparison))
    return Written(path=path, purpose="the static report of the first small model")


def _ranking(comparison: Comparison) -> Ranking:
    asked = [c.small.ranked_by for c in comparison.checks if c.small.ranked_by in MEASURES]
    return rank(comparison.modes, by=asked[0] if asked else "band-share", band=comparison.band)


def _marked(comparison: Comparison) -> int:
    """The kept count of the first small model if it is one of the sweep's, else 0."""
    small = comparison.checks[0].small
    return 0 if small.ranking is None else first_kept(small.ranking, small.kept)


def _cautions(files: tuple[Path, ...], verdicts: list[Verdict]) -> list[str]:
    """What concerns one small model first, with its name, then what concerns all of them."""
    shared = [text for text in verdicts[0].cautions if all(text in verdict.cautions for verdict in verdicts)]
    own = [
        f"{path}: {text}"
        for path, verdict in zip(files, verdicts, strict=True)
        for text in verdict.cautions
        if text not in shared
    ]
    return [*own, *shared]


def _print(comparison: Comparison, files: tuple[Path, ...], written: list[Written]) -> None:
    console = screen()
    parts: list[Any] = []
    verdicts = [verdict_of(comparison, check) for check in comparison.checks]
    for path, verdict in zip(files, verdicts, strict=True):
        parts += [f"{path}: {verdict.sentence}", "", outputs_table(console, verdict), ""]
    names = [str(path) for path in files]
    parts += [comparison_head(console, comparison), "", checks_table(console, comparison, names)]
    if comparison.sweep is not None:
        parts += ["", sweep_table(console, comparison.sweep, _marked(comparison))]
    parts += ["", "Cautions", bullets(console, _cautions(files, verdicts))]
    if written:
        parts += ["", written_table(console, written)]
    show(console, *parts)
