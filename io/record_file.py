"""Frozen records of arrays to HDF5 groups and back, to the last digit, by the types of their fields.

Numbers and texts become attributes, arrays become datasets, records become groups that carry their class name. A name
in a file is only ever compared with the classes that a field allows; nothing in a file is evaluated. A field added to
a record is stored without further work; a field of type Any needs an entry in ``TYPES``.

    None                         nothing
    float, int, bool, str        attribute (nan and inf allowed)
    array of float, int, complex dataset
    tuple of numbers or texts    dataset
    tuple of tuples of ints      group: counts, values
    tuple of arrays              group: shapes, values
    tuple of records             group: 0, 1, ...
    dict of arrays or texts      group of datasets, or of attributes
"""

from __future__ import annotations

import dataclasses
import types
from collections.abc import Collection, Iterable
from itertools import pairwise
from typing import Any, Literal, TypeVar, Union, get_args, get_origin, get_type_hints

import numpy as np
from numpy.typing import NDArray

from modesieve.io import hdf5
from modesieve.io.hdf5 import Node, Source
from modesieve.io.hdf5_arrays import array, read_real, read_texts, write_array
from modesieve.io.labels_file import write_texts
from modesieve.reduce.errors import FileError, ModesieveError
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.records import Choice, ReducedModel

R = TypeVar("R")

#: What fields of type Any hold.
TYPES: dict[tuple[type, str], Any] = {(ReducedModel, "choice"): Choice | str, (Hub, "floating"): NDArray[np.bool_]}
_MOST = 1_000_000  # entries of a list in such a file


def write_record(group: Node, record: Any, *, without: Collection[str] = ()) -> None:
    """Write the fields of a record into ``group``, those named in ``without`` left out."""
    group.attrs["record"] = type(record).__name__
    for name, hint in fields(type(record)).items():
        if name not in without:
            _write(group, name, hint, getattr(record, name))


def read_record(source: Source, group: Node, kind: type[R], **given: Any) -> R:
    """Read a record of class ``kind`` from ``group``; fields in ``given`` are not looked for there.

    Raises FileError for missing, misshapen or foreign content.
    """
    where = source.at(group.name)
    stated = hdf5.text_attribute(source, group, "record")
    if stated != kind.__name__:
        raise FileError("the group holds something else", expected=kind.__name__, got=repr(stated), where=where)
    values = dict(given)
    for name, hint in fields(kind).items():
        if name not in given:
            value = _read(source, group, name, hint)
            if value is not None:
                values[name] = value
            elif not _may_be_left_out(kind, name, hint):
                raise FileError(f"{name} is missing", expected=f"{kind.__name__} with {name}", where=where)
    try:
        return kind(**values)
    except (ModesieveError, ValueError, TypeError, IndexError, AttributeError) as error:
        got = str(error).splitlines()[0][:200]
        raise FileError("what the group holds does not fit together", got=got, where=where) from error


def fields(kind: Any) -> dict[str, Any]:
    """Field names of a record class with their types."""
    hints = get_type_hints(kind)
    names = [f.name for f in dataclasses.fields(kind)]
    return {name: TYPES.get((kind, name), hints[name]) for name in names}


def check_shapes(record: Any, shapes: dict[str, str], where: str, **sizes: int) -> None:
    """Hold the shapes of a record's arrays against letters, e.g. ``b="km"``; a digit is a fixed size.

    Raises FileError at the first that disagrees with what another one says of the same letter.
    """
    for name, letters in shapes.items():
        value = getattr(record, name)
        if value is None:
            continue
        shape = value.shape if isinstance(value, np.ndarray) else (len(value),)
        fits = len(shape) == len(letters) and all(
            size == (int(letter) if letter.isdigit() else sizes.setdefault(letter, size))
            for size, letter in zip(shape, letters, strict=True)
        )
        if not fits:
            wanted = ", ".join(str(sizes.get(letter, letter)) for letter in letters)
            raise FileError("shapes do not agree", expected=f"({wanted})", got=f"{shape}", where=f"{where}/{name}")


def _may_be_left_out(kind: Any, name: str, hint: Any) -> bool:
    (field,) = (f for f in dataclasses.fields(kind) if f.name == name)
    default = field.default is not dataclasses.MISSING or field.default_factory is not dataclasses.MISSING
    return default or type(None) in get_args(hint)


# ---- types ---------------------------------------------------------------------------------------------------------


def _options(hint: Any) -> tuple[Any, ...]:
    """The alternatives of a type, None left out."""
    if get_origin(hint) in (Union, types.UnionType):
        return tuple(option for option in get_args(hint) if option is not type(None))
    return (hint,)


def _number_type(hint: Any) -> Any:
    """The numpy type of an array hint, None if it is not one."""
    if get_origin(hint) is not np.ndarray:
        return None
    return get_args(get_args(hint)[1])[0]


