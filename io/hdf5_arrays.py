"""Datasets of files that nobody vouches for: checked before memory is taken, then read piece by piece and converted."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Literal

import h5py
import numpy as np

from modesieve.io.hdf5 import Node, Source, content_of, decoded, reading
from modesieve.reduce.errors import FileError

_PIECE_BYTES = 4 << 20
#: deflate, shuffle, fletcher32, szip, nbit, scale-offset, lzf
_FILTERS = {1, 2, 3, 4, 5, 6, 32000}


@dataclass(frozen=True, kw_only=True, eq=False)
class Array:
    """A dataset whose type, shape and storage are checked; nothing is read yet."""

    source: Source
    node: Node
    where: str
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    content: Literal["real", "complex", "text"]
    rows: int  # rows (along the first axis) that are read at once

    @property
    def size(self) -> int:
        return int(np.prod([int(s) for s in self.shape], dtype=object)) if self.shape else 1

    def pieces(self, out: Any = None) -> Iterator[tuple[Any, Any]]:
        """The content along the first axis, piece by piece, as stored; each piece is valid until the next.

        out: an array of the same shape and type to read straight into.
        """
        if not self.shape or self.content == "text":
            yield from self._fresh_pieces()
            return
        target: Any = np.empty((self.rows, *self.shape[1:]), dtype=self.dtype) if out is None else out
        for start in range(0, self.shape[0], self.rows):
            part = slice(start, min(start + self.rows, self.shape[0]))
            into = slice(0, part.stop - start) if out is None else part
            with reading(self.where):
                self.node.read_direct(target, part, into)
            yield part, target[into]

    def _fresh_pieces(self) -> Iterator[tuple[Any, Any]]:
        if not self.shape:
            with reading(self.where):
                whole = self.node[()]
            yield (), whole
            return
        for start in range(0, self.shape[0], self.rows):
            part = slice(start, min(start + self.rows, self.shape[0]))
            with reading(self.where):
                piece = self.node[part]
            yield part, piece


def array(source: Source, node: Node, place: str = "") -> Array:
    """Check a dataset's type, shape and storage, and set its memory aside."""
    where = source.at(place or node.name)
    if not isinstance(node, h5py.Dataset):
        raise FileError("this is not a dataset", expected="a dataset of numbers", got="a group", where=where)
    with reading(where):
        dtype = _dtype(node, where)
        shape, chunks = node.shape, node.chunks
        stored, outside = int(node.id.get_storage_size()), bool(node.is_virtual or node.external)
        filters = _filters(node)
    if shape is None:
        raise FileError("the dataset is empty", expected="values", got="no data space", where=where)
    if outside:
        raise FileError("the dataset lies in another file", expected="the data itself", got="a reference", where=where)
    if unknown := filters - _FILTERS:
        raise FileError(
            "the dataset is compressed in a way that is not read here",
            expected="gzip, lzf or no compression",
            got=f"filter {min(unknown)}",
            where=where,
            remedy="write the file with gzip or without compression",
        )
    shape = tuple(int(s) for s in shape)
    out = Array(
        source=source,
        node=node,
        where=where,
        shape=shape,
        dtype=dtype,
        content=content_of(dtype, where),
        rows=_rows(shape, chunks, dtype.itemsize),
    )
    _check_storage(out, chunks, stored)
    if dtype.kind == "O" and out.size:
        with reading(where):
            total = source.heap.check_dataset(node, where)
        source.budget.take(total, where)
    return out


def read_real(
    data: Array, *, dtype: Any = np.float64, what: str = "values", finite: bool = True, complex_too: bool = False
) -> Any:
    """The whole dataset as a new array of ``dtype``, converted piece by piece from any real number type."""
    if data.content == "text" or (data.content == "complex" and not complex_too):
        raise _wrong_type(data, "real numbers" if not complex_too else "numbers")
    out = np.empty(data.shape, dtype=dtype)
    direct = out if data.dtype == out.dtype and data.shape else None
    for part, piece in data.pieces(direct):
        if direct is None:
            with np.errstate(over="ignore", invalid="ignore"):  # what does not fit becomes inf and is refused below
                out[part] = piece
        check_finite(out[part], data, what, finite)
    return out


