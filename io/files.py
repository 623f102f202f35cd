"""One door for every file of this program: what a file holds decides how it is read."""

from __future__ import annotations

import difflib
from collections.abc import Callable
from typing import TypeAlias

import h5py

from modesieve.io import hdf5, model_file, modes_file, reduced_file
from modesieve.io.atomic import PathLike, replacing
from modesieve.reduce.errors import FileError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Model
from modesieve.reduce.truncation.records import ReducedModel

Record: TypeAlias = Model | Modes | ReducedModel
_READERS: dict[str, Callable[[hdf5.Source], Record]] = {
    model_file.FORMAT: model_file.read_model_file,
    modes_file.FORMAT: modes_file.read_modes_file,
    reduced_file.FORMAT: reduced_file.read_reduced_file,
}


def load(path: PathLike) -> Record:
    """Read a model, modes or a reduced model, by the file's format attribute (a model where it has none).

    Raises FileError, ModelError or UnitError, each with place and remedy.
    """
    with hdf5.opened(path) as source:
        stated = hdf5.text_attribute(source, source.file, "format", model_file.FORMAT)
        if stated in _READERS:
            return _READERS[stated](source)
    close = difflib.get_close_matches(stated, _READERS, 1)
    remedy = f'did you mean "{close[0]}"?' if close else ""
    expected = ", ".join(f'"{name}"' for name in _READERS)
    raise FileError("unknown format", expected=expected, got=repr(stated)[:60], where=source.path, remedy=remedy)


def save(path: PathLike, record: Record) -> None:
    """Write a record whole or not at all; `load` gives it back to the last digit.

    Of modes, the model itself and what the solver left in memory are not written; of a reduced model, neither are the
    mode shapes. Raises FileError when the folder cannot be written to or the disk is full: the old file then stays.
    """
    with replacing(path) as temporary, h5py.File(temporary, "w") as file:
        if isinstance(record, ReducedModel):
            reduced_file.write_reduced(file, record)
        elif isinstance(record, Modes):
            modes_file.write_modes(file, record)
        else:
            model_file.write_model(file, record)
