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
from modesieve.io.hdf5_heap import Heap
from modesieve.reduce.errors import FileError

Node: TypeAlias = Any  # h5py.Group or h5py.Dataset; h5py ships no types

#: Memory that any file may ask for, and how many times its size on the disk on top (compression).
FREE_BYTES, GAIN = 128 << 20, 32
_LINKS, _TEXT_LENGTH = 16, 4000
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
    heap: Heap

    def at(self, place: str) -> str:
        """File and place for a message."""
        return self.path if place == "/" else f"{self.path}, {place}"


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
        yield Source(path=text, file=file, budget=Budget(text, size), heap=Heap(text, size))


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
        return tuple(_printable(name) for name in islice(group, 1000))


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


# ---- attributes ----------------------------------------------------------------------------------------------------


def attribute_names(node: Node, where: str) -> tuple[str, ...]:
    """Names of the attributes, the first thousand."""
    with reading(where):
        return tuple(_printable(name) for name in islice(node.attrs, 1000))


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
    content = content_of(dtype, where)
    if shape is None or np.prod([int(s) for s in shape], dtype=object) * dtype.itemsize > 1 << 20:
        raise FileError("the attribute has the wrong size", expected="a value", got=f"shape {shape}", where=where)
    if dtype.kind == "O":
        _check_text(source, handle, where)
    with reading(where):
        value = node.attrs[name]
    if content == "text":
        items = np.asarray(value, dtype=object).ravel()
        if len(items) != 1:
            raise FileError("the attribute is a list", expected="one text", got=f"{len(items)} texts", where=where)
        return decoded(items[0], where, 1 << 20)
    return np.asarray(value)


def _check_text(source: Source, handle: Any, where: str) -> None:
    source.heap.check(where)
    with reading(where):
        shared = handle.get_type().committed()
    if shared:  # its references cannot be told from other bytes of the file
        expected = "a text with a type of its own"
        raise FileError("the attribute's type lies elsewhere", expected=expected, got="a named type", where=where)


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


def _printable(name: str | bytes) -> str:
    # Names that are not UTF-8 come as bytes.
    return name if isinstance(name, str) else name.decode("utf-8", "replace")


def content_of(dtype: np.dtype[Any], where: str) -> Literal["real", "complex", "text"]:
    if dtype.kind in "fiub":
        return "real"
    if dtype.kind == "c":
        return "complex"
    if dtype.kind == "S" or h5py.check_string_dtype(dtype) is not None:
        return "text"
    kind = "references" if h5py.check_ref_dtype(dtype) is not None else "objects or records"
    raise FileError("the dataset holds no plain numbers", expected="numbers", got=f"{kind} ({dtype})", where=where)


def decoded(value: Any, where: str, limit: int = _TEXT_LENGTH) -> str:
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
