"""Matrices in HDF5 files: dense, plain compressed and binsparse groups, one triangle; read straight into final arrays.

The binsparse layout (https://graphblas.org/binsparse-specification/) is a group with a JSON header in the attribute
``binsparse``; a plain group needs ``shape`` and arrays under their usual names.
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.io import hdf5
from modesieve.io.hdf5 import Array, Node, Source
from modesieve.reduce.arrays import Real, Sparse
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


def read_sparse(stored: Stored) -> Sparse:
    """The matrix as a canonical float64 CSR array: sorted indices, duplicates summed, both triangles."""
    if stored.layout == "dense":
        matrix = _dense_rows(stored)
    elif stored.layout == "COO":
        matrix = _from_coordinates(stored)
    else:
        matrix = _from_compressed(stored)
    if stored.transposed:
        matrix = matrix.T.tocsr()
    if not matrix.has_canonical_format:
        matrix.sum_duplicates()  # in place: the arrays are our own
    return _both_triangles(matrix, stored) if stored.symmetric else matrix


def read_dense(stored: Stored) -> Real:
    """The matrix as a new dense float64 array (r, c)."""
    if stored.layout != "dense" or stored.symmetric:
        size = stored.final_shape[0] * stored.final_shape[1] * 8
        stored.source.budget.take(size, stored.where)
        return np.ascontiguousarray(read_sparse(stored).toarray())
    out = hdf5.read_real(stored.values, what=f"{_short(stored)} holds values").reshape(stored.shape)
    return np.ascontiguousarray(out.T) if stored.transposed else out


def write_matrix(group: Node, name: str, matrix: Any) -> None:
    """Write a dense array as a dataset, a sparse one as a binsparse CSR group, in chunks of 2 MiB."""
    if not sp.issparse(matrix):
        write_array(group, name, np.asarray(matrix))
        return
    csr = sp.csr_array(matrix)
    part = group.create_group(name)
    arrays = {"pointers_to_1": csr.indptr, "indices_1": csr.indices, "values": csr.data}
    for key, values in arrays.items():
        write_array(part, key, values)
    header = {
        "version": "0.1.0",
        "format": "CSR",
        "shape": list(csr.shape),
        "number_of_stored_values": int(csr.nnz),
        "data_types": {key: str(values.dtype) for key, values in arrays.items()},
    }
    part.attrs["binsparse"] = json.dumps({"binsparse": header}, indent=2, sort_keys=True)


def write_array(group: Node, name: str, values: Any) -> None:
    """Write an array; large ones in chunks of whole rows of about 2 MiB."""
    chunks = None
    if values.ndim and values.nbytes > 4 << 20:
        row = max(values[:1].nbytes, 1)
        chunks = (min(max((2 << 20) // row, 1), len(values)), *values.shape[1:])
        if row > 4 << 20 and values.ndim == 2:
            chunks = (1, (2 << 20) // values.itemsize)
    group.create_dataset(name, data=values, chunks=chunks)


# ---- what a file says about a matrix -------------------------------------------------------------------------------


def _dense(source: Source, node: Node) -> Stored:
    values = _real(hdf5.array(source, node))
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
                return _real(hdf5.array(source, found, f"{node.name}/{name}"))
    where = source.at(node.name)
    expected = "one of " + ", ".join(dict.fromkeys(wanted))
    got = ", ".join(held[:10]) or "an empty group"
    raise FileError(f"the {what} of a sparse matrix are missing", expected=expected, got=got, where=where)


def _real(data: Array) -> Array:
    if data.content != "real":
        hdf5.read_real(data)  # raises
    return data


def _shape(source: Source, node: Node, held: tuple[str, ...]) -> tuple[int, int]:
    where = source.at(f"{node.name}/shape")
    stated: Any = hdf5.number_attribute(source, node, "shape", 2)
    if stated is None and "shape" in held:
        data = hdf5.array(source, hdf5.child(source, node, "shape"), f"{node.name}/shape")
        if data.size == 2:
            stated = hdf5.read_real(data).ravel().tolist()
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


def _short(stored: Stored) -> str:
    return stored.where.rsplit("/", 1)[-1]


# ---- reading -------------------------------------------------------------------------------------------------------


def _from_compressed(stored: Stored) -> Sparse:
    shape = stored.shape if stored.layout == "CSR" else stored.shape[::-1]
    index = _index_type(stored)
    assert stored.major is not None
    pointers = np.empty(shape[0] + 1, dtype=index)
    stop = stored.base + stored.count
    hdf5.read_integers(stored.major, pointers, stored.base, stop, subtract=stored.base, what="pointer")
    _check_pointers(pointers, stored)
    minor = _minor(stored, shape[1], index)
    matrix = sp.csr_array((_values(stored), minor, pointers), shape=shape, copy=False)
    return matrix if stored.layout == "CSR" else matrix.T.tocsr()


def _from_coordinates(stored: Stored) -> Sparse:
    index = _index_type(stored)
    stored.source.budget.take(stored.count * (8 + index().itemsize), stored.where)
    stored.source.budget.take((stored.shape[0] + 1) * index().itemsize, stored.where)
    assert stored.major is not None
    rows = np.empty(stored.count, dtype=index)
    high = stored.base + stored.shape[0] - 1
    hdf5.read_integers(stored.major, rows, stored.base, high, subtract=stored.base, what="row index")
    columns = _minor(stored, stored.shape[1], index)
    return sp.coo_array((_values(stored), (rows, columns)), shape=stored.shape, copy=False).tocsr()


def _index_type(stored: Stored) -> Any:
    return np.int32 if stored.count < 2**31 - 1 else np.int64


def _minor(stored: Stored, width: int, index: Any) -> Any:
    assert stored.minor is not None
    out = np.empty(stored.count, dtype=index)
    high = stored.base + width - 1
    hdf5.read_integers(stored.minor, out, stored.base, high, subtract=stored.base, what="index")
    return out


def _values(stored: Stored) -> Real:
    values: Real = hdf5.read_real(stored.values, what=f"{_short(stored)} holds values")
    if stored.iso:
        stored.source.budget.take(8 * stored.count, stored.where)
        return np.full(stored.count, values.ravel()[0])
    return values


def _check_pointers(pointers: Any, stored: Stored) -> None:
    assert stored.major is not None
    where = stored.major.where
    if pointers[0] != 0 or pointers[-1] != stored.count:
        expected = f"first {stored.base}, last {stored.base + stored.count}"
        got = f"first {pointers[0] + stored.base}, last {pointers[-1] + stored.base}"
        one = pointers[0] == 1 and pointers[-1] == stored.count
        remedy = "say index_base = 1 if indices count from 1" if one or pointers[0] == 1 else ""
        raise FileError("pointers do not span the values", expected=expected, got=got, where=where, remedy=remedy)
    falls = pointers[1:] < pointers[:-1]
    if falls.any():
        at = int(np.argmax(falls))
        got = f"{pointers[at]} then {pointers[at + 1]} at position {at}"
        raise FileError("pointers go down", expected="pointers that never fall", got=got, where=where)


def _dense_rows(stored: Stored) -> Sparse:
    """A dense dataset as CSR, a few rows at a time: the zeros never stand in memory together."""
    blocks = []
    if len(stored.values.shape) == 1:  # a binsparse dense matrix: rows one after the other
        return sp.csr_array(hdf5.read_real(stored.values, what=f"{_short(stored)} holds values").reshape(stored.shape))
    for _, piece in stored.values.pieces():
        block = np.asarray(piece, dtype=np.float64).reshape(-1, stored.shape[1])
        hdf5.check_finite(block, stored.values, f"{_short(stored)} holds values", finite=True)
        blocks.append(sp.csr_array(block))
    return sp.vstack(blocks, format="csr") if blocks else sp.csr_array(stored.shape)


def _both_triangles(half: Sparse, stored: Stored) -> Sparse:
    """``half + half^T - diag(half)``; explicit zeros stay (a solver may need them on the diagonal)."""
    n = half.shape[0]
    rows = np.repeat(np.arange(n, dtype=half.indices.dtype), np.diff(half.indptr))
    outside = (half.indices > rows) if stored.symmetric == "lower" else (half.indices < rows)
    if outside.any():
        at = int(np.argmax(outside))
        raise ModelError(
            "entries lie outside the stored triangle",
            expected=f"the {stored.symmetric} triangle only",
            got=f"{int(np.count_nonzero(outside))} entries outside, first at ({rows[at]}, {half.indices[at]})",
            where=stored.where,
            remedy="leave the attribute symmetric out if both triangles are stored",
        )
    off = half.indices != rows
    mirror = sp.coo_array((half.data[off], (half.indices[off], rows[off])), shape=half.shape).tocsr()
    del rows, outside, off
    return _interleaved(half, mirror) if stored.symmetric == "lower" else _interleaved(mirror, half)


def _interleaved(left: Sparse, right: Sparse) -> Sparse:
    """The sum of two CSR arrays, every row of ``left`` wholly left of the same row of ``right``."""
    pointers = left.indptr.astype(np.int64) + right.indptr
    total = int(pointers[-1])
    index = np.int32 if total < 2**31 - 1 else np.int64
    indices, data = np.empty(total, dtype=index), np.empty(total)
    for part, shift in ((left, right.indptr[:-1]), (right, left.indptr[1:])):
        at = np.arange(part.nnz) + np.repeat(shift, np.diff(part.indptr))
        indices[at], data[at] = part.indices, part.data
    return sp.csr_array((data, indices, pointers.astype(index)), shape=left.shape, copy=False)
