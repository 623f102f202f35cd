"""Writing whole or not at all: a temporary file in the same folder, flushed to the disk, then renamed.

Whatever goes wrong (disk full, interruption, an error in the writer), the old file stays as it was.
"""

from __future__ import annotations

import errno
import os
import re
import secrets
import stat
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TypeAlias

from modesieve.reduce.errors import FileError

PathLike: TypeAlias = str | os.PathLike[str]


@contextmanager
def replacing(path: PathLike) -> Iterator[Path]:
    """Give a new empty file beside ``path``; when the block ends well it takes the place of ``path``.

    The block writes (or creates anew) the file it is given and closes it. A link is followed: its target is replaced.

    Raises FileError when the folder is missing or read-only, the disk is full, or ``path`` is a folder.
    """
    final = Path(os.path.realpath(path))
    temporary = _beside(final)
    try:
        with _explained(path):
            _create(temporary, final)
            yield temporary
            _flush(temporary)
            os.replace(temporary, final)
            _flush_folder(final.parent)
    except BaseException:  # also an interruption: nothing half-written stays behind
        with suppress(OSError):
            temporary.unlink()
        raise


def write_bytes(path: PathLike, data: bytes) -> None:
    """Replace ``path`` by ``data``, whole or not at all."""
    with replacing(path) as temporary:
        temporary.write_bytes(data)


def write_text(path: PathLike, text: str) -> None:
    """Replace ``path`` by ``text`` as UTF-8 with plain line ends, whole or not at all."""
    write_bytes(path, text.encode("utf-8"))


def output_folder(path: PathLike) -> Path:
    """``path`` as a folder that exists (made if need be) and can be written to."""
    folder = Path(path)
    with _explained(folder):
        folder.mkdir(parents=True, exist_ok=True)
        probe = _beside(folder / "probe")
        probe.touch(exist_ok=False)
        probe.unlink()
    return folder


def file_error(error: OSError | RuntimeError, path: PathLike) -> FileError:
    """The domain error that says what the operating system's error on writing ``path`` means to a user."""
    code = getattr(error, "errno", None) or _hidden_code(error)
    what, expected, remedy = _MEANING.get(code or 0, ("the file cannot be written", "", "write to another place"))
    got = os.strerror(code) if code else str(error)
    return FileError(what, expected=expected, got=got, where=os.fspath(path), remedy=remedy)


_DISK = ("the disk is full", "room for the whole file; the old file is unchanged", "free some space")
_SIZE = ("the file outgrew the size limit", "room for the whole file; the old file is unchanged", "raise the limit")
_READ_ONLY = ("the folder cannot be written to", "a folder with write permission", "choose another output folder")
_MEANING = {
    errno.ENOSPC: _DISK,
    errno.EDQUOT: _DISK,
    errno.EFBIG: _SIZE,
    errno.EACCES: _READ_ONLY,
    errno.EPERM: _READ_ONLY,
    errno.EROFS: _READ_ONLY,
    errno.ENOENT: ("the folder does not exist", "an existing folder", "create the folder first"),
    errno.ENOTDIR: ("part of the path is a file, not a folder", "an existing folder", "correct the path"),
    errno.EEXIST: ("a file stands where a folder is wanted", "a folder, or a name that is free", "correct the path"),
    errno.EISDIR: ("a folder stands where the file is wanted", "a file name", "add a file name to the path"),
    errno.ENAMETOOLONG: ("the file name is too long", "a shorter name", "shorten the name"),
}


@contextmanager
def _explained(path: PathLike) -> Iterator[None]:
    try:
        yield
    except FileError:
        raise
    except OSError as error:
        raise file_error(error, path) from error
    except RuntimeError as error:
        if _hidden_code(error) is None:
            raise
        raise file_error(error, path) from error  # HDF5 while closing a file that it cannot complete


def _hidden_code(error: BaseException) -> int | None:
    # The HDF5 library hides the system's number in its message.
    found = re.search(r"errno = (\d+)", str(error))
    return int(found[1]) if found else None


def _beside(final: Path) -> Path:
    stem = final.name.encode()[:180].decode(errors="ignore")
    return final.parent / f".{stem}.{secrets.token_hex(4)}.part"


def _create(temporary: Path, final: Path) -> None:
    """An empty file with the permissions of the file it will replace, else with the usual ones."""
    mode = 0o666
    if final.is_dir():
        raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
    if final.exists():
        mode = stat.S_IMODE(final.stat().st_mode)
        if not os.access(final, os.W_OK):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))
    handle = os.open(temporary, os.O_CREAT | os.O_EXCL | os.O_WRONLY, mode)
    os.close(handle)


def _flush(path: Path) -> None:
    handle = os.open(path, os.O_RDWR)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _flush_folder(folder: Path) -> None:
    # The rename itself must survive a power cut; some file systems do not offer it for folders.
    with suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
