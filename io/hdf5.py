"""Reading HDF5 files that nobody vouches for: everything is checked before memory is taken.

Links out of the file, virtual and external datasets, references, objects and unknown filters are refused; sizes are
held against what the file really stores. Whatever the library throws at a damaged file comes out as a FileError.
"""

from __future__ import annotations

import os
import stat
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import Any, Literal, TypeAlias

import h5py
import numpy as np

from modesieve.io.atomic import PathLike
from modesieve.reduce.errors import FileError

Node: TypeAlias = Any  # h5py.Group or h5py.Dataset; h5py ships no types

#: Memory that any file may ask for, and how many times its size on the disk on top (compression).
FREE_BYTES, GAIN = 128 << 20, 32
_PIECE_BYTES = 4 << 20
_LINKS, _TEXT_LENGTH = 16, 4000
#: deflate, shuffle, fletcher32, szip, nbit, scale-offset, lzf
_FILTERS = {1, 2, 3, 4, 5, 6, 32000}
_LIBRARY = (OSError, RuntimeError, KeyError, ValueError, TypeError, AttributeError, OverflowError, MemoryError)


class Budget:
    """How much memory a file may still ask for."""

    def __init__(self, path: str, file_size: int) -> None:
        self.path = path
        self.file_size = file_size
        self.left = FREE_BYTES + GAIN * file_size
        self.memory = _available_memory()

    def take(self, size: int, where: str) -> None:
        """Set ``size`` bytes aside. Raises FileError when the file cannot honestly hold that much, or memory cannot."""
        self.left -= size
        self.memory -= size
        if self.left < 0:
            raise FileError(
                "the file declares far more values than it stores",
                expected=f"at most {GAIN} times the {_bytes(self.file_size)} on the disk",
                got=f"{_bytes(size)} here",
                where=where,
                remedy="store a sparse matrix, or write without compression",
            )
        if self.memory < 0:
            raise FileError(
                "the file does not fit into memory",
                expected=f"at most {_bytes(max(self.memory + size, 0))} free memory",
                got=f"{_bytes(size)} more",
                where=where,
                remedy="free some memory, or use a larger machine",
            )


@dataclass(frozen=True, kw_only=True, eq=False)
class Source:
    """An opened file: where names in messages start, and the memory it may take."""

    path: str
    file: Node
    budget: Budget

    def at(self, place: str) -> str:
        """File and place for a message."""
        return self.path if place == "/" else f"{self.path}, {place}"


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

    def pieces(self) -> Iterator[tuple[Any, Any]]:
        """The content along the first axis, piece by piece, as stored."""
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


@contextmanager
def reading(where: str) -> Iterator[None]:
    """Turn whatever the library raises into a FileError. Only around calls into the library."""
    try:
        yield
    except FileError:
        raise
    except _LIBRARY as error:
        raise FileError(
            "the file is damaged here, or holds something that cannot be read",
            expected="an intact HDF5 file",
            got=str(error).splitlines()[0][:200] if str(error) else type(error).__name__,
            where=where,
            remedy="write the file again",
        ) from error


@contextmanager
def opened(path: PathLike) -> Iterator[Source]:
    """Open an HDF5 file for reading.

    Raises FileError for a missing, unreadable, foreign or truncated file.
    """
    text = os.fspath(path)
    size = _checked_file(text)
    try:
        file = h5py.File(text, "r", locking=False)
    except _LIBRARY as error:
        truncated = "truncated" in str(error)
        raise FileError(
            "the file is truncated" if truncated else "the file is damaged",
            expected="a complete HDF5 file",
            got=f"{size} bytes; {_reason(error)}",
            where=text,
            remedy="copy or write the file again",
        ) from error
    with file:
        yield Source(path=text, file=file, budget=Budget(text, size))


# ---- nodes ---------------------------------------------------------------------------------------------------------


def find(source: Source, place: str) -> Node | None:
    """The group or dataset at ``place``, None if there is none. Only links inside the file are followed."""
    return _follow(source, source.file, _parts(place), source.at(place), _LINKS)


def child(source: Source, group: Node, name: str) -> Node | None:
    """What ``group`` holds under ``name`` (a path is allowed), None if nothing."""
    return _follow(source, group, _parts(name), source.at(f"{group.name.rstrip('/')}/{name}"), _LINKS)


def names(group: Node, where: str) -> tuple[str, ...]:
    """Names in a group, the first thousand."""
    with reading(where):
        return tuple(islice(group, 1000))