def read_integers(data: Array, out: Any, low: int, high: int, *, subtract: int = 0, what: str = "index") -> None:
    """Fill ``out`` (k,) with the dataset minus ``subtract``; every stored value must be whole and in low..high."""
    if data.content != "real":
        raise _wrong_type(data, "whole numbers")
    for part, piece in data.pieces():
        if piece.size == 0:
            continue
        smallest, largest = piece.min(), piece.max()
        if not (smallest >= low and largest <= high):
            bad = smallest if not smallest >= low else largest
            raise FileError(f"{what} out of range", expected=f"{low} to {high}", got=f"{bad}", where=data.where)
        if data.dtype.kind == "f" and np.any(piece != np.floor(piece)):
            raise FileError(f"{what} is not a whole number", expected="integers", got=str(data.dtype), where=data.where)
        out[part] = piece
        if subtract:
            out[part] -= subtract


def read_texts(data: Array, limit: int) -> tuple[str, ...]:
    """A list of at most ``limit`` texts (UTF-8); whole numbers are taken as texts too."""
    if len(data.shape) != 1 or data.shape[0] > limit:
        expected = f"a list of at most {limit}"
        raise FileError("the list has the wrong size", expected=expected, got=f"shape {data.shape}", where=data.where)
    if data.content == "real" and data.dtype.kind in "iu":
        numbers = np.empty(data.shape, dtype=np.int64)
        read_integers(data, numbers, -(2**62), 2**62, what="label")
        return tuple(str(v) for v in numbers.tolist())
    if data.content != "text":
        raise _wrong_type(data, "texts")
    out: list[str] = []
    for _, piece in data.pieces():
        out += [decoded(v, data.where) for v in piece]
    return tuple(out)


def check_finite(values: Any, data: Array, what: str, finite: bool) -> None:
    if finite and not np.isfinite(values).all():
        raise FileError(f"{what} that are not numbers", expected="finite values", got="NaN or Inf", where=data.where)


def _dtype(node: Node, where: str) -> np.dtype[Any]:
    # Types without a counterpart in numpy (time, opaque mixtures) fail here.
    with reading(where):
        return np.dtype(node.dtype)


def _filters(node: Node) -> set[int]:
    plist = node.id.get_create_plist()
    return {int(plist.get_filter(i)[0]) for i in range(plist.get_nfilters())}


def _rows(shape: tuple[int, ...], chunks: tuple[int, ...] | None, itemsize: int) -> int:
    """Rows in a piece: about 4 MiB, and whole chunks, so that none is decompressed twice."""
    if not shape or 0 in shape:
        return 1
    row = max(int(np.prod([int(s) for s in shape[1:]], dtype=object)) * itemsize, 1)
    wanted = max(_PIECE_BYTES // row, 1)
    if chunks:
        wanted = max(wanted // chunks[0], 1) * chunks[0]
    return int(min(wanted, shape[0]))


def _check_storage(data: Array, chunks: tuple[int, ...] | None, stored: int) -> None:
    declared = data.size * data.dtype.itemsize
    if declared == 0:
        return
    if stored == 0 or (chunks is None and stored < declared):
        raise FileError(
            "the dataset stores fewer values than it declares",
            expected=f"{declared} bytes for shape {data.shape}",
            got=f"{stored} bytes",
            where=data.where,
            remedy="write the file again",
        )
    chunk = int(np.prod([int(c) for c in chunks], dtype=object)) * data.dtype.itemsize if chunks else 0
    data.source.budget.take(max(declared, chunk), data.where)


def _wrong_type(data: Array, expected: str) -> FileError:
    remedy = "store the real part, or a real form of the model" if data.content == "complex" else ""
    got = {"complex": f"complex numbers ({data.dtype})", "text": "texts", "real": str(data.dtype)}[data.content]
    return FileError("the dataset has the wrong type", expected=expected, got=got, where=data.where, remedy=remedy)


def write_array(group: Node, name: str, values: Any) -> None:
    """Write an array; large ones in chunks of whole rows of about 2 MiB."""
    chunks = None
    if values.ndim and values.nbytes > 4 << 20:
        row = max(values[:1].nbytes, 1)
        chunks = (min(max((2 << 20) // row, 1), len(values)), *values.shape[1:])
        if row > 4 << 20 and values.ndim == 2:
            chunks = (1, (2 << 20) // values.itemsize)
    group.create_dataset(name, data=values, chunks=chunks)
