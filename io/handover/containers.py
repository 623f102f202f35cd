"""Forms to files and back, to the last digit: HDF5, .npz, JSON, or a folder of CSV tables."""

from __future__ import annotations

import io
import json
import zipfile
from pathlib import Path
from typing import Any, Literal, TypeAlias

import h5py
import numpy as np

from modesieve.io.atomic import output_folder, replacing, write_bytes, write_text
from modesieve.io.handover.forms import Form
from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import FileError

Container: TypeAlias = Literal["hdf5", "npz", "json", "csv"]
FORMAT = "modesieve hand-over"
ENDINGS: dict[str, Container] = {".h5": "hdf5", ".hdf5": "hdf5", ".npz": "npz", ".json": "json"}
#: A hand-over holds a small model; nothing honest is larger than this when read back.
LARGEST = 2**30


def container_of(path: Path, asked: Container | None) -> Container:
    """The container asked for, else by the file's ending, else a folder of CSV tables."""
    return asked or ENDINGS.get(path.suffix.lower(), "csv")


def write_form(path: Path, form: Form, container: Container) -> list[Path]:
    """Write the form, whole or not at all; the files written."""
    if container == "csv":
        return _write_csv(path, form)
    {"hdf5": _write_hdf5, "npz": _write_npz, "json": _write_json}[container](path, form)
    return [path]


def read_form(path: Path) -> Form:
    """Read back what `write_form` wrote. Raises FileError for anything else."""
    try:
        if path.is_dir():
            return _read_csv(path)
        container = ENDINGS[path.suffix.lower()]
        return {"hdf5": _read_hdf5, "npz": _read_npz, "json": _read_json}[container](path)
    except (OSError, KeyError, ValueError, zipfile.BadZipFile) as error:
        raise FileError(
            "this is no hand-over file",
            expected="what `modesieve export` wrote: .h5, .npz, .json or a folder of CSV tables",
            got=f"{type(error).__name__}: {error}",
            where=str(path),
        ) from error


def _head(form: Form) -> dict[str, Any]:
    return {"format": FORMAT, "version": 1, "form": form.name, "about": form.about}


def _form(head: dict[str, Any], arrays: dict[str, Real]) -> Form:
    if head.get("format") != FORMAT:
        raise ValueError(f"format {head.get('format')!r}")
    return Form(name=str(head["form"]), arrays=arrays, about=dict(head["about"]))


def _write_hdf5(path: Path, form: Form) -> None:
    with replacing(path) as temporary, h5py.File(temporary, "w") as file:
        for name, value in _head(form).items():
            file.attrs[name] = value if isinstance(value, (str, int)) else json.dumps(value)
        for letter, array in form.arrays.items():
            file.create_dataset(letter, data=array)


def _read_hdf5(path: Path) -> Form:
    with h5py.File(path, "r") as file:
        head = {name: file.attrs[name] for name in ("format", "form")} | {"about": json.loads(file.attrs["about"])}
        hard = [name for name in file if isinstance(file.get(name, getlink=True), h5py.HardLink)]
        return _form(head, {name: _checked(file[name]) for name in hard})


def _checked(dataset: Any) -> Real:
    if not isinstance(dataset, h5py.Dataset) or dataset.dtype.kind not in "fiu" or dataset.size * 8 > LARGEST:
        raise ValueError("a dataset of plain numbers was expected")
    return np.asarray(dataset[()], dtype=np.float64)


def _write_npz(path: Path, form: Form) -> None:
    buffer = io.BytesIO()
    head = np.frombuffer(json.dumps(_head(form)).encode(), dtype=np.uint8)
    np.savez_compressed(buffer, allow_pickle=False, head=head, **form.arrays)
    write_bytes(path, buffer.getvalue())


def _read_npz(path: Path) -> Form:
    with zipfile.ZipFile(path) as archive:
        if sum(entry.file_size for entry in archive.infolist()) > LARGEST:
            raise ValueError("members larger than a small model")
    with np.load(path, allow_pickle=False) as file:
        head = json.loads(file["head"].tobytes())
        return _form(head, {name: file[name] for name in file.files if name != "head"})


def _write_json(path: Path, form: Form) -> None:
    arrays = {letter: array.tolist() for letter, array in form.arrays.items()}
    shapes = {letter: list(array.shape) for letter, array in form.arrays.items()}
    write_text(path, json.dumps(_head(form) | {"shapes": shapes, "arrays": arrays}, indent=1, allow_nan=False) + "\n")


def _read_json(path: Path) -> Form:
    if path.stat().st_size > LARGEST:
        raise ValueError("larger than a small model")
    content = json.loads(path.read_text("utf-8"))
    arrays = {k: np.array(v, dtype=float).reshape(content["shapes"][k]) for k, v in content["arrays"].items()}
    return _form(content, arrays)


def _write_csv(folder: Path, form: Form) -> list[Path]:
    out = output_folder(folder)
    shapes = {letter: list(array.shape) for letter, array in form.arrays.items()}
    written = [out / "about.json"]
    write_text(written[0], json.dumps(_head(form) | {"shapes": shapes}, indent=1, allow_nan=False) + "\n")
    for letter, array in form.arrays.items():
        rows = "".join(",".join(repr(float(v)) for v in row) + "\n" for row in array)
        written.append(out / f"{letter}.csv")
        write_text(written[-1], rows)
    return written


def _read_csv(folder: Path) -> Form:
    head = json.loads((folder / "about.json").read_text("utf-8"))
    arrays = {}
    for letter, shape in head["shapes"].items():
        if not letter.isalnum():  # a name is never a way out of the folder
            raise ValueError(f"table name {letter!r}")
        text = (folder / f"{letter}.csv").read_text("utf-8").split()
        arrays[letter] = np.array([[float(v) for v in line.split(",")] for line in text]).reshape(shape)
    return _form(head, arrays)
