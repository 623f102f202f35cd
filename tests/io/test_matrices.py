"""Matrices in HDF5 files: every layout, both ways with the reference package of binsparse, every refusal."""

import binsparse
import h5py
import numpy as np
import pytest
import scipy.sparse as sp
from binsparse.container import HDF5BinsparseContainer
from binsparse.conversions.scipy import from_scipy, to_scipy
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from modesieve.io import hdf5
from modesieve.io.matrices import Place, locate
from modesieve.io.matrix_values import read_dense, read_sparse, write_matrix
from modesieve.reduce.errors import FileError, ModelError, ModesieveError


def example(rows=7, columns=5, seed=1):
    out = sp.random_array((rows, columns), density=0.4, rng=np.random.default_rng(seed), format="csr")
    out.sort_indices()
    return out


def symmetric(n=6, seed=2):
    half = sp.tril(example(n, n, seed)).tocsr()
    return (half + sp.tril(half, -1).T).tocsr(), half


def read(path, place=None, dense=False):
    with hdf5.opened(path) as source:
        found = locate(source, place or Place(path="/K"))
        assert found is not None
        return read_dense(found) if dense else read_sparse(found)


def plain(group, matrix, names=("data", "indices", "indptr"), shape="attribute", **attributes):
    for name, part in zip(names, (matrix.data, matrix.indices, matrix.indptr), strict=True):
        group[name] = part
    if shape == "attribute":
        group.attrs["shape"] = matrix.shape
    else:
        group["shape"] = np.array(matrix.shape)
    group.attrs.update(attributes)


def assert_equal(a, b):
    """Equal as stored: pointers, indices and values, after sorting."""
    a, b = sp.csr_array(a), sp.csr_array(b)
    a.sort_indices(), b.sort_indices()
    assert a.shape == b.shape
    for part in ("indptr", "indices", "data"):
        assert np.array_equal(getattr(a, part), getattr(b, part)), part


@pytest.fixture
def path(tmp_path):
    return tmp_path / "m.h5"


# ---- layouts -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("names", [("data", "indices", "indptr"), ("values", "columns", "pointers")])
@pytest.mark.parametrize("shape", ["attribute", "dataset"])
def test_plain_csr(path, names, shape):
    """A plain compressed group reads under either set of names, its shape being an attribute or a dataset."""
    K = example()
    with h5py.File(path, "w") as file:
        plain(file.create_group("K"), K, names, shape)
    assert_equal(read(path), K)
    assert np.array_equal(read(path, dense=True), K.toarray())


def test_plain_csc_and_coo(path):
    """Column-compressed and coordinate groups read with a layout attribute; coordinates also by their names alone."""
    K = example()
    with h5py.File(path, "w") as file:
        plain(file.create_group("K"), K.tocsc(), ("data", "rows", "indptr"), layout="csc")
        for name, attributes in (("L", {"layout": "COO"}), ("N", {})):
            coo = file.create_group(name)
            coordinates = K.tocoo()
            coo["data"], coo["rows"], coo["columns"] = K.data, coordinates.row, coordinates.col
            coo.attrs.update(shape=K.shape, **attributes)
    for name in "KLN":
        assert_equal(read(path, Place(path=f"/{name}")), K)


def test_dense_and_transposed(path):
    """A dense dataset reads as it is; a place can say that it holds the transpose."""
    K = example()
    with h5py.File(path, "w") as file:
        file["K"] = K.toarray()
        plain(file.create_group("S"), K.T.tocsr())
    assert_equal(read(path), K)
    assert np.array_equal(read(path, Place(path="/K", transposed=True), dense=True), K.toarray().T)
    assert_equal(read(path, Place(path="/S", transposed=True)), K)


def test_foreign_layout_and_index_base(path):
    """A place can say layout, triangle and that indices count from 1."""
    K, half = symmetric()
    lower = half.tocsc()
    with h5py.File(path, "w") as file:
        group = file.create_group("model/K")
        group["values"], group["rows"], group["pointers"] = lower.data, lower.indices + 1, lower.indptr + 1
        group.attrs["shape"] = K.shape
    assert_equal(read(path, Place(path="/model/K", layout="CSC", index_base=1, symmetric="lower")), K)


@pytest.mark.parametrize("triangle", ["lower", "upper"])
@pytest.mark.parametrize("layout", ["dense", "csr", "csc"])
def test_one_triangle(path, triangle, layout):
    """One stored triangle becomes the whole matrix, explicit zeros kept."""
    _K, half = symmetric()
    half = half if triangle == "lower" else half.T.tocsr()
    half.data[0] = 0.0
    whole = half + half.T - sp.diags_array(half.diagonal())
    with h5py.File(path, "w") as file:
        if layout == "dense":
            file["K"] = half.toarray()
            file["K"].attrs["symmetric"] = triangle
        else:
            plain(file.create_group("K"), half.asformat(layout), symmetric=triangle, layout=layout)
    out = read(path)
    assert np.array_equal(out.toarray(), whole.toarray())
    if layout != "dense":
        assert out.nnz == 2 * half.nnz - np.count_nonzero(half.tocoo().row == half.tocoo().col)
    assert np.array_equal(read(path, dense=True), whole.toarray())