def is_group(node: Node) -> bool:
    return isinstance(node, h5py.Group)


def _parts(place: str) -> list[str]:
    return [part for part in place.split("/") if part not in ("", ".")]


def _follow(source: Source, start: Node, parts: list[str], where: str, links: int) -> Node | None:
    node = start
    for i, part in enumerate(parts):
        if not is_group(node):
            return None
        with reading(where):
            link = node.get(part, getlink=True)
        if link is None:
            return None
        if isinstance(link, h5py.HardLink):
            with reading(where):
                node = node[part]
        else:
            target = _inside(link, where, links)
            base = source.file if target.startswith("/") else node
            return _follow(source, base, _parts(target) + parts[i + 1 :], where, links - 1)
    if not isinstance(node, (h5py.Group, h5py.Dataset)):
        raise FileError("this is a type definition", expected="a dataset or a group", got="a named type", where=where)
    return node


def _inside(link: Any, where: str, links: int) -> str:
    """Target of a soft link. Raises FileError for links out of the file and for endless chains."""
    if isinstance(link, h5py.ExternalLink):
        raise FileError(
            "a link points into another file; such links are never followed",
            expected="the data itself",
            got=f"a link to {link.filename!r}",
            where=where,
            remedy="copy the data into this file",
        )
    if not isinstance(link, h5py.SoftLink) or links <= 0:
        raise FileError("a link leads nowhere", expected="the data itself", got="a circle of links", where=where)
    return str(link.path)


# ---- datasets ------------------------------------------------------------------------------------------------------


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
        content=_content(dtype, where),
        rows=_rows(shape, chunks, dtype.itemsize) if dtype.kind != "O" else _text_rows(source),
    )
    _check_storage(out, chunks, stored)
    return out


def read_real(
    data: Array, *, dtype: Any = np.float64, what: str = "values", finite: bool = True, complex_too: bool = False
) -> Any:
    """The whole dataset as a new array of ``dtype``, converted piece by piece from any real number type."""
    if data.content == "text" or (data.content == "complex" and not complex_too):
        raise _wrong_type(data, "real numbers" if not complex_too else "numbers")
    out = np.empty(data.shape, dtype=dtype)
    for part, piece in data.pieces():
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
        out += [_text(v, data.where) for v in piece]
        data.source.budget.take(sum(len(v) for v in out[-len(piece) :]), data.where)
    return tuple(out)


def check_finite(values: Any, data: Array, what: str, finite: bool) -> None:
    if finite and not np.isfinite(values).all():
        raise FileError(f"{what} that are not numbers", expected="finite values", got="NaN or Inf", where=data.where)


def _dtype(node: Node, where: str) -> np.dtype[Any]:
    # Types without a counterpart in numpy (time, opaque mixtures) fail here.
    with reading(where):
        return np.dtype(node.dtype)


def _content(dtype: np.dtype[Any], where: str) -> Literal["real", "complex", "text"]:
    if dtype.kind in "fiub":
        return "real"
    if dtype.kind == "c":
        return "complex"
    if dtype.kind == "S" or h5py.check_string_dtype(dtype) is not None:
        return "text"
    kind = "references" if h5py.check_ref_dtype(dtype) is not None else "objects or records"
    raise FileError("the dataset holds no plain numbers", expected="numbers", got=f"{kind} ({dtype})", where=where)


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


