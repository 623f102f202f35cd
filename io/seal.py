"""A seal on a file: a hash over everything in it, so that one altered digit shows.

It proves that nothing was changed by accident or by hand afterwards, not who wrote the file.
"""

from __future__ import annotations

import hashlib
from typing import Any

import h5py
import numpy as np

from modesieve.reduce.errors import FileError

SEAL = "seal"
#: No file of this program nests deeper; a group that contains itself would go on for ever.
DEEPEST = 20


def digest(file: Any) -> str:
    """SHA-256 (hex) over the names, attributes and values of an HDF5 file, without the seal itself."""
    sha = hashlib.sha256()
    _group(sha, file)
    return sha.hexdigest()


def write_seal(file: Any) -> None:
    """Seal a file as the last act of writing it."""
    file.attrs[SEAL] = digest(file)


def _group(sha: Any, group: Any, depth: int = 0) -> None:
    if depth > DEEPEST:
        raise FileError("groups are nested too deeply", expected=f"at most {DEEPEST} levels", where=str(group.name))
    for name in sorted(group.attrs):
        if not (depth == 0 and name == SEAL):
            _value(sha, f"@{name}", group.attrs[name])
    for name in sorted(group):
        link = group.get(name, getlink=True)
        if not isinstance(link, h5py.HardLink):
            sha.update(f"link {name}\0".encode())
            continue
        node = group[name]
        sha.update(f"{group.name}/{name}\0".encode())
        if isinstance(node, h5py.Group):
            _group(sha, node, depth + 1)
        else:
            for attribute in sorted(node.attrs):
                _value(sha, f"@{attribute}", node.attrs[attribute])
            _value(sha, "values", node[()])


def _value(sha: Any, name: str, value: Any) -> None:
    array = np.asarray(value)
    sha.update(f"{name} {array.dtype.kind} {array.shape}\0".encode())
    if array.dtype.kind in "OSU":
        for item in array.ravel().tolist():
            sha.update((item if isinstance(item, bytes) else str(item).encode()) + b"\0")
    else:
        sha.update(np.ascontiguousarray(array).astype(array.dtype.newbyteorder("<")).tobytes())
