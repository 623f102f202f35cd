"""HDF5 files that mean harm or are damaged: refused with a domain error, quickly, without taking memory."""

import contextlib
import os
import subprocess
import sys
import tracemalloc

import h5py
import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from modesieve import io
from modesieve.io import hdf5
from modesieve.io.matrix_values import write_matrix
from modesieve.reduce.errors import FileError, ModesieveError


@pytest.fixture
def path(tmp_path):
    return tmp_path / "m.h5"


def write(path, **extra):
    with h5py.File(path, "w") as file:
        file.attrs["kind"] = "structure"
        for name, value in ({"stiffness": 2 * np.eye(2), "mass": np.eye(2)} | extra).items():
            if callable(value):
                value(file)
            else:
                file[name] = value
    return path


def refused(path, match):
    """Loading is refused within 5 s and less than 64 MiB; returns the error."""
    tracemalloc.start()
    try:
        with pytest.raises(ModesieveError, match=match) as caught:
            io.load(path)
        assert tracemalloc.get_traced_memory()[1] < 64 << 20
    finally:
        tracemalloc.stop()
    assert str(path) in caught.value.where
    return caught.value


# ---- the file as a whole -------------------------------------------------------------------------------------------


def test_truncated_file(path):
    """A file cut anywhere is refused, never read as a smaller one."""
    write(path, load=np.ones((2, 40)))
    whole = path.read_bytes()
    for size in {len(whole) - 1, len(whole) // 2, 600, 100}:
        path.write_bytes(whole[:size])
        error = refused(path, "the file is truncated|the file is damaged")
        assert error.remedy == "copy or write the file again"


@pytest.mark.parametrize(
    ("content", "got"), [(b"", "an empty file"), (b"%PDF-1.7 nothing", "a file that begins with b'%PDF-1.7'")]
)
def test_not_hdf5(path, content, got):
    """A file of another kind is named by its first bytes."""
    path.write_bytes(content)
    assert refused(path, "this is not an HDF5 file").got == got


def test_missing_file_suggests_neighbours(path):
    """A missing file is refused with files of a similar name."""
    write(path)
    with pytest.raises(FileError) as caught:
        io.load(path.with_name("mm.h5"))
    assert (caught.value.what, caught.value.remedy) == ("there is no such file", "did you mean m.h5?")


def test_folders_and_pipes(tmp_path):
    """A folder, a device or a pipe is refused before it is opened."""
    with pytest.raises(FileError) as caught:
        io.load(tmp_path)
    assert caught.value.got == "a folder"
    os.mkfifo(tmp_path / "pipe")
    for place in (tmp_path / "pipe", "/dev/zero"):
        with pytest.raises(FileError) as caught:
            io.load(place)
        assert caught.value.got == "a device or pipe"
    with pytest.raises(FileError, match="cannot be opened"):
        io.load("a\0b")


# ---- links ---------------------------------------------------------------------------------------------------------


def test_external_links_are_never_followed(tmp_path, path):
    """A link into another file is refused wherever it stands, also when that file exists."""
    other = write(tmp_path / "other.h5")
    for name in ("stiffness", "inputs", "damping"):
        write(path)
        with h5py.File(path, "a") as file:
            file.pop(name, None)
            file[name] = h5py.ExternalLink(other, "/stiffness")
        error = refused(path, "a link points into another file")
        assert error.got == f"a link to {str(other)!r}"


def test_soft_links_through_an_external_one(tmp_path, path):
    """A soft link whose way leads out of the file is refused."""
    write(tmp_path / "other.h5")
    write(path)
    with h5py.File(path, "a") as file:
        file["out"] = h5py.ExternalLink(tmp_path / "other.h5", "/")
        del file["mass"]
        file["mass"] = h5py.SoftLink("/out/mass")
    refused(path, "a link points into another file")


def test_circles_of_links(path):
    """Links in a circle, and groups that contain themselves, end."""
    write(path)
    with h5py.File(path, "a") as file:
        del file["mass"]
        file["mass"], file["other"] = h5py.SoftLink("/other"), h5py.SoftLink("/mass")
    refused(path, "a link leads nowhere")
    with h5py.File(path, "w") as file:
        file.attrs["kind"] = "structure"
        group = file.create_group("stiffness")
        group["stiffness"] = group
        group["data"] = group["indices"] = group["indptr"] = group
        group.attrs["shape"] = (2, 2)
    refused(path, "this is not a dataset")


def test_dangling_links(path):
    """A link to nothing is a missing matrix."""
    write(path)
    with h5py.File(path, "a") as file:
        del file["mass"]
        file["mass"] = h5py.SoftLink("/nothing")
    refused(path, "the matrix mass is missing")


def test_data_kept_elsewhere(tmp_path, path):
    """External storage and virtual datasets are refused."""
    secret = tmp_path / "secret"
    secret.write_bytes(np.eye(2).tobytes())

    def external(file):
        file.create_dataset("load", (2, 2), dtype="f8", external=[(os.fspath(secret), 0, 32)])

    write(path, load=external)
    refused(path, "the dataset lies in another file")

    def virtual(file):
        layout = h5py.VirtualLayout(shape=(2, 2), dtype="f8")
        layout[:] = h5py.VirtualSource(os.fspath(write(tmp_path / "other.h5")), "mass", shape=(2, 2))
        file.create_virtual_dataset("load", layout)

    write(path, load=virtual)
    refused(path, "the dataset lies in another file")


# ---- sizes ---------------------------------------------------------------------------------------------------------


def bomb(rows, columns, **options):
    def make(file):
        file.create_dataset("stiffness", (rows, columns), dtype="f8", **options)

    return make


def test_huge_shapes_over_no_bytes(path):
    """A declared shape without stored values is refused before memory is taken."""
    for rows in (10**6, 10**9, 2**62):
        write(path, stiffness=bomb(rows, 2, chunks=(1, 2)))
        refused(path, "stores fewer values than it declares")


def test_compression_bomb(path):
    """Gigabytes of zeros in a few kilobytes are refused."""

    def zeros(file):
        data = file.create_dataset("stiffness", (40_000, 40_000), dtype="f8", chunks=(1000, 1000), compression="gzip")
        data[:1000, :1000] = 0.0

    write(path, stiffness=zeros)
    error = refused(path, "declares far more values than it stores")
    assert error.remedy == "store a sparse matrix, or write without compression"
    assert error.got.startswith("11.9 GiB")


def test_chunks_larger_than_the_data(path):
    """A small dataset in one giant compressed chunk counts as what unpacking it takes."""

    def giant(file):
        space = file.create_dataset(
            "load", (2, 2), maxshape=(None, None), dtype="f8", chunks=(4200, 4300), compression="gzip"
        )
        space[...] = np.eye(2)

    write(path, load=giant)
    refused(path, "declares far more values than it stores")


def test_sparse_shapes_that_would_expand(path):
    """Sparse groups of few entries cannot make huge arrays: neither as dense load nor as coordinates."""

    def coordinates(file):
        group = file.create_group("stiffness")
        group["data"], group["rows"], group["columns"] = [1.0], [0], [0]
        group.attrs["shape"] = (2**31 - 2, 2**31 - 2)

    write(path, stiffness=coordinates)
    refused(path, "mass has the wrong shape")

    def wide(file):
        group = file.create_group("load")
        group["data"], group["indices"], group["indptr"] = [1.0], [0], [0, 1, 1]
        group.attrs["shape"] = (2, 2**31 - 2)

    write(path, load=wide)
    refused(path, "too many channels")

    def expanding(file):
        del file["stiffness"], file["mass"]
        write_matrix(file, "stiffness", sp.eye_array(20_000, format="csr"))
        write_matrix(file, "mass", sp.eye_array(20_000, format="csr"))
        write_matrix(file, "load", sp.csr_array(([1.0], ([0], [0])), shape=(20_000, 90_000)))

    write(path, load=expanding)
    refused(path, "declares far more values than it stores")


def test_one_value_for_a_billion(path):
    """A binsparse group with one value for all entries is held against what it stores."""

    def iso(file):
        group = file.create_group("stiffness")
        group["values"] = [1.0]
        group.create_dataset("indices_1", (10**9,), dtype="u1", chunks=(10**6,), compression="gzip")[:1] = 0
        group["pointers_to_1"] = [0, 10**9, 10**9]
        group.attrs["binsparse"] = (
            '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [2, 2], "number_of_stored_values": 1000000000,'
            ' "data_types": {"values": "iso[float64]"}}}'
        )

    write(path, stiffness=iso)
    refused(path, "declares far more values than it stores")


def test_memory_that_is_not_there(path, monkeypatch):
    """A file larger than the free memory is refused before reading."""
    monkeypatch.setattr(hdf5, "_available_memory", lambda: 1000)
    write(path, load=np.ones((2, 200)))
    error = refused(path, "the file does not fit into memory")
    assert error.remedy == "free some memory, or use a larger machine"


# ---- types ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("dtype", "got"),
    [
        (h5py.ref_dtype, "references (object)"),
        (h5py.regionref_dtype, "references (object)"),
        (h5py.vlen_dtype(np.float64), "objects or records (object)"),
        (np.dtype([("a", "f8"), ("b", "i4")]), "objects or records"),
        (np.dtype("V8"), "objects or records (|V8)"),
        (np.dtype(("f8", (2,))), "objects or records"),
    ],
)
def test_strange_types(path, dtype, got):
    """References, lists of lists, records and opaque bytes are refused by name."""

    write(path, load=lambda file: file.create_dataset("load", (2, 2), dtype=dtype))
    error = refused(path, "the dataset holds no plain numbers")
    assert error.got.startswith(got)