def _text_rows(source: Source) -> int:
    # Many texts of variable length may share one long one: few at a time bounds what a small file can ask for.
    return min(max(FREE_BYTES // max(source.budget.file_size, 1), 16), 4096)


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


# ---- attributes ----------------------------------------------------------------------------------------------------


def attribute_names(node: Node, where: str) -> tuple[str, ...]:
    """Names of the attributes, the first thousand."""
    with reading(where):
        return tuple(islice(node.attrs, 1000))


def attribute(source: Source, node: Node, name: str) -> Any:
    """The attribute as a text or an array of numbers, None if missing.

    Raises FileError for references, objects and oversized attributes.
    """
    where = source.at(f"attribute {name} of {node.name}")
    with reading(where):
        if name not in node.attrs:
            return None
        handle = node.attrs.get_id(name)
        dtype, shape = np.dtype(handle.dtype), handle.shape
    content = _content(dtype, where)
    if shape is None or np.prod([int(s) for s in shape], dtype=object) * dtype.itemsize > 1 << 20:
        raise FileError("the attribute has the wrong size", expected="a value", got=f"shape {shape}", where=where)
    with reading(where):
        value = node.attrs[name]
    if content == "text":
        items = np.asarray(value, dtype=object).ravel()
        if len(items) != 1:
            raise FileError("the attribute is a list", expected="one text", got=f"{len(items)} texts", where=where)
        return _text(items[0], where, 1 << 20)
    return np.asarray(value)


def text_attribute(source: Source, node: Node, name: str, default: str = "") -> str:
    """A text attribute. Raises FileError if it holds something else."""
    value = attribute(source, node, name)
    if value is None:
        return default
    if not isinstance(value, str):
        raise _wrong_attribute(source, node, name, "a text", value)
    return value


def number_attribute(source: Source, node: Node, name: str, count: int = 1) -> tuple[float, ...] | None:
    """``count`` finite real numbers, None if the attribute is missing. Raises FileError if it holds something else."""
    value = attribute(source, node, name)
    if value is None:
        return None
    expected = "a finite real number" if count == 1 else f"{count} finite real numbers"
    if isinstance(value, str) or np.iscomplexobj(value) or value.size != count:
        raise _wrong_attribute(source, node, name, expected, value)
    numbers = tuple(float(v) for v in value.ravel())
    if not np.isfinite(numbers).all():
        raise _wrong_attribute(source, node, name, expected, value)
    return numbers


def _wrong_attribute(source: Source, node: Node, name: str, expected: str, value: Any) -> FileError:
    where = source.at(f"attribute {name} of {node.name}")
    got = f"the text {value[:60]!r}" if isinstance(value, str) else f"{value.dtype} of shape {value.shape}"
    if not isinstance(value, str) and value.size == 1:
        got = str(value.ravel()[0])
    return FileError("the attribute has the wrong type or value", expected=expected, got=got, where=where)


def _text(value: Any, where: str, limit: int = _TEXT_LENGTH) -> str:
    try:
        text = value.decode("utf-8") if isinstance(value, bytes) else str(value)
        text.encode("utf-8")  # what h5py could not decode comes as lone surrogates
    except UnicodeError as error:
        raise FileError("a text is not UTF-8", expected="UTF-8", got=repr(value)[:60], where=where) from error
    if len(text) > limit:
        raise FileError("a text is too long", expected=f"at most {limit} characters", got=str(len(text)), where=where)
    return text.rstrip("\0")


# ---- the file as a whole -------------------------------------------------------------------------------------------


def _checked_file(path: str) -> int:
    """Size of a regular, readable file with an HDF5 signature."""
    try:
        info = os.stat(path)
        if not stat.S_ISREG(info.st_mode):
            got = "a folder" if stat.S_ISDIR(info.st_mode) else "a device or pipe"
            raise FileError("this is not a file", expected="an HDF5 file", got=got, where=path)
        with open(path, "rb") as handle:
            head = handle.read(8)
        known = info.st_size > 0 and h5py.is_hdf5(path)
    except FileNotFoundError as error:
        raise FileError("there is no such file", where=path, remedy=_similar(path)) from error
    except (OSError, ValueError) as error:
        if isinstance(error, FileError):
            raise
        raise FileError("the file cannot be opened", got=_reason(error), where=path) from error
    if not known:
        got = "an empty file" if info.st_size == 0 else f"a file that begins with {head!r}"
        raise FileError("this is not an HDF5 file", expected="an HDF5 file", got=got, where=path)
    return info.st_size


def _reason(error: BaseException) -> str:
    number = getattr(error, "errno", None)
    return os.strerror(number) if number else str(error).splitlines()[0][:200]


def _similar(path: str) -> str:
    import difflib

    try:
        beside = [entry.name for entry in islice(os.scandir(Path(path).parent or "."), 1000)]
    except (OSError, ValueError):
        return ""
    close = difflib.get_close_matches(Path(path).name, beside, 3)
    return "did you mean " + " or ".join(close) + "?" if close else ""


def _available_memory() -> int:
    """Nine tenths of what the system can still give."""
    try:
        for line in Path("/proc/meminfo").read_text().splitlines():
            if line.startswith("MemAvailable:"):
                return int(line.split()[1]) * 1024 * 9 // 10
    except (OSError, ValueError, IndexError):
        pass
    return 1 << 40


def _bytes(size: int) -> str:
    for limit, name in ((1 << 30, "GiB"), (1 << 20, "MiB"), (1 << 10, "KiB")):
        if size >= limit:
            return f"{size / limit:.3g} {name}"
    return f"{size} bytes"
