"""`modesieve truncate MODEL.h5 -o SMALL.h5`."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import click

from modesieve.io import load_model, load_modes, save
from modesieve.io.choices import above_of, band_of, tolerance_of
from modesieve.io.commands.options import (
    FILE,
    band_option,
    by_option,
    json_option,
    model_argument,
    modes_option,
    writable,
)
from modesieve.io.json_output import dumps, reduced_object
from modesieve.io.keep_list import keep_list_for
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.tables import reduced_report
from modesieve.io.terminal import screen, show
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import MEASURES, rank, unknown_measure
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Model
from modesieve.reduce.progress import Listener
from modesieve.reduce.truncation.certified import guaranteed as smallest
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import Above, Band, Choice, Count, Keep, Tolerance
from modesieve.reduce.truncation.truncate import truncate as cut

_CHOICES = "--keep, --tolerance, --keep-list or --above (or --band alone: every mode in it)"


@click.command()
@model_argument
@modes_option
@band_option
@by_option
@click.option("--keep", type=click.IntRange(min=1), metavar="N", help="Keep the first N modes of the ranking.")
@click.option("--tolerance", metavar="T", help="Fewest modes whose error passes, e.g. '2 %' or '0.5 K'.")
@click.option("--of", type=click.Choice(["local", "peak"]), help="What a tolerance in % refers to.  [default: local]")
@click.option("--keep-list", type=FILE, metavar="FILE", help="Keep the modes that a TOML file lists.")
@click.option("--above", multiple=True, metavar="MEASURE=SHARE", help="Keep modes above a share; may repeat.")
@click.option("--statics", type=click.Choice(["none", "feedthrough", "vectors"]), help="What stands for the rest.")
@click.option("--levels", type=click.IntRange(1, 3), default=2, show_default=True, help="Tail levels of vectors.")
@click.option("--guaranteed", is_flag=True, help="Choose modes and tail levels together by the guaranteed error.")
@click.option("-o", "output", type=FILE, required=True, metavar="SMALL.h5", help="The small model's file.")
@json_option
def truncate(
    model_file: Path,
    modes_file: Path | None,
    band: tuple[str, str] | None,
    by: str,
    keep: int | None,
    tolerance: str | None,
    of: str | None,
    keep_list: Path | None,
    above: tuple[str, ...],
    statics: Any,
    levels: int,
    guaranteed: bool,
    output: Path,
    as_json: bool,
) -> None:
    """Keep the modes that matter and write the small model with its error.

    Without --statics the best that is legal for all outputs is taken. --above takes a share of the largest ("1%"), for
    decay a time ("decay=3s"); a mode that passes any of them stays. A tolerance is met by the measured error in rank
    order; with --guaranteed by the guaranteed error of the best set of modes and tail levels.
    """
    _one_choice(keep, tolerance, keep_list, above, band)
    if of is not None and tolerance is None:
        raise click.UsageError("--of says what --tolerance refers to, and there is none")
    if guaranteed and (tolerance is None or band is None):
        raise click.UsageError("--guaranteed chooses by a --tolerance over a --band")
    if by not in MEASURES:
        raise unknown_measure(by)
    writable(output)
    model = load_model(model_file)
    around = band_of(*band, model, where="--band") if band else None
    choice = _choice(model, keep, tolerance, of, keep_list, above, around)
    with ProgressDisplay() as progress:
        found = _modes(model, modes_file, choice, around, progress)
        table = _ranked(found, choice, by, around)
        if guaranteed and isinstance(choice, Tolerance) and around is not None:
            small = smallest(table, choice, around, statics=statics, progress=progress)
        else:
            small = cut(table, choice, statics=statics, levels=levels, band=around, progress=progress)
            small = with_guarantee(small, progress)
    save(output, small)
    if as_json:
        click.echo(dumps(reduced_object(small) | {"file": str(output)}), nl=False)
        return
    console = screen()
    show(console, reduced_report(console, small), "", f"wrote {output}")


def _one_choice(
    keep: int | None, tolerance: str | None, keep_list: Path | None, above: tuple[str, ...], band: Any
) -> None:
    given = sum(one is not None for one in (keep, tolerance, keep_list)) + bool(above)
    if given > 1:
        raise click.UsageError(f"give one of {_CHOICES}")
    if not given and not band:
        raise click.UsageError(f"say which modes stay: {_CHOICES}")


def _choice(
    model: Model,
    keep: int | None,
    tolerance: str | None,
    of: str | None,
    keep_list: Path | None,
    above: tuple[str, ...],
    band: tuple[float, float] | None,
) -> Choice:
    if keep is not None:
        return Count(modes=keep)
    if tolerance is not None:
        return tolerance_of(tolerance, of, model, where="--tolerance")
    if keep_list is not None:
        return keep_list_for(model, keep_list)
    if above:
        return tuple(_threshold(text) for text in above)
    assert band is not None  # one of the choices was given, see _one_choice
    return Band(low=band[0], high=band[1])


def _threshold(text: str) -> Above:
    name, equals, value = text.partition("=")
    if not equals or not value.strip():
        raise ChoiceError(
            "a threshold needs a measure and a share",
            expected="MEASURE=SHARE, for example peak-share=1%",
            got=text,
            where="--above",
        )
    if name.strip() not in MEASURES:
        raise unknown_measure(name.strip())
    return above_of(name.strip(), value.strip())


def _modes(
    model: Model, path: Path | None, choice: Choice, band: tuple[float, float] | None, progress: Listener
) -> Modes:
    """Modes from a file, else computed: by the band, else as many as the choice can need."""
    if path is not None:
        return load_modes(path, model)
    if band is not None:
        return find_modes(model, band, count=_needed(choice), progress=progress)
    needed = _needed(choice)
    return find_modes(model, count=None if needed is None else min(_with_margin(needed), model.n), progress=progress)


def _needed(choice: Choice) -> int | None:
    match choice:
        case Count(modes=count):
            return count
        case Keep(numbers=numbers) if numbers:
            return max(numbers)
    return None


def _with_margin(count: int) -> int:
    return max(20, math.ceil(1.5 * count))


def _ranked(found: Modes, choice: Choice, by: str, band: tuple[float, float] | None) -> Any:
    """The ranking where the choice needs an order, else the modes alone (a model without channels has no ranking)."""
    if isinstance(choice, (Keep, Band)) and 0 in (found.origin.m, found.origin.p):
        return found
    return rank(found, by=by, band=band)