@pytest.mark.parametrize(
    "value",
    [
        b"\xff\xfe",
        np.array(["a", "b"], dtype=h5py.string_dtype()),
        h5py.Empty("f8"),
        1j,
        np.ones((3, 3)),
        "x" * 100_000,
    ],
)
@pytest.mark.parametrize("name", ["unit_length", "damping_ratio", "kind", "format", "version", "title"])
def test_attributes_of_wrong_type(path, name, value):
    """Attributes of another type, size or coding are refused, each with its name."""
    write(path)
    with h5py.File(path, "a") as file:
        file.attrs.create(name, value, dtype=h5py.string_dtype() if isinstance(value, str) else None)
    if name == "title" and isinstance(value, str):
        assert io.load(path).title == value
        return
    with pytest.raises(ModesieveError):
        io.load(path)


def test_reference_attributes(path):
    """An attribute that refers to an object is refused."""
    write(path)
    with h5py.File(path, "a") as file:
        file.attrs["title"] = file["mass"].ref
    refused(path, "the dataset holds no plain numbers")


def test_attributes_with_named_types(path):
    """A text attribute whose type stands elsewhere in the file is refused."""
    write(path)
    with h5py.File(path, "a") as file:
        file["type"] = h5py.string_dtype()
        file.attrs.create("title", "x", dtype=file["type"])
    refused(path, "the attribute's type lies elsewhere")


