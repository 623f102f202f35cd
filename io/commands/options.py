"""Options that several commands share, and the checks at their door."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

from modesieve.io.atomic import file_error, output_folder

F = TypeVar("F", bound=Callable[..., Any])
FILE = click.Path(path_type=Path)


def band_option(command: F) -> F:
    """``--band LOW HIGH``: two quantities, quoted or not."""
    return click.option(
        "--band",
        nargs=2,
        metavar="LOW HIGH",
        help="Band of interest, e.g. --band 0Hz 300Hz; thermal models also take time constants: --band 10s 2h.",
    )(command)


def json_option(command: F) -> F:
    """``--json``: one object instead of tables."""
    return click.option("--json", "as_json", is_flag=True, help="Print one JSON object.")(command)


def by_option(command: F) -> F:
    """``--by MEASURE``."""
    return click.option(
        "--by", default="band-share", show_default=True, metavar="MEASURE", help="The measure that ranks the modes."
    )(command)


def model_argument(command: F) -> F:
    """``MODEL.h5``."""
    return click.argument("model_file", metavar="MODEL.h5", type=FILE)(command)


def modes_option(command: F) -> F:
    """``--modes MODES.h5``."""
    return click.option(
        "--modes", "modes_file", metavar="MODES.h5", type=FILE, help="Modes that `modesieve modes -o` wrote."
    )(command)


def writable(path: Path | None) -> None:
    """Refuse, before anything is computed, a file that could not be written afterwards."""
    if path is None:
        return
    folder = path.resolve().parent
    if path.is_dir():
        raise file_error(IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR)), path)
    if not folder.is_dir():
        raise file_error(FileNotFoundError(errno.ENOENT, os.strerror(errno.ENOENT)), path)
    output_folder(folder)