@pytest.mark.parametrize("kind", ["<i2", ">i8", "<u4", ">f4", "<f2", ">f8", "?"])
def test_number_types_are_converted(path, kind):
    """Integers, booleans and foreign byte orders become native float64; index arrays of any integer or whole floats."""
    K = example()
    K.data = np.round(10 * K.data + 1).astype(kind).astype(float)
    with h5py.File(path, "w") as file:
        group = file.create_group("K")
        group["data"], group.attrs["shape"] = K.data.astype(kind), K.shape
        group["indices"] = K.indices.astype(kind if np.dtype(kind).kind != "b" else "f8")
        group["indptr"] = K.indptr.astype(">i8")
        file["dense"] = K.toarray().astype(kind)
    out = read(path)
    assert_equal(out, K)
    assert out.data.dtype == np.float64
    assert out.data.dtype.isnative
    assert out.indices.dtype == out.indptr.dtype == np.int32
    assert np.array_equal(read(path, Place(path="/dense"), dense=True), K.toarray())


def test_unsorted_and_repeated_entries(path):
    """Unsorted indices are sorted, repeated entries added."""
    with h5py.File(path, "w") as file:
        group = file.create_group("K")
        group["data"], group["indices"], group["indptr"] = [1.0, 2.0, 3.0, 4.0], [1, 0, 1, 0], [0, 3, 4]
        group.attrs["shape"] = (2, 2)
    assert read(path).toarray().tolist() == [[2.0, 4.0], [4.0, 0.0]]


def test_empty_rows_and_no_entries(path):
    """A matrix without entries is a matrix of zeros."""
    with h5py.File(path, "w") as file:
        plain(file.create_group("K"), sp.csr_array((3, 4)))
    assert read(path).shape == (3, 4)
    assert read(path).nnz == 0


def test_links_inside_the_file_are_followed(path):
    """Soft links within the file work, also relative ones and in the middle of a path."""
    with h5py.File(path, "w") as file:
        file["data/K"] = np.eye(2)
        file["data/again"] = h5py.SoftLink("K")
        file["short"] = h5py.SoftLink("/data")
    for place in ("/data/again", "/short/again", "short/K"):
        assert np.array_equal(read(path, Place(path=place), dense=True), np.eye(2))


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(1, 12), st.integers(1, 12), st.integers(0, 2**31), st.sampled_from(["csr", "csc", "coo"]))
def test_round_trip_of_random_matrices(tmp_path, rows, columns, seed, layout):
    """What is written in any layout, by us or by hand, comes back bit for bit."""
    rng = np.random.default_rng(seed)
    K = sp.random_array((rows, columns), density=rng.random(), rng=rng, format="csr")
    K.sort_indices()
    path = tmp_path / "m.h5"
    with h5py.File(path, "w") as file:
        write_matrix(file, "ours", K)
        write_matrix(file, "dense", K.toarray())
        by_hand = file.create_group("plain")
        other = K.asformat(layout)
        if layout == "coo":
            by_hand["data"], by_hand["rows"], by_hand["cols"] = other.data, other.row, other.col
            by_hand.attrs["shape"] = K.shape
        else:
            plain(by_hand, other, layout=layout.upper())
    for name in ("ours", "plain"):
        assert_equal(read(path, Place(path=name)), K)
    assert np.array_equal(read(path, Place(path="dense"), dense=True), K.toarray())


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(1, 12), st.integers(0, 2**31), st.sampled_from(["lower", "upper"]), st.booleans())
def test_one_triangle_of_random_matrices(tmp_path, n, seed, triangle, by_columns):
    """One triangle of any symmetric matrix, empty rows and missing diagonals included, gives the whole."""
    rng = np.random.default_rng(seed)
    half = sp.random_array((n, n), density=rng.random(), rng=rng, format="csr")
    half = (sp.tril(half) if triangle == "lower" else sp.triu(half)).tocsr()
    path = tmp_path / "m.h5"
    with h5py.File(path, "w") as file:
        stored = half.tocsc() if by_columns else half
        plain(file.create_group("K"), stored, symmetric=triangle, layout="CSC" if by_columns else "CSR")
    whole = half.toarray() + half.toarray().T - np.diag(half.diagonal())
    out = read(path)
    assert np.array_equal(out.toarray(), whole)
    assert out.has_canonical_format


