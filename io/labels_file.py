"""Names in model files: channels with units and weights, and which row is which unknown."""

from __future__ import annotations

from collections import Counter
from typing import Any

import h5py
import numpy as np

from modesieve.io import hdf5
from modesieve.io.hdf5 import Node, Source
from modesieve.io.hdf5_arrays import array, read_real, read_texts, write_array
from modesieve.reduce.errors import FileError, ModelError
from modesieve.reduce.model import Input, Interface, Output, Unknowns

#: More would not be channels but a matrix stored the wrong way round, or a trap.
MOST_CHANNELS = 100_000
_PARTS = {"inputs": ("name", "unit", "amplitude"), "outputs": ("name", "unit", "resolution")}


def read_channels(source: Source, root: Node, m: int, p: int) -> tuple[tuple[Input, ...], tuple[Output, ...]]:
    """Inputs (m) and outputs (p); names u1, u2 ..., y1, y2 ... where the file gives none."""
    inputs, outputs = _columns(source, root, "inputs", m), _columns(source, root, "outputs", p)
    return (
        tuple(Input(name=name, unit=unit, amplitude=weight) for name, unit, weight in inputs),
        tuple(Output(name=name, unit=unit, resolution=weight) for name, unit, weight in outputs),
    )


def write_channels(group: Node, channels: Interface) -> None:
    """Write the groups inputs and outputs."""
    for noun, items in (("inputs", channels.inputs), ("outputs", channels.outputs)):
        if not items:
            continue
        part = group.create_group(noun)
        write_texts(part, "name", [c.name for c in items])
        if any(c.unit for c in items):
            write_texts(part, "unit", [c.unit for c in items])
        weights = [c.amplitude if isinstance(c, Input) else c.resolution for c in items]
        if any(w is not None for w in weights):
            values = np.array([np.nan if w is None else w for w in weights], dtype=float)
            write_array(part, _PARTS[noun][2], values)


def read_unknowns(source: Source, root: Node, n: int) -> Unknowns | None:
    """Labels of the n unknowns, None if the file gives none."""
    group = _group(source, root, "unknowns", ("node", "direction", "xyz"))
    if group is None:
        return None
    node, direction = (_texts(source, group, name, n) for name in ("node", "direction"))
    xyz = None
    if (found := hdf5.child(source, group, "xyz")) is not None:
        data = array(source, found)
        if data.shape != (n, 3):
            got = f"shape {data.shape}"
            raise ModelError("coordinates do not fit the model", expected=f"({n}, 3)", got=got, where=data.where)
        xyz = read_real(data, what="coordinates")
        xyz.flags.writeable = False
    return Unknowns(node=node or (), direction=direction or (), xyz=xyz)


def write_unknowns(group: Node, unknowns: Unknowns) -> None:
    """Write the group unknowns."""
    part = group.create_group("unknowns")
    for name in ("node", "direction"):
        if texts := getattr(unknowns, name):
            write_texts(part, name, list(texts))
    if unknowns.xyz is not None:
        write_array(part, "xyz", np.asarray(unknowns.xyz, dtype=float))


def write_texts(group: Node, name: str, texts: list[str]) -> None:
    """Write a list of texts as UTF-8 of fixed length: compact, and safe to read."""
    coded = [text.encode("utf-8") for text in texts]
    width = max([1, *map(len, coded)])
    group.create_dataset(name, data=np.array(coded, dtype=h5py.string_dtype("utf-8", width)))


def _columns(source: Source, root: Node, noun: str, count: int) -> list[tuple[str, str, float | None]]:
    letter = "u" if noun == "inputs" else "y"
    names: Any = [f"{letter}{i + 1}" for i in range(count)]
    units: Any = [""] * count
    weights: Any = [None] * count
    group = _group(source, root, noun, _PARTS[noun])
    if group is not None:
        names = _texts(source, group, "name", count) or names
        units = _texts(source, group, "unit", count) or units
        weights = _weights(source, group, _PARTS[noun][2], count) or weights
    _check_names(names, source.at(f"{root.name.rstrip('/')}/{noun}/name"))
    return list(zip(names, (u.strip() for u in units), weights, strict=True))


def _group(source: Source, root: Node, noun: str, known: tuple[str, ...]) -> Node | None:
    group = hdf5.child(source, root, noun)
    if group is None:
        return None
    where = source.at(f"{root.name.rstrip('/')}/{noun}")
    if not hdf5.is_group(group):
        raise FileError(f"{noun} is not a group", expected=f"a group with {', '.join(known)}", where=where)
    for name in hdf5.names(group, where):
        if name not in known:
            expected = " or ".join(known)
            raise FileError(
                f"unknown entry in {noun}", expected=expected, got=name, where=where, remedy="correct the name"
            )
    return group


def _texts(source: Source, group: Node, name: str, count: int) -> tuple[str, ...] | None:
    found = hdf5.child(source, group, name)
    if found is None:
        return None
    data = array(source, found)
    if data.shape != (count,):
        expected, got = f"{count} entries, as the matrices have", f"shape {data.shape}"
        raise ModelError(f"{name} has the wrong number of entries", expected=expected, got=got, where=data.where)
    return read_texts(data, count)


def _weights(source: Source, group: Node, name: str, count: int) -> list[float | None] | None:
    found = hdf5.child(source, group, name)
    if found is None:
        return None
    data = array(source, found)
    if data.shape != (count,):
        expected, got = f"{count} numbers", f"shape {data.shape}"
        raise ModelError(f"{name} has the wrong number of entries", expected=expected, got=got, where=data.where)
    values = read_real(data, finite=False)
    if np.any(values <= 0) or np.any(np.isinf(values)):
        got = f"{values[(values <= 0) | np.isinf(values)][0]:g}"
        raise ModelError(f"{name} must be above 0", expected="positive sizes, NaN for none", got=got, where=data.where)
    return [None if np.isnan(v) else float(v) for v in values]


def _check_names(names: Any, where: str) -> None:
    repeated = [name for name, count in Counter(names).items() if count > 1]
    if repeated or "" in names:
        got = "an empty name" if "" in names else f"{repeated[0]!r} more than once"
        raise ModelError("channel names are not unique", expected="one name per channel", got=got, where=where)
