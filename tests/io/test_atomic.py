"""Writing whole or not at all."""

import errno
import os
import stat
import subprocess
import sys
import zipfile

import h5py
import numpy as np
import pytest

from modesieve.io.atomic import output_folder, replacing, write_bytes, write_text
from modesieve.reduce.errors import FileError


def names(folder):
    return sorted(entry.name for entry in folder.iterdir())


def test_text_bytes_hdf5_and_zip(tmp_path):
    """Every kind of writer can be given the temporary file; only the final name remains."""
    write_text(tmp_path / "a.txt", "ä\n")
    write_bytes(tmp_path / "b.bin", b"\0\1")
    with replacing(tmp_path / "c.h5") as temporary, h5py.File(temporary, "w") as file:
        file["x"] = np.arange(3)
    with replacing(tmp_path / "d.zip") as temporary, zipfile.ZipFile(temporary, "w") as archive:
        archive.writestr("x", "y")
    assert (tmp_path / "a.txt").read_bytes() == "ä\n".encode()
    assert names(tmp_path) == ["a.txt", "b.bin", "c.h5", "d.zip"]


def test_name_without_folder(tmp_path, monkeypatch):
    """A bare file name is written to the current folder."""
    monkeypatch.chdir(tmp_path)
    write_text("a b ü.txt", "x")
    assert names(tmp_path) == ["a b ü.txt"]


def test_long_names(tmp_path):
    """The temporary name never outgrows what the final name was allowed."""
    name = "ü" * 120 + ".txt"
    write_text(tmp_path / name, "x")
    assert names(tmp_path) == [name]
    with pytest.raises(FileError, match="file name is too long"):
        write_text(tmp_path / ("x" * 300), "x")


@pytest.mark.parametrize("failure", [ValueError("x"), KeyboardInterrupt(), OSError(errno.ENOSPC, "full")])
def test_old_file_survives_any_failure(tmp_path, failure):
    """An error, an interruption or a full disk in the middle leaves the old file and no temporary one."""
    path = tmp_path / "a.txt"
    path.write_text("old")

    def write_half():
        with replacing(path) as temporary:
            temporary.write_text("half")
            raise failure

    with pytest.raises(FileError if isinstance(failure, OSError) else type(failure)):
        write_half()
    assert path.read_text() == "old"
    assert names(tmp_path) == ["a.txt"]


def test_disk_full_message(tmp_path, monkeypatch):
    """A full disk while flushing is a file error with place and remedy."""
    path = tmp_path / "a.txt"
    path.write_text("old")

    def full(handle):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(FileError) as caught:
        write_text(path, "new")
    assert str(caught.value) == (
        "the disk is full\n"
        "  expected: room for the whole file; the old file is unchanged\n"
        "  got:      No space left on device\n"
        f"  where:    {path}\n"
        "  remedy:   free some space"
    )
    assert path.read_text() == "old"
    assert names(tmp_path) == ["a.txt"]


def test_killed_while_writing(tmp_path):
    """A writer that is killed in the middle leaves the old file whole."""
    path = tmp_path / "a.txt"
    path.write_text("old")
    code = """
import os, signal, sys
from modesieve.io.atomic import replacing
with replacing(sys.argv[1]) as temporary:
    temporary.write_text("half")
    os.kill(os.getpid(), signal.SIGKILL)
"""
    done = subprocess.run([sys.executable, "-c", code, str(path)], check=False, timeout=60)
    assert done.returncode == -9
    assert path.read_text() == "old"


def test_size_limit_while_hdf5_writes(tmp_path):
    """When HDF5 itself cannot write on, the old file stays, no temporary remains and the message is a file error."""
    path = tmp_path / "a.h5"
    path.write_bytes(b"old")
    code = """
import resource, sys
import numpy as np
from modesieve import io
from modesieve.reduce.errors import FileError
from modesieve.reduce.model import StateSpace
model = StateSpace(A=-np.eye(500), B=np.ones((500, 1)), C=np.ones((1, 500)))
resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))
try:
    io.save(sys.argv[1], model)
except FileError as error:
    print(error.what)
"""
    done = subprocess.run(
        [sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=False, timeout=60
    )
    assert done.stdout.strip() == "the file outgrew the size limit", done.stderr
    assert done.stderr == ""
    assert done.returncode == 0
    assert path.read_bytes() == b"old"
    assert names(tmp_path) == ["a.h5"]


@pytest.mark.parametrize(
    ("name", "what"),
    [
        ("missing/a.txt", "the folder does not exist"),
        ("file/a.txt", "part of the path is a file, not a folder"),
        ("folder", "a folder stands where the file is wanted"),
    ],
)
def test_impossible_places(tmp_path, name, what):
    """A place that cannot be written to is refused with its reason."""
    (tmp_path / "file").write_text("x")
    (tmp_path / "folder").mkdir()
    with pytest.raises(FileError) as caught:
        write_text(tmp_path / name, "x")
    assert caught.value.what == what
    assert names(tmp_path) == ["file", "folder"]


@pytest.mark.skipif(os.geteuid() == 0, reason="the superuser may write anywhere")
def test_read_only_folder(tmp_path):
    """A folder without write permission is refused with the remedy."""
    tmp_path.chmod(0o500)
    try:
        with pytest.raises(FileError, match="folder cannot be written to"):
            write_text(tmp_path / "a.txt", "x")
    finally:
        tmp_path.chmod(0o700)


def test_read_only_folder_simulated(tmp_path, monkeypatch):
    """The system's refusal to create a file becomes a file error."""

    def refuse(*args, **kwargs):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))

    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(FileError, match="folder cannot be written to"):
        write_text(tmp_path / "a.txt", "x")


def test_permissions_are_kept(tmp_path):
    """A new file gets the usual permissions, a replaced one keeps its own."""
    path = tmp_path / "a.txt"
    write_text(path, "x")
    assert stat.S_IMODE(path.stat().st_mode) == 0o666 & ~_umask()
    path.chmod(0o640)
    write_text(path, "y")
    assert stat.S_IMODE(path.stat().st_mode) == 0o640


def test_links_are_followed(tmp_path):
    """Writing through a link replaces the file it points to, not the link."""
    target, link = tmp_path / "target.txt", tmp_path / "link.txt"
    target.write_text("old")
    link.symlink_to(target)
    write_text(link, "new")
    assert link.is_symlink()
    assert target.read_text() == "new"


def test_output_folder(tmp_path):
    """A missing folder is made with its parents; a file in its place is refused."""
    assert output_folder(tmp_path / "a" / "b").is_dir()
    (tmp_path / "f").write_text("x")
    with pytest.raises(FileError, match="a file stands where a folder is wanted"):
        output_folder(tmp_path / "f")


def _umask():
    mask = os.umask(0)
    os.umask(mask)
    return mask