def test_large_arrays_are_chunked(path):
    """Arrays of more than 4 MiB are written in chunks of 1 to 4 MiB."""
    with h5py.File(path, "w") as file:
        write_matrix(file, "K", sp.eye_array(10_000, format="csr"))
        write_matrix(file, "D", np.ones((2000, 300)))
        write_matrix(file, "wide", np.ones((1, 1_000_000)))
        assert file["K/values"].chunks is None
        for name in ("D", "wide"):
            size = np.prod(file[name].chunks) * 8
            assert 1 << 20 <= size <= 4 << 20


# ---- binsparse -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("layout", ["csr", "csc", "coo"])
def test_reading_what_binsparse_writes(path, layout):
    """Groups written by the reference package are read."""
    K = example()
    with h5py.File(path, "w") as file:
        from_scipy(K.asformat(layout)).serialize(HDF5BinsparseContainer(file.create_group("K")))
    assert_equal(read(path), K)


@pytest.mark.parametrize("kind", [binsparse.DMATRMatrix, binsparse.DMATCMatrix])
def test_reading_dense_binsparse(path, kind):
    """Dense binsparse matrices are read in row and column order."""
    K = example().toarray()
    order = "C" if kind is binsparse.DMATRMatrix else "F"
    with h5py.File(path, "w") as file:
        tensor = kind(shape=K.shape, number_of_stored_values=K.size, values=K.ravel(order=order))
        tensor.serialize(HDF5BinsparseContainer(file.create_group("K")))
    assert np.array_equal(read(path, dense=True), K)
    assert_equal(read(path), sp.csr_array(K))


def test_one_value_for_all(path):
    """A binsparse group may store one value for all its entries."""
    K = example()
    K.data[:] = 2.5
    with h5py.File(path, "w") as file:
        tensor = from_scipy(K)
        tensor.values = np.broadcast_to(np.array([2.5]), (K.nnz,))
        tensor.serialize(HDF5BinsparseContainer(file.create_group("K")))
        assert file["K/values"].shape == (1,)
    assert_equal(read(path), K)


def test_whole_binsparse_file(path):
    """A file that is one binsparse matrix is read with the root as its place."""
    K = example()
    binsparse.save_binsparse(from_scipy(K), path)
    assert_equal(read(path, Place(path="/")), K)


def test_binsparse_reads_what_is_written_here(path):
    """Sparse matrices written here are read by the reference package."""
    K = example()
    with h5py.File(path, "w") as file:
        write_matrix(file, "K", K)
    with h5py.File(path) as file:
        assert_equal(to_scipy(binsparse.CSRMatrix.parse(HDF5BinsparseContainer(file["K"]))), K)


# ---- refusals ------------------------------------------------------------------------------------------------------


def damaged(file, **changes):
    """A good CSR group of shape (3, 3) with some parts replaced (None: left out)."""
    parts = {"data": [1.0, 2.0, 3.0], "indices": [0, 1, 2], "indptr": [0, 1, 2, 3]} | changes
    group = file.create_group("K")
    for name, value in parts.items():
        if name in ("shape", "layout", "symmetric", "index_base"):
            group.attrs[name] = value
        elif value is not None:
            group[name] = value
    if "shape" not in changes:
        group.attrs["shape"] = (3, 3)


SIZES, IMPOSSIBLE, TYPE = "sizes of a sparse matrix do not agree", "impossible shape", "the dataset has the wrong type"
LIMIT, NOT_FINITE = "whole numbers up to 2147483646", "K holds values that are not numbers"
POINTERS = "/K/indptr"
ATTRIBUTE, SPAN = "the attribute has the wrong type or value", "pointers do not span the values"


