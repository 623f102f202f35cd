"""Modes files: the modes with their certificate, tied to the model they belong to by its fingerprint.

/source        the model: kind, size, fingerprint, damping in words, units, channels
/certificate   how it is known that no mode is missing
/table         eigenvalues, residuals, clusters ..., and all modes in modal coordinates (/table/system)
/vectors, /left   mode shapes (n, k), where stored
"""

from __future__ import annotations

from typing import Any

import numpy as np

from modesieve.io import hdf5
from modesieve.io.atomic import PathLike
from modesieve.io.hdf5 import Node, Source
from modesieve.io.hdf5_arrays import array, write_array
from modesieve.io.labels_file import MOST_CHANNELS, read_channels, write_channels
from modesieve.io.record_file import check_shapes, read_numbers, read_record, write_record
from modesieve.reduce.errors import FileError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.modal.records import Certificate, Modes
from modesieve.reduce.model import Model, Origin
from modesieve.reduce.response.small import SecondOrderModal, SmallSystem

FORMAT, VERSION = "modesieve modes", 1
_ELSEWHERE = ("origin", "certificate", "model", "vectors", "left", "workspace")
_SECOND = {"x": "k", "d": "k", "eta": "k", "b": "km", "cq": "pk", "cv": "pk", "ca": "pk", "D": "pm", "X": "pm"}
_FIRST = {"B": "rm", "C": "pr", "D": "pm", "direct": "qpm"}
_MODES = {"eigenvalue": "k", "term": "k", "residual": "k", "condition": "k", "cluster": "k", "always_kept": "k"}
_MODES |= {"static": "pm", "effective_mass": "k3", "total_mass": "3"}


def load_modes(path: PathLike, model: Model | None = None) -> Modes:
    """Read a modes file; with ``model``, check that the modes belong to it and tie them to it.

    Raises FileError for a damaged file, one of another kind, or modes of another model.
    """
    with hdf5.opened(path) as source:
        modes = read_modes_file(source, model)
    if model is not None and fingerprint(model) != modes.origin.fingerprint:
        raise FileError(
            "the modes belong to another model",
            expected=f"modes of {model.source or 'this model'}, fingerprint {fingerprint(model)[:12]}",
            got=f"modes of {modes.origin.source or modes.origin.title or 'a model'}, {modes.origin.fingerprint[:12]}",
            where=str(path),
            remedy="compute the modes again; matrices, damping or channels have changed",
        )
    return modes


def read_modes_file(source: Source, model: Model | None = None) -> Modes:
    """Read the modes of an opened file; ``model`` is taken unchecked."""
    check_format(source, FORMAT, VERSION)
    shapes = {name: _shapes_in(source, name) for name in ("vectors", "left")}
    modes = read_modes(source, source.file, model=model, **shapes)
    # One column a mode, or one a state where modes are kept as real blocks.
    check_shapes(modes, {"vectors": "nv", "left": "nv"}, source.path, n=modes.origin.n)
    return modes


def write_modes(file: Node, modes: Modes) -> None:
    """Write a modes file."""
    file.attrs["format"] = FORMAT
    file.attrs["version"] = VERSION
    write_table(file, modes)
    for name in ("vectors", "left"):
        if getattr(modes, name) is not None:
            write_array(file, name, np.asarray(getattr(modes, name)))


def write_table(file: Node, modes: Modes) -> None:
    """Write /source, /certificate and /table: everything about the modes but their shapes."""
    source = file.create_group("source")
    write_record(source, modes.origin, without=("inputs", "outputs"))
    source.attrs["input_count"], source.attrs["output_count"] = modes.origin.m, modes.origin.p
    write_channels(source, modes.origin)
    write_record(file.create_group("certificate"), modes.certificate)
    write_record(file.create_group("table"), modes, without=_ELSEWHERE)


def read_modes(source: Source, file: Node, **given: Any) -> Modes:
    """The modes from /source, /certificate and /table."""
    origin = _origin(source, group(source, file, "source"))
    certificate = read_record(source, group(source, file, "certificate"), Certificate)
    given = {"model": None, "vectors": None, "left": None, "workspace": None} | given
    table = group(source, file, "table")
    modes = read_record(source, table, Modes, origin=origin, certificate=certificate, **given)
    where = source.at(table.name)
    check_system(modes.system, f"{where}/system", origin.p, origin.m)
    check_shapes(modes, _MODES, where, p=origin.p, m=origin.m)
    if len(modes) and not (modes.term.min() >= 0 and modes.term.max() < modes.system.terms):
        raise FileError("terms out of range", expected=f"0 to {modes.system.terms - 1}", where=f"{where}/term")
    return modes


def check_format(source: Source, wanted: str, version: int) -> None:
    """Refuse a file of another format or of a later version."""
    stated = hdf5.text_attribute(source, source.file, "format")
    if stated != wanted:
        got = repr(stated) if stated else "no format"
        raise FileError("this is another kind of file", expected=f'format = "{wanted}"', got=got, where=source.path)
    number = hdf5.number_attribute(source, source.file, "version")
    if number is None or number[0] != version:
        got = "no version" if number is None else f"version {number[0]:g}"
        remedy = "use a newer version of this program" if number is not None and number[0] > version else ""
        raise FileError("unknown version", expected=f"{version}", got=got, where=source.path, remedy=remedy)


def group(source: Source, file: Node, name: str) -> Node:
    """The group ``name``. Raises FileError where there is none."""
    found = hdf5.child(source, file, name)
    if found is None or not hdf5.is_group(found):
        raise FileError(f"the group {name} is missing", expected=f"a group {name}", where=source.path)
    return found


def check_system(system: SmallSystem, where: str, p: int, m: int) -> None:
    """Hold all shapes of a small system against each other and against the channels."""
    if isinstance(system, SecondOrderModal):
        check_shapes(system, _SECOND, where, p=p, m=m)
        return
    sizes = [a.shape for a in system.blocks]
    if any(len(s) != 2 or s[0] != s[1] or s[0] == 0 for s in sizes):
        raise FileError("a block is not square", expected="square blocks", where=f"{where}/blocks")
    check_shapes(system, _FIRST, where, p=p, m=m, r=sum(s[0] for s in sizes))


def _origin(source: Source, node: Node) -> Origin:
    counts = [hdf5.number_attribute(source, node, f"{noun}_count") or (0.0,) for noun in ("input", "output")]
    m, p = (int(count[0]) for count in counts)
    if not 0 <= m <= MOST_CHANNELS or not 0 <= p <= MOST_CHANNELS:
        raise FileError("impossible number of channels", got=f"{m} and {p}", where=source.at(node.name))
    inputs, outputs = read_channels(source, node, m, p)
    return read_record(source, node, Origin, inputs=inputs, outputs=outputs)


def _shapes_in(source: Source, name: str) -> Any:
    node = hdf5.child(source, source.file, name)
    if node is None:
        return None
    data = array(source, node)
    return read_numbers(source, node, np.complex128 if data.content == "complex" else np.float64, f"/{name}")
