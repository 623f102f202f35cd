"""The values of matrices in HDF5 files: read straight into final arrays, one triangle completed; written in chunks."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.io.hdf5 import Node
from modesieve.io.hdf5_arrays import check_finite, read_integers, read_real, write_array
from modesieve.io.matrices import Stored
from modesieve.reduce.arrays import Real, Sparse
from modesieve.reduce.errors import FileError, ModelError

_ROWS_AT_ONCE = 20_000  # when one triangle is completed


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
    out = read_real(stored.values, what=f"{_short(stored)} holds values").reshape(stored.shape)
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


def _short(stored: Stored) -> str:
    return stored.where.rsplit("/", 1)[-1]


def _from_compressed(stored: Stored) -> Sparse:
    shape = stored.shape if stored.layout == "CSR" else stored.shape[::-1]
    index = _index_type(stored)
    assert stored.major is not None
    pointers = np.empty(shape[0] + 1, dtype=index)
    stop = stored.base + stored.count
    read_integers(stored.major, pointers, stored.base, stop, subtract=stored.base, what="pointer")
    _check_pointers(pointers, stored)
    minor = _minor(stored, shape[1], index)
    matrix = sp.csr_array((_values(stored), minor, pointers), shape=shape, copy=False)
    if stored.layout == "CSR":
        return matrix
    stored.source.budget.take(matrix.nnz * (8 + index().itemsize) + 8 * shape[1], stored.where)
    return matrix.T.tocsr()


def _from_coordinates(stored: Stored) -> Sparse:
    index = _index_type(stored)
    stored.source.budget.take(stored.count * (8 + index().itemsize), stored.where)
    stored.source.budget.take((stored.shape[0] + 1) * index().itemsize, stored.where)
    assert stored.major is not None
    rows = np.empty(stored.count, dtype=index)
    high = stored.base + stored.shape[0] - 1
    read_integers(stored.major, rows, stored.base, high, subtract=stored.base, what="row index")
    columns = _minor(stored, stored.shape[1], index)
    return sp.coo_array((_values(stored), (rows, columns)), shape=stored.shape, copy=False).tocsr()


def _index_type(stored: Stored) -> Any:
    return np.int32 if stored.count < 2**31 - 1 else np.int64


def _minor(stored: Stored, width: int, index: Any) -> Any:
    assert stored.minor is not None
    out = np.empty(stored.count, dtype=index)
    high = stored.base + width - 1
    read_integers(stored.minor, out, stored.base, high, subtract=stored.base, what="index")
    return out


def _values(stored: Stored) -> Real:
    values: Real = read_real(stored.values, what=f"{_short(stored)} holds values")
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
        return sp.csr_array(read_real(stored.values, what=f"{_short(stored)} holds values").reshape(stored.shape))
    for _, piece in stored.values.pieces():
        block = np.asarray(piece, dtype=np.float64).reshape(-1, stored.shape[1])
        check_finite(block, stored.values, f"{_short(stored)} holds values", finite=True)
        blocks.append(sp.csr_array(block))
    return sp.vstack(blocks, format="csr") if blocks else sp.csr_array(stored.shape)


def _both_triangles(half: Sparse, stored: Stored) -> Sparse:
    """``half + half^T - diag(half)``; explicit zeros stay (a solver may need them on the diagonal)."""
    _check_triangle(half, stored)
    stored.source.budget.take(3 * half.nnz * (8 + half.indices.itemsize), stored.where)
    other = half.T.tocsr()
    lower, upper = (half, other) if stored.symmetric == "lower" else (other, half)
    n = half.shape[0]
    diagonal = _ends_on_diagonal(lower)
    pointers = lower.indptr.astype(np.int64) + upper.indptr - np.concatenate([[0], np.cumsum(diagonal)])
    total = int(pointers[-1])
    index = np.int32 if total < 2**31 - 1 else np.int64
    indices, data = np.empty(total, dtype=index), np.empty(total)
    for low in range(0, n, _ROWS_AT_ONCE):
        rows = np.arange(low, min(low + _ROWS_AT_ONCE, n))
        left = np.diff(lower.indptr[low : rows[-1] + 2])
        _place(lower, rows, pointers[rows], np.zeros(len(rows), dtype=np.int64), indices, data)
        _place(upper, rows, pointers[rows] + left, diagonal[rows].astype(np.int64), indices, data)
    return sp.csr_array((data, indices, pointers.astype(index)), shape=half.shape, copy=False)


def _check_triangle(half: Sparse, stored: Stored) -> None:
    full = np.flatnonzero(np.diff(half.indptr))
    lower = stored.symmetric == "lower"
    extreme = half.indices[half.indptr[full + 1] - 1] if lower else half.indices[half.indptr[full]]
    outside = np.flatnonzero(extreme > full if lower else extreme < full)
    if outside.size:
        at = outside[0]
        raise ModelError(
            "entries lie outside the stored triangle",
            expected=f"the {stored.symmetric} triangle only",
            got=f"{outside.size} rows with entries outside, first at ({full[at]}, {extreme[at]})",
            where=stored.where,
            remedy="leave the attribute symmetric out if both triangles are stored",
        )


def _ends_on_diagonal(lower: Sparse) -> Any:
    """Mask (n,) of the rows whose last entry is the diagonal one."""
    full = np.flatnonzero(np.diff(lower.indptr))
    out = np.zeros(lower.shape[0], dtype=bool)
    out[full] = lower.indices[lower.indptr[full + 1] - 1] == full
    return out


def _place(part: Sparse, rows: Any, starts: Any, skip: Any, indices: Any, data: Any) -> None:
    """Copy the given rows of ``part``, each without its first ``skip`` entries, to where they begin in the whole."""
    first, last = part.indptr[rows] + skip, part.indptr[rows + 1]
    counts = last - first
    offsets = np.arange(int(counts.sum())) - np.repeat(np.cumsum(counts) - counts, counts)
    source, target = np.repeat(first, counts) + offsets, np.repeat(starts, counts) + offsets
    indices[target], data[target] = part.indices[source], part.data[source]