def _item(hint: Any) -> Any:
    """The type of a tuple's items (tuples of mixed types do not occur)."""
    return get_args(hint)[0]


# ---- writing -------------------------------------------------------------------------------------------------------


def _write(group: Node, name: str, hint: Any, value: Any) -> None:
    if value is None:
        return
    if dataclasses.is_dataclass(value):
        write_record(group.create_group(name), value)
    elif isinstance(value, np.ndarray):
        write_array(group, name, value)
    elif isinstance(value, dict):
        part = group.create_group(name, track_order=True)
        for key, entry in value.items():
            _write(part, key, get_args(hint)[1], entry)
    elif isinstance(value, tuple):
        _write_tuple(group, name, _item(next(o for o in _options(hint) if get_origin(o) is tuple)), value)
    elif isinstance(value, (bool, int, float, str, np.number, np.bool_)):
        group.attrs[name] = value
    else:
        raise TypeError(f"{name}: records do not hold {type(value).__name__}")


def _write_tuple(group: Node, name: str, item: Any, value: tuple[Any, ...]) -> None:
    if item is str:
        write_texts(group, name, list(value))
    elif item in (int, float):
        write_array(group, name, np.array(value, dtype=np.int64 if item is int else np.float64))
    elif get_origin(item) is tuple:
        _write_ragged(group.create_group(name), value)
    elif _number_type(item) is not None:
        part = group.create_group(name)
        shapes = np.array([a.shape for a in value], dtype=np.int64) if value else np.zeros((0, 2), dtype=np.int64)
        write_array(part, "shapes", shapes)
        write_array(part, "values", np.concatenate([a.ravel() for a in value]) if value else np.zeros(0))
    else:
        part = group.create_group(name)
        part.attrs["count"] = len(value)
        for i, entry in enumerate(value):
            write_record(part.create_group(str(i)), entry)


def _write_ragged(part: Node, value: tuple[tuple[int, ...], ...]) -> None:
    write_array(part, "counts", np.array([len(entry) for entry in value], dtype=np.int64))
    write_array(part, "values", np.array([v for entry in value for v in entry], dtype=np.int64))


# ---- reading -------------------------------------------------------------------------------------------------------


def _read(source: Source, group: Node, name: str, hint: Any) -> Any:
    """The value of a field, None if the group does not hold it."""
    options = _options(hint)
    scalar = [o for o in options if o in (bool, int, float, str) or get_origin(o) is Literal]
    if scalar and ((value := _read_scalar(source, group, name, scalar[0])) is not None or len(scalar) == len(options)):
        return value
    node = hdf5.child(source, group, name)
    if node is None:
        return None
    place = f"{group.name.rstrip('/')}/{name}"
    records = [o for o in options if dataclasses.is_dataclass(o)]
    stated = hdf5.text_attribute(source, node, "record") if records and hdf5.is_group(node) else ""
    if stated:
        return read_record(source, node, _chosen(records, stated, source.at(place)))
    for option in options:
        if get_origin(option) is tuple:
            return _sized(_read_tuple(source, node, _item(option), place), option, source.at(place))
        if get_origin(option) is dict:
            return _read_dict(source, node, get_args(option)[1], place)
        if _number_type(option) is not None:
            return read_numbers(source, node, _number_type(option), place)
    raise FileError("the group holds something else", expected=name, where=source.at(place))


def _sized(value: tuple[Any, ...], hint: Any, where: str) -> tuple[Any, ...]:
    if Ellipsis not in get_args(hint) and len(value) != len(get_args(hint)):
        expected, got = f"{len(get_args(hint))} entries", str(len(value))
        raise FileError("the list has the wrong size", expected=expected, got=got, where=where)
    return value


def read_numbers(source: Source, node: Node, dtype: Any, place: str) -> Any:
    """A dataset of numbers as a read-only array of ``dtype``."""
    data = array(source, node, place)
    if np.dtype(dtype).kind == "i" and data.dtype.kind not in "iu":
        raise FileError("the dataset has the wrong type", expected="integers", got=str(data.dtype), where=data.where)
    out = read_real(data, dtype=dtype, finite=False, complex_too=np.dtype(dtype).kind == "c")
    out.flags.writeable = False
    return out


def _chosen(records: Iterable[Any], stated: str, where: str) -> Any:
    for record in records:
        if record.__name__ == stated:
            return record
    expected = " or ".join(record.__name__ for record in records)
    raise FileError("the group holds something else", expected=expected, got=repr(stated), where=where)


