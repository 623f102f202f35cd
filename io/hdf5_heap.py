"""Texts of variable length lie in heaps inside an HDF5 file, and the library trusts what the file says of them.

A damaged heap is walked forever, and a reference of four bytes' length makes the library clear four gigabytes. So heaps
and references are checked here first, by the HDF5 File Format Specification 3.0: III.E "Global Heap" and IV.A.2
"Datatype" (a variable-length text of one-byte characters), "Dataspace" and "Attribute" messages.
"""

from __future__ import annotations

import mmap
import re
from collections.abc import Iterator
from typing import Any

import h5py
import numpy as np

from modesieve.reduce.errors import FileError

_HEAP = re.compile(rb"GCOL\x01\0\0\0")
#: Inside the type of such a text: its size, and its one-byte characters. The bytes before tell class and purpose.
_TEXT = re.compile(rb"\x10\0\0\0[\x10\x20\x30\x40\x50].{3}\x01\0\0\0.{4}", re.DOTALL)
_REFERENCE = 16  # length (4), heap address (8), index (4)
_OFFSETS = (0, *(512 << i for i in range(20)))  # where the file's signature may stand
#: Files up to this size are searched whole, larger ones at both ends, where writers put what is not bulk data.
_WHOLE, _ENDS = 256 << 20, 64 << 20


class Heap:
    """The text heaps of one file, checked once, when a text is about to be read."""

    def __init__(self, path: str, size: int) -> None:
        self.path = path
        self.size = size
        self.checked = False

    def check(self, where: str) -> None:
        """Raise FileError if a heap or an attribute's reference to one would trap its reader."""
        if self.checked:
            return
        with open(self.path, "rb") as handle, mmap.mmap(handle.fileno(), 0, access=mmap.ACCESS_READ) as content:
            if _length_size(content) != 8:
                raise _damaged(where)
            for low, high in _spans(len(content)):
                for found in _HEAP.finditer(content, low, high):
                    _check_heap(content, found.start(), where)
                for found in _TEXT.finditer(content, max(low, 4), high):
                    _check_attribute(content, found.start(), found.end(), where)
        self.checked = True

    def check_dataset(self, node: Any, where: str) -> int:
        """The same for the texts of a dataset, whose references must stand openly in the file; their total length."""
        self.check(where)
        total = 0
        with open(self.path, "rb") as handle, mmap.mmap(handle.fileno(), 0, access=mmap.ACCESS_READ) as content:
            for start, count in _extents(node, where):
                total += _check_references(content, start, count, where)
        return total


def _length_size(content: mmap.mmap) -> int:
    """Bytes of a length in this file: 8 for every common writer."""
    at = next((at for at in _OFFSETS if content[at : at + 8] == b"\x89HDF\r\n\x1a\n"), 0)
    return content[at + (14 if content[at + 8] < 2 else 10)] if len(content) > at + 16 else 0


def _spans(size: int) -> list[tuple[int, int]]:
    return [(0, size)] if size <= _WHOLE else [(0, _ENDS), (size - _ENDS, size)]


def _check_heap(content: mmap.mmap, start: int, where: str) -> None:
    """Walk the objects of the heap at ``start``, each: index (2 bytes), references (2), reserved (4), size (8)."""
    size = int.from_bytes(content[start + 8 : start + 16], "little")
    end, at = start + size, start + 16
    if end > len(content):
        raise _damaged(where)
    while at + 16 <= end:
        index = int.from_bytes(content[at : at + 2], "little")
        length = int.from_bytes(content[at + 8 : at + 16], "little")
        step = length if index == 0 else 16 + (length + 7) // 8 * 8  # index 0: free space, its header counted in
        if step < 16 or at + step > end:
            raise _damaged(where)
        at += step


def _check_attribute(content: mmap.mmap, start: int, end: int, where: str) -> None:
    """Check the references behind a text type in an attribute: data space, then one reference for each element."""
    if content[start - 4] & 15 != 9 or content[start - 3] & 15 != 1 or end + 24 > len(content):
        return  # not a text of variable length
    at = end if content[end] in (1, 2) else end + 4  # the first version of attributes pads to 8 bytes
    version, rank, flags = content[at : at + 3]
    if version not in (1, 2) or rank > 32:
        return  # a dataset's type, with something else behind it
    dims, count = at + (8 if version == 1 else 4), 1
    for i in range(rank):
        count *= int.from_bytes(content[dims + 8 * i : dims + 8 * i + 8], "little")
    more = (flags & 1) + (flags >> 1 & 1 if version == 1 else 0)  # largest sizes, permutations
    _check_references(content, dims + 8 * rank * (1 + more), count, where)


def _extents(node: Any, where: str) -> Iterator[tuple[int, int]]:
    """(start, number of references) of every stretch of a text dataset."""
    plist, identity = node.id.get_create_plist(), node.id
    if plist.get_layout() == h5py.h5d.CONTIGUOUS:
        yield identity.get_offset(), node.size
    elif plist.get_layout() == h5py.h5d.CHUNKED and plist.get_nfilters() == 0:
        for i in range(identity.get_num_chunks()):
            info = identity.get_chunk_info(i)
            yield info.byte_offset, info.size // _REFERENCE
    else:
        raise FileError(
            "texts of variable length are stored in a way that is not read here",
            expected="texts without compression, or texts of fixed length",
            where=where,
            remedy="store the texts without compression",
        )


def _check_references(content: mmap.mmap, start: int | None, count: int, where: str) -> int:
    """Refuse a text that is longer than the file it lies in; returns the total length (texts may share their bytes)."""
    if start is None or start + _REFERENCE * count > len(content):
        raise _damaged(where)
    lengths = np.frombuffer(content[start : start + _REFERENCE * count], dtype="<u4")[:: _REFERENCE // 4]
    if lengths.size and lengths.max() > len(content):
        raise _damaged(where)
    return int(lengths.sum(dtype=np.int64))


def _damaged(where: str) -> FileError:
    return FileError(
        "the file's texts are damaged",
        expected="an intact HDF5 file",
        got="an impossible text heap",
        where=where,
        remedy="copy or write the file again",
    )
