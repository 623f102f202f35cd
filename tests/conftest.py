"""What several test files share: outside data, model files from Matrix Market pairs, comparing records."""

import dataclasses
import json
import os
from pathlib import Path

# One thread a test process: the processes already share the cores. Before numpy loads its libraries.
for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
import pytest  # noqa: E402
import scipy.io  # noqa: E402
import scipy.sparse as sp  # noqa: E402

#: What a file does not keep, by design: the full model, mode shapes and what a solver left in memory.
NOT_STORED = ("model", "vectors", "left", "workspace")


@pytest.fixture(scope="session")
def shared_data():
    """Folder of matrices that are not part of this repository; tests that need them skip where it is absent."""
    given = os.environ.get("MODESIEVE_DATA")
    folder = Path(given) if given else Path(__file__).resolve().parents[2] / "shared" / "data"
    if not (folder / "reference_eigenvalues.json").is_file():
        pytest.skip(f"no test matrices in {folder} (set MODESIEVE_DATA)")
    return folder


@pytest.fixture(scope="session")
def reference_eigenvalues(shared_data):
    """Eigenvalues of K x = lambda M x of the outside matrices, as their file gives them."""
    return json.loads((shared_data / "reference_eigenvalues.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="session")
def matrix_market_pair(shared_data):
    """A function: name such as "05" to (K, M) as CSR arrays."""

    def read(name):
        pair = (scipy.io.mmread(shared_data / f"bcsst{letter}{name}.mtx", spmatrix=False) for letter in "km")
        return tuple(sp.csr_array(matrix) for matrix in pair)

    return read


@pytest.fixture
def matrix_market_file(matrix_market_pair, tmp_path):
    """A function: name such as "05" to a model file with one force, one displacement and 1 % modal damping."""
    from modesieve import io
    from modesieve.reduce.model import Damping, Input, ModalRatio, Output, Structure

    def write(name):
        K, M = matrix_market_pair(name)
        n = K.shape[0]
        F, C = np.zeros((n, 1)), np.zeros((1, n))
        F[n // 3], C[0, (2 * n) // 3] = 1.0, 1.0
        model = Structure(
            K=K,
            M=M,
            F=F,
            Cq=C,
            inputs=(Input(name="force"),),
            outputs=(Output(name="displacement"),),
            damping=Damping(base=ModalRatio(ratio=0.01)),
            title=f"pair {name}",
        )
        path = tmp_path / f"pair{name}.h5"
        io.save(path, model)
        return path

    return write


@pytest.fixture(scope="session")
def assert_same_record():
    """A function that holds two records against each other, every array to the last bit."""
    return _same


def _same(a, b, place="record"):
    assert type(a) is type(b), place
    if dataclasses.is_dataclass(a):
        for field in dataclasses.fields(a):
            if field.name not in NOT_STORED:
                _same(getattr(a, field.name), getattr(b, field.name), f"{place}.{field.name}")
    elif isinstance(a, np.ndarray):
        assert (a.dtype, a.shape) == (b.dtype, b.shape), place
        assert np.array_equal(a, b, equal_nan=True), place
    elif sp.issparse(a):
        for part in ("indptr", "indices", "data"):
            assert np.array_equal(getattr(a, part), getattr(b, part)), f"{place}.{part}"
    elif isinstance(a, tuple):
        assert len(a) == len(b), place
        for i, (x, y) in enumerate(zip(a, b, strict=True)):
            _same(x, y, f"{place}[{i}]")
    elif isinstance(a, dict):
        assert list(a) == list(b), place
        for key in a:
            _same(a[key], b[key], f"{place}[{key!r}]")
    else:
        assert a == b or (a != a and b != b), place