def reference_length(path, text):
    """Where the file keeps the length of the only variable-length text equal to ``text``: 4 bytes before its heap."""
    raw = path.read_bytes()
    heap = raw.index(b"GCOL")
    needle = len(text).to_bytes(4, "little") + heap.to_bytes(8, "little")
    assert raw.count(needle) == 1
    return raw.index(needle)


@pytest.mark.parametrize("latest", [False, True])
def test_impossible_lengths_of_texts(path, latest):
    """A reference that claims gigabytes of text is refused before the library clears that much memory."""
    with h5py.File(path, "w", libver="latest" if latest else None) as file:
        file.attrs["kind"] = "structure"
        file["stiffness"], file["mass"] = np.eye(2), np.eye(2)
        file.attrs["title"] = "a title of just this length"
    at = reference_length(path, "a title of just this length")
    raw = bytearray(path.read_bytes())
    raw[at : at + 4] = b"\xf0\xff\xff\x7f"
    path.write_bytes(raw)
    refused(path, "metadata checksum" if latest else "the file's texts are damaged")


@pytest.mark.parametrize("size", [0, 2**64 - 8])
def test_heaps_that_never_end(path, size):
    """A heap object without length, or with one that wraps around, is refused; the library would walk it forever."""
    write(path)
    raw = bytearray(path.read_bytes())
    first = raw.index(b"GCOL") + 16
    raw[first : first + 2] = (0 if size == 0 else 1).to_bytes(2, "little")
    raw[first + 8 : first + 16] = size.to_bytes(8, "little")
    path.write_bytes(raw)
    refused(path, "the file's texts are damaged")


def test_compressed_texts(path):
    """Variable-length texts under compression are refused with the remedy."""

    def packed(file):
        file.create_dataset("inputs/name", data=["a", "b"], dtype=h5py.string_dtype(), chunks=(2,), compression="gzip")

    write(path, load=np.eye(2), names=packed)
    assert refused(path, "stored in a way that is not read").remedy == "store the texts without compression"


@pytest.mark.parametrize("latest", [False, True])
@pytest.mark.parametrize("userblock", [0, 512])
def test_honest_texts_of_every_layout(path, latest, userblock):
    """Texts in attributes, in one piece and in chunks are read from old and new file versions, user blocks included."""
    with h5py.File(path, "w", libver="latest" if latest else None, userblock_size=userblock) as file:
        file.attrs["kind"] = "structure"
        for i in range(12):  # enough for the dense storage of new versions
            file.attrs[f"note {i}"] = "ü" * i
        file["stiffness"], file["mass"], file["load"] = np.eye(3), np.eye(3), np.eye(3)
        file["inputs/name"] = ["a", "bé", "c"]
        file.create_dataset("unknowns/node", data=["1", "2", "3"], dtype=h5py.string_dtype(), maxshape=(None,))
        file.create_dataset("unknowns/direction", data=["x", "y", "z"], dtype=h5py.string_dtype(), chunks=(2,))
    model = io.load(path)
    assert [c.name for c in model.inputs] == ["a", "bé", "c"]
    assert (model.unknowns.node, model.unknowns.direction) == (("1", "2", "3"), ("x", "y", "z"))


