"""Matrices in HDF5 files: dense, plain compressed and binsparse groups, one triangle; read straight into final arrays.

The binsparse layout (https://graphblas.org/binsparse-specification/) is a group with a JSON header in the attribute
``binsparse``; a plain group needs ``shape`` and arrays under their usual names.
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

from modesieve.io import hdf5
from modesieve.io.hdf5 import Node, Source
from modesieve.io.hdf5_arrays import Array, array, read_real
from modesieve.reduce.errors import FileError, ModelError

_VALUES = ("data", "values")
_POINTERS = ("indptr", "pointers", "pointers_to_1")
_ROWS = ("rows", "row", "indices_0")
_COLUMNS = ("columns", "column", "cols", "col", "indices_1")
_LAYOUTS = ("CSR", "CSC", "COO", "dense")
_LARGEST = 2**31 - 2  # rows or columns: index arrays of the solvers are 32 bits wide


@dataclass(frozen=True, kw_only=True)
class Place:
    """Where a matrix lies in a foreign file, and what the file itself does not say.

    layout: "CSR", "CSC" or "COO"; index_base: 0 or 1; transposed: the file holds the transpose; symmetric: "lower" or
    "upper" if only that triangle is stored. None or "": as the file says.
    """

    path: str
    layout: str = ""
    index_base: int | None = None
    transposed: bool = False
    symmetric: str = ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Stored:
    """A matrix in a file whose sizes and types fit together; its values are still unread.

    layout: "dense", "CSR", "CSC" or "COO". values: (nnz,), or (1,) if ``iso`` (one value for all); dense (r, c).
    minor: column of each entry (row for CSC). major: pointers (r + 1,) (c + 1 for CSC), or the rows of COO (nnz,).
    """

    source: Source
    where: str
    layout: str
    shape: tuple[int, int]
    values: Array
    minor: Array | None = None
    major: Array | None = None
    count: int = 0
    iso: bool = False
    symmetric: str = ""
    base: int = 0
    transposed: bool = False

    @property
    def final_shape(self) -> tuple[int, int]:
        """Shape of the matrix that is meant."""
        return self.shape[::-1] if self.transposed else self.shape


def locate(source: Source, place: Place, parent: Node | None = None) -> Stored | None:
    """Check the matrix at ``place`` (below ``parent`` unless it starts with "/") as far as its sizes and types tell.

    None if nothing lies there. Raises FileError or ModelError for what cannot be a real matrix.
    """
    below = parent is not None and not place.path.startswith("/")
    node = hdf5.child(source, parent, place.path) if below else hdf5.find(source, place.path)
    if node is None:
        return None
    if not hdf5.is_group(node):
        stored = _dense(source, node)
    else:
        header = hdf5.text_attribute(source, node, "binsparse")
        stored = _binsparse(source, node, header) if header else _plain(source, node, place)
    return _told(stored, node, place)


# ---- what a file says about a matrix -------------------------------------------------------------------------------


def _dense(source: Source, node: Node) -> Stored:
    values = _real(array(source, node))
    if len(values.shape) != 2:
        remedy = (
            f"store it with shape ({values.shape[0]}, 1) or (1, {values.shape[0]})" if len(values.shape) == 1 else ""
        )
        got = f"shape {values.shape}"
        raise ModelError("this is not a matrix", expected="two dimensions", got=got, where=values.where, remedy=remedy)
    shape = (values.shape[0], values.shape[1])
    return Stored(source=source, where=values.where, layout="dense", shape=shape, values=values)


def _plain(source: Source, node: Node, place: Place) -> Stored:
    where = source.at(node.name)
    held = hdf5.names(node, where)
    layout = _layout(source, node, place, held)
    values = _named(source, node, _VALUES, held, "values")
    if layout == "COO":
        major = _named(source, node, _ROWS, held, "row indices")
        minor = _named(source, node, _COLUMNS, held, "column indices")
    else:
        major = _named(source, node, _POINTERS, held, "pointers")
        across = _COLUMNS if layout == "CSR" else _ROWS
        minor = _named(source, node, ("indices", *across, "indices_1"), held, "indices")
    return Stored(
        source=source,
        where=where,
        layout=layout,
        shape=_shape(source, node, held),
        values=values,
        minor=minor,
        major=major,
        count=values.size,
    )


def _layout(source: Source, node: Node, place: Place, held: tuple[str, ...]) -> str:
    given = place.layout or hdf5.text_attribute(source, node, "layout")
    if not given:
        coordinates = any(n in held for n in _ROWS) and any(n in held for n in _COLUMNS)
        return "COO" if coordinates and not any(n in held for n in _POINTERS) else "CSR"
    if given.upper() not in ("CSR", "CSC", "COO"):
        where = source.at(node.name)
        raise FileError("unknown layout of a sparse matrix", expected="CSR, CSC or COO", got=given, where=where)
    return given.upper()


def _binsparse(source: Source, node: Node, text: str) -> Stored:
    where = source.at(node.name)
    header = _header(text, where)
    layout = _BINSPARSE.get(str(header.get("format")).upper())
    shape: Any = header.get("shape")
    if layout is None or str(header.get("version", "0.1"))[:2] not in ("0.", "1."):
        got = f"format {header.get('format')!r}, version {header.get('version')!r}"
        raise FileError("this binsparse matrix is not read here", expected=", ".join(_BINSPARSE), got=got, where=where)
    if not _is_list(shape, 2):
        raise FileError(
            "the shape is no pair of whole numbers", expected="[rows, columns]", got=f"{shape}", where=where
        )
    _refuse_fill(header, where)
    held, iso = hdf5.names(node, where), str(_types(header).get("values")).startswith("iso[")
    values = _named(source, node, ("values",), held, "values")
    count = header.get("number_of_stored_values")
    if not isinstance(count, int) or count < 0 or (values.size != (1 if iso else count)):
        expected = f"{count} values, as the header says" if not iso else "one value"
        raise FileError("sizes do not agree", expected=expected, got=str(values.size), where=values.where)
    common: dict[str, Any] = {"source": source, "where": where, "values": values, "count": count}
    common |= {"symmetric": _STRUCTURES.get(str(header.get("structure", "")), "")}
    if layout in ("DMATR", "DMATC"):
        return _binsparse_dense(layout, (shape[0], shape[1]), iso, common)
    major = ("indices_0",) if layout == "COO" else ("pointers_to_1",)
    return Stored(
        layout=layout,
        shape=_sane_shape(shape, where),
        minor=_named(source, node, ("indices_1",), held, "indices"),
        major=_named(source, node, major, held, "pointers"),
        iso=iso,
        **common,
    )


def _binsparse_dense(layout: str, shape: tuple[int, int], iso: bool, common: dict[str, Any]) -> Stored:
    rows, columns = _sane_shape(shape, common["where"])
    if iso or common["count"] != rows * columns:
        expected = f"{rows * columns} values for shape {(rows, columns)}"
        got = "one value for all" if iso else f"{common['count']}"
        raise FileError("sizes do not agree", expected=expected, got=got, where=common["where"])
    if layout == "DMATC":
        return Stored(layout="dense", shape=(columns, rows), transposed=True, **common)
    return Stored(layout="dense", shape=(rows, columns), **common)


_BINSPARSE = {"CSR": "CSR", "CSC": "CSC", "COO": "COO", "COOR": "COO", "COOC": "COO", "DMAT": "DMATR", "DMATR": "DMATR"}
_BINSPARSE |= {"DMATC": "DMATC"}
_STRUCTURES = {"symmetric_lower": "lower", "symmetric_upper": "upper"}


def _header(text: str, where: str) -> dict[str, Any]:
    try:
        header = json.loads(text)["binsparse"]
        if not isinstance(header, dict):
            raise TypeError("the header is not an object")
    except (ValueError, KeyError, TypeError, RecursionError) as error:
        got = f"{type(error).__name__}: {str(error)[:80]}"
        raise FileError("the binsparse header cannot be read", expected="JSON", got=got, where=where) from error
    return header


def _types(header: dict[str, Any]) -> dict[str, Any]:
    types = header.get("data_types")
    return types if isinstance(types, dict) else {}


def _refuse_fill(header: dict[str, Any], where: str) -> None:
    if "complex[" in str(_types(header).get("values")):
        raise FileError("the matrix is complex", expected="real numbers", got="complex values", where=where)
    structure = str(header.get("structure", "")) or "general"
    if structure not in (*_STRUCTURES, "general"):
        raise FileError("unknown structure", expected=", ".join(_STRUCTURES), got=structure, where=where)
    if header.get("fill") is True:
        remedy = "store the zeros as zeros"
        raise FileError(
            "entries not stored are not zero", expected="no fill value", got="a fill", where=where, remedy=remedy
        )


def _told(stored: Stored, node: Node, place: Place) -> Stored:
    """Add what attributes and the place say, and check that all sizes agree."""
    triangle = place.symmetric or hdf5.text_attribute(stored.source, node, "symmetric") or stored.symmetric
    if triangle not in ("", "lower", "upper"):
        got = repr(triangle)
        raise FileError("unknown triangle", expected='symmetric = "lower" or "upper"', got=got, where=stored.where)
    if triangle and stored.shape[0] != stored.shape[1]:
        raise ModelError("one triangle of a matrix that is not square", got=f"shape {stored.shape}", where=stored.where)
    flip = place.transposed != stored.transposed
    if triangle and flip:
        triangle = "upper" if triangle == "lower" else "lower"
    out = replace(stored, symmetric=triangle, base=_base(stored, node, place), transposed=flip)
    _check_sizes(out)
    return out


def _base(stored: Stored, node: Node, place: Place) -> int:
    given = place.index_base
    if given is None:
        stated = hdf5.number_attribute(stored.source, node, "index_base")
        given = 0 if stated is None else stated[0]  # type: ignore[assignment]
    if given not in (0, 1):
        raise FileError("unknown index base", expected="index_base = 0 or 1", got=f"{given:g}", where=stored.where)
    return int(given)


def _check_sizes(stored: Stored) -> None:
    rows, columns = stored.shape
    if stored.layout == "dense":
        return
    assert stored.minor is not None
    assert stored.major is not None
    along = {"CSR": rows + 1, "CSC": columns + 1, "COO": stored.count}[stored.layout]
    for part, size in ((stored.minor, stored.count), (stored.major, along)):
        if part.shape != (size,):
            raise FileError(
                "sizes of a sparse matrix do not agree",
                expected=f"{size} entries for shape {stored.shape} in {stored.layout} layout",
                got=f"shape {part.shape}",
                where=part.where,
                remedy=f"check shape and layout; {_other_layout(stored)}" if part is stored.major else "",
            )
    if not stored.iso and len(stored.values.shape) != 1:
        got = f"shape {stored.values.shape}"
        raise FileError("the values are not a list", expected="one dimension", got=got, where=stored.values.where)


def _other_layout(stored: Stored) -> str:
    return 'say layout = "CSC" if columns are compressed' if stored.layout == "CSR" else "is it CSR?"


def _named(source: Source, node: Node, wanted: Iterable[str], held: tuple[str, ...], what: str) -> Array:
    for name in wanted:
        if name in held:
            found = hdf5.child(source, node, name)
            if found is not None:
                return _real(array(source, found, f"{node.name}/{name}"))
    where = source.at(node.name)
    expected = "one of " + ", ".join(dict.fromkeys(wanted))
    got = ", ".join(held[:10]) or "an empty group"
    raise FileError(f"the {what} of a sparse matrix are missing", expected=expected, got=got, where=where)


def _real(data: Array) -> Array:
    if data.content != "real":
        read_real(data)  # raises
    return data


def _shape(source: Source, node: Node, held: tuple[str, ...]) -> tuple[int, int]:
    where = source.at(f"{node.name}/shape")
    stated: Any = hdf5.number_attribute(source, node, "shape", 2)
    if stated is None and "shape" in held:
        data = array(source, hdf5.child(source, node, "shape"), f"{node.name}/shape")
        if data.size == 2:
            stated = read_real(data).ravel().tolist()
    if stated is None:
        raise FileError("the shape of a sparse matrix is missing", expected="shape = (rows, columns)", where=where)
    return _sane_shape(stated, where)


def _sane_shape(shape: Iterable[float], where: str) -> tuple[int, int]:
    rows, columns = shape
    if not all(0 <= s <= _LARGEST and s == int(s) for s in (rows, columns)):
        got = f"({rows!s:.20}, {columns!s:.20})"
        raise FileError("impossible shape", expected=f"whole numbers up to {_LARGEST}", got=got, where=where)
    return int(rows), int(columns)


def _is_list(value: Any, count: int) -> bool:
    return isinstance(value, list) and len(value) == count and all(type(v) is int for v in value)
