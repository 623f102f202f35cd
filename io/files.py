"""One door for every file of this program: what it holds decides how it is read."""

from __future__ import annotations

from typing import TypeAlias

import h5py

from modesieve.io.atomic import PathLike, replacing
from modesieve.io.model_file import load_model, write_model
from modesieve.reduce.model import Model

Record: TypeAlias = Model


def load(path: PathLike) -> Record:
    """Read a model, a modes file or a reduced model, by the file's format attribute.

    Raises FileError, ModelError or UnitError, each with place and remedy.
    """
    return load_model(path)


def save(path: PathLike, record: Record) -> None:
    """Write a record whole or not at all; `load` gives it back to the last digit.

    Raises FileError when the folder cannot be written to or the disk is full; an old file then stays as it was.
    """
    with replacing(path) as temporary, h5py.File(temporary, "w") as file:
        write_model(file, record)