def test_shared_texts_cannot_multiply(path):
    """A label of variable length that is longer than any label is refused at the first few read."""

    def labels(file):
        data = file.create_dataset("inputs/name", (2,), dtype=h5py.string_dtype())
        data[...] = ["x" * 1_000_000] * 2

    write(path, load=np.eye(2), names=labels)
    refused(path, "a text is too long")


def test_named_types_and_groups_in_place_of_matrices(path):
    """A type definition or an empty group where a matrix should be is refused."""

    def named(file):
        file["load"] = np.dtype("f8")

    write(path, load=named)
    refused(path, "this is a type definition")
    write(path, load=lambda file: file.create_group("load"))
    refused(path, "the values of a sparse matrix are missing")


def test_unknown_filters(path):
    """A filter that is not built in is refused; no plug-in is looked for."""
    write(path)
    raw = path.read_bytes()
    with h5py.File(path, "a") as file:
        file.create_dataset("load", data=np.zeros((64, 64))[:2], chunks=(1, 64), compression=32000)
        plist = file["load"].id.get_create_plist()
        assert plist.get_filter(0)[0] == 32000
    changed = path.read_bytes().replace((32000).to_bytes(2, "little"), (31999).to_bytes(2, "little"))
    assert changed != raw
    path.write_bytes(changed)
    with pytest.raises(ModesieveError):
        io.load(path)


# ---- damage --------------------------------------------------------------------------------------------------------


def good_file(path):
    """A model file with every kind of content."""
    from modesieve.reduce.model import Damping, Input, Output, RatioByMode, Structure, UnitSystem, Unknowns

    n = 6
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tocsr()
    model = Structure(
        K=K,
        M=sp.eye_array(n),
        F=np.eye(n)[:, :1],
        Cq=np.eye(n)[:2],
        damping=Damping(base=RatioByMode(ratio=np.array([0.01])), viscous=K),
        inputs=(Input(name="a", unit="N", amplitude=2.0),),
        outputs=(Output(name="b", unit="mm"), Output(name="c", unit="mm", resolution=0.1)),
        units=UnitSystem(length="mm", mass="t"),
        unknowns=Unknowns(node=tuple("123456"), direction=("x",) * n, xyz=np.zeros((n, 3))),
    )
    io.save(path, model)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_flipped_bytes(tmp_path, data):
    """Whatever bytes of a model file are changed, loading gives a model or a domain error."""
    path = tmp_path / "m.h5"
    if not (tmp_path / "good.h5").exists():
        good_file(tmp_path / "good.h5")
    raw = bytearray((tmp_path / "good.h5").read_bytes())
    for _ in range(data.draw(st.integers(1, 4))):
        raw[data.draw(st.integers(0, len(raw) - 1))] = data.draw(st.integers(0, 255))
    path.write_bytes(raw)
    with contextlib.suppress(ModesieveError):
        io.load(path)


# ---- memory --------------------------------------------------------------------------------------------------------

_MEASURE = """
import resource, sys
from modesieve import io
io.load(sys.argv[1])  # once small: imports and caches are not the file's
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
model = io.load(sys.argv[2])
peak = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) * 1024
arrays = sum(part.nbytes for M in (model.K, model.M) for part in (M.data, M.indices, M.indptr))
print(peak / arrays)
"""


@pytest.mark.skipif(sys.platform != "linux", reason="ru_maxrss is in other units elsewhere")
def test_memory_of_a_large_model(tmp_path):
    """A compressed matrix is read straight into its final arrays: peak memory under 1.4 times their size."""
    n, per = 100_000, 60
    with h5py.File(tmp_path / "large.h5", "w") as file:
        file.attrs["kind"] = "structure"
        group = file.create_group("stiffness")
        columns = np.minimum(np.arange(n)[:, None], n - per) + np.arange(per)
        group.create_dataset("indices", data=columns.ravel().astype(np.int64), chunks=(1 << 18,))
        group.create_dataset("data", data=np.ones(n * per), chunks=(1 << 18,))
        group["indptr"] = np.arange(0, n * per + 1, per)
        group.attrs["shape"] = (n, n)
        mass = file.create_group("mass")
        mass["data"], mass["indices"], mass["indptr"] = np.ones(n), np.arange(n), np.arange(n + 1)
        mass.attrs["shape"] = (n, n)
    write(tmp_path / "small.h5")
    done = subprocess.run(
        [sys.executable, "-c", _MEASURE, tmp_path / "small.h5", tmp_path / "large.h5"],
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert float(done.stdout) < 1.4