@pytest.mark.parametrize(
    ("changes", "what", "expected", "got", "place"),
    [
        ({"indptr": [0, 2, 1, 3]}, "pointers go down", "pointers that never fall", "2 then 1 at position 1", POINTERS),
        ({"indptr": [1, 2, 3, 4]}, "pointer out of range", "0 to 3", "4", "/K/indptr"),
        ({"indptr": [1, 1, 2, 3]}, SPAN, "first 0, last 3", "first 1, last 3", "/K/indptr"),
        ({"indptr": [0, 1, 3]}, SIZES, "4 entries for shape (3, 3) in CSR layout", "shape (3,)", "/K/indptr"),
        ({"indices": [0, 1, 3]}, "index out of range", "0 to 2", "3", "/K/indices"),
        ({"indices": [0, 1, -1]}, "index out of range", "0 to 2", "-1", "/K/indices"),
        ({"indices": [0, 1, 2**40]}, "index out of range", "0 to 2", str(2**40), "/K/indices"),
        ({"indices": [0, 1, 1.5]}, "index is not a whole number", "integers", "float64", "/K/indices"),
        ({"indices": [0, 1]}, SIZES, "3 entries for shape (3, 3) in CSR layout", "shape (2,)", "/K/indices"),
        ({"data": [1.0, np.nan, 2.0]}, NOT_FINITE, "finite values", "NaN or Inf", "/K/data"),
        ({"data": [1.0, np.inf, 2.0]}, NOT_FINITE, "finite values", "NaN or Inf", "/K/data"),
        ({"data": [1j, 2.0, 3.0]}, TYPE, "real numbers", "complex numbers (complex128)", "/K/data"),
        ({"data": ["a", "b", "c"]}, TYPE, "real numbers", "texts", "/K/data"),
        ({"data": None}, "the values of a sparse matrix are missing", "one of data, values", "indices, indptr", "/K"),
        ({"data": [[1.0, 2.0, 3.0]]}, "the values are not a list", "one dimension", "shape (1, 3)", "/K/data"),
        ({"shape": (3.5, 3)}, IMPOSSIBLE, LIMIT, "(3.5, 3.0)", "/K/shape"),
        ({"shape": (-3, 3)}, IMPOSSIBLE, LIMIT, "(-3.0, 3.0)", "/K/shape"),
        ({"shape": (3, 2**40)}, IMPOSSIBLE, LIMIT, "(3.0, 1099511627776.0)", "/K/shape"),
        ({"shape": "three"}, ATTRIBUTE, "2 finite real numbers", "the text 'three'", "attribute shape of /K"),
        ({"layout": "BSR"}, "unknown layout of a sparse matrix", "CSR, CSC or COO", "BSR", "/K"),
        ({"index_base": 2}, "unknown index base", "index_base = 0 or 1", "2", "/K"),
        ({"symmetric": "left"}, "unknown triangle", 'symmetric = "lower" or "upper"', "'left'", "/K"),
    ],
)  # fmt: skip
def test_refusals(path, changes, what, expected, got, place):
    """Every way a sparse group can be wrong has its message: what, expected, got, where."""
    with h5py.File(path, "w") as file:
        damaged(file, **changes)
    with pytest.raises(FileError) as caught:
        read(path)
    error = caught.value
    assert (error.what, error.expected, error.got) == (what, expected, got)
    assert error.where == f"{path}, {place}"


def test_one_based_indices_get_a_hint(path):
    """Pointers that begin with 1 suggest indices that count from 1."""
    with h5py.File(path, "w") as file:
        damaged(file, indptr=[1, 1, 2, 3])
    with pytest.raises(FileError) as caught:
        read(path)
    assert caught.value.remedy == "say index_base = 1 if indices count from 1"


def test_entries_outside_the_triangle(path):
    """A file that says "lower" but holds both triangles is refused, not doubled."""
    K, _ = symmetric()
    with h5py.File(path, "w") as file:
        plain(file.create_group("K"), K, symmetric="lower")
    with pytest.raises(ModelError, match="entries lie outside the stored triangle"):
        read(path)


def test_vectors_are_no_matrices(path):
    """A one-dimensional dataset is refused with the two shapes it may have meant."""
    with h5py.File(path, "w") as file:
        file["K"] = np.ones(4)
    with pytest.raises(ModelError) as caught:
        read(path)
    assert caught.value.remedy == "store it with shape (4, 1) or (1, 4)"


@pytest.mark.parametrize(
    "header",
    [
        "{",
        "[]",
        '{"binsparse": 3}',
        '{"binsparse": {"format": "CSR"}}',
        '{"binsparse": {"format": "DCSR", "version": "0.1"}}',
        '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [3, 3, 3], "number_of_stored_values": 3}}',
        '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [3, 3], "number_of_stored_values": 4}}',
        '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [3, 1e9], "number_of_stored_values": 3}}',
        '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [3, 3], "number_of_stored_values": 3,'
        ' "fill": true}}',
        '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [3, 3], "number_of_stored_values": 3,'
        ' "data_types": {"values": "complex[float64]"}}}',
        '{"binsparse": {"format": "CSR", "version": "0.1", "shape": [3, 3], "number_of_stored_values": 3,'
        ' "structure": "hermitian_lower"}}',
        "[" * 100_000,
        '{"binsparse": {"format": "CSR", "version": "0.1", "number_of_stored_values": 3, "shape": [3, 1'
        + "0" * 400
        + "]}}",
    ],
)
def test_bad_binsparse_headers(path, header):
    """A header that is no header of a real matrix is refused."""
    with h5py.File(path, "w") as file:
        group = file.create_group("K")
        group["values"], group["indices_1"], group["pointers_to_1"] = [1.0, 2.0, 3.0], [0, 1, 2], [0, 1, 2, 3]
        if len(header) < 60_000:
            group.attrs["binsparse"] = header
        else:
            group.attrs.create("binsparse", header, dtype=h5py.string_dtype())
    with pytest.raises(ModesieveError):
        read(path)