def _read_scalar(source: Source, group: Node, name: str, hint: Any) -> Any:
    value = hdf5.attribute(source, group, name)
    if value is None:
        return None
    where = source.at(f"attribute {name} of {group.name}")
    choices = get_args(hint) if get_origin(hint) is Literal else ()
    text = hint is str or any(isinstance(choice, str) for choice in choices)
    if text != isinstance(value, str) or (not text and (value.size != 1 or np.iscomplexobj(value))):
        expected = "a text" if text else "a number"
        raise FileError("the attribute has the wrong type", expected=expected, got=repr(value)[:60], where=where)
    out = value if text else value.ravel()[0].item()
    if hint in (int, bool, float):
        if hint is int and out != int(out if np.isfinite(out) else 0):
            raise FileError("the attribute is not a whole number", expected="an integer", got=f"{out}", where=where)
        return hint(out)
    if choices and out not in choices:
        expected = ", ".join(str(choice) for choice in choices)
        raise FileError("the attribute has an unknown value", expected=expected, got=repr(out)[:60], where=where)
    return out


def _read_tuple(source: Source, node: Node, item: Any, place: str) -> tuple[Any, ...]:
    if item is str:
        return read_texts(array(source, node, place), _MOST)
    if item in (int, float):
        return tuple(_list(source, node, item, place))
    if not hdf5.is_group(node):
        raise FileError("this is not a group", expected="a group", got="a dataset", where=source.at(place))
    if get_origin(item) is tuple:
        return _read_ragged(source, node, place)
    if _number_type(item) is not None:
        return _read_arrays(source, node, _number_type(item), place)
    return _read_records(source, node, item, place)


def _list(source: Source, node: Node, item: Any, place: str) -> list[Any]:
    out = read_numbers(source, node, np.int64 if item is int else np.float64, place)
    if out.ndim != 1 or len(out) > _MOST:
        raise FileError("this is not a list", expected="one dimension", got=f"{out.shape}", where=source.at(place))
    return list(out.tolist())


def _part(source: Source, node: Node, name: str, place: str) -> tuple[Node, str]:
    found = hdf5.child(source, node, name)
    if found is None:
        raise FileError(f"{name} is missing", expected=f"a dataset {name}", where=source.at(place))
    return found, f"{place}/{name}"


def _read_ragged(source: Source, node: Node, place: str) -> tuple[tuple[int, ...], ...]:
    counts = _list(source, *_swap(_part(source, node, "counts", place), int))
    values = _list(source, *_swap(_part(source, node, "values", place), int))
    _check_total(counts, len(values), source.at(place))
    ends = np.concatenate([[0], np.cumsum(counts, dtype=np.int64)]).tolist()
    return tuple(tuple(values[a:b]) for a, b in pairwise(ends))


def _swap(found: tuple[Node, str], item: Any) -> tuple[Node, Any, str]:
    return found[0], item, found[1]


def _read_arrays(source: Source, node: Node, dtype: Any, place: str) -> tuple[Any, ...]:
    shapes = read_numbers(source, *_swap(_part(source, node, "shapes", place), np.int64))
    values = read_numbers(source, *_swap(_part(source, node, "values", place), dtype))
    if shapes.ndim != 2 or values.ndim != 1 or np.any(shapes < 0) or np.any(shapes > _MOST):
        raise FileError("shapes do not agree", expected="shapes (k, d) and values", where=source.at(place))
    sizes = np.prod(shapes, axis=1)
    _check_total(sizes.tolist(), len(values), source.at(place))
    parts = np.split(values, np.cumsum(sizes)[:-1]) if len(sizes) else []
    return tuple(part.reshape(shape) for part, shape in zip(parts, shapes.tolist(), strict=True))


def _check_total(counts: list[int], total: int, where: str) -> None:
    if any(count < 0 for count in counts) or sum(counts) != total:
        got = f"{total} values for {sum(counts)}"
        raise FileError("sizes do not agree", expected="as many values as counted", got=got, where=where)


def _read_records(source: Source, node: Node, item: Any, place: str) -> tuple[Any, ...]:
    count = hdf5.number_attribute(source, node, "count")
    if count is None or not 0 <= count[0] <= _MOST:
        raise FileError("the count is missing", expected="an attribute count", where=source.at(place))
    out = []
    for i in range(int(count[0])):
        found, where = _part(source, node, str(i), place)
        stated = hdf5.text_attribute(source, found, "record")
        out.append(read_record(source, found, _chosen(_options(item), stated, source.at(where))))
    return tuple(out)


def _read_dict(source: Source, node: Node, item: Any, place: str) -> dict[str, Any]:
    if not hdf5.is_group(node):
        raise FileError("this is not a group", expected="a group", got="a dataset", where=source.at(place))
    held = hdf5.attribute_names(node, place) if item in (str, int, float) else hdf5.names(node, place)
    return {name: _read(source, node, name, item) for name in held}
