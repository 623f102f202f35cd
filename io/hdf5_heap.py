"""Texts of variable length lie in heaps inside an HDF5 file; the library walks a damaged heap forever.

So the heaps are checked here first, from the file format specification (HDF5 File Format Specification 3.0, III.E,
"Disk Format: Level 1E - Global Heap"): every object must be at least as long as its header and lie inside its heap.
"""

from __future__ import annotations

import mmap
import re

from modesieve.reduce.errors import FileError

_START = re.compile(rb"GCOL\x01\0\0\0")
#: Files up to this size are searched whole, larger ones at both ends, where writers put what is not bulk data.
_OFFSETS = (0, *(512 << i for i in range(20)))  # where the file's signature may stand
_WHOLE, _ENDS = 256 << 20, 64 << 20


class Heap:
    """The text heaps of one file, checked when a text is about to be read, once."""

    def __init__(self, path: str, size: int) -> None:
        self.path = path
        self.size = size
        self.checked = False

    def check(self, where: str) -> None:
        """Raise FileError if a heap of the file would trap its reader."""
        if self.checked or self.size == 0:
            return
        with open(self.path, "rb") as handle, mmap.mmap(handle.fileno(), 0, access=mmap.ACCESS_READ) as content:
            if _length_size(content) != 8:
                raise _damaged(where)
            for start in _starts(content):
                _check_heap(content, start, where)
        self.checked = True


def _length_size(content: mmap.mmap) -> int:
    """Bytes of a length in this file: 8 for every common writer."""
    at = next((at for at in _OFFSETS if content[at : at + 8] == b"\x89HDF\r\n\x1a\n"), 0)
    return content[at + (14 if content[at + 8] < 2 else 10)] if len(content) > at + 16 else 0


def _starts(content: mmap.mmap) -> list[int]:
    spans = [(0, len(content))] if len(content) <= _WHOLE else [(0, _ENDS), (len(content) - _ENDS, len(content))]
    return [found.start() for low, high in spans for found in _START.finditer(content, low, high)]


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


def _damaged(where: str) -> FileError:
    return FileError(
        "the file's texts are damaged",
        expected="an intact HDF5 file",
        got="an impossible text heap",
        where=where,
        remedy="copy or write the file again",
    )
