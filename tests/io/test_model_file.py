"""Model files: round trips of every kind, names, damping, foreign layouts, and every refusal with its words."""

import math

import h5py
import numpy as np
import pytest
import scipy.sparse as sp

from modesieve import io
from modesieve.reduce.errors import FileError, ModelError, UnitError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.model import (
    Damping,
    Input,
    LossFactor,
    ModalRatio,
    Output,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
    UnitSystem,
    Unknowns,
)

RNG = np.random.default_rng(7)
N = 9


def stiffness(n=N, shift=0.0):
    off = -np.ones(n - 1)
    return sp.diags_array([off, (2.0 + shift) * np.ones(n), off], offsets=[-1, 0, 1]).tocsr()


BASES = {
    "none": None,
    "ratio": ModalRatio(ratio=0.013),
    "by frequency": RatioByFrequency(omega=np.array([0.0, 1.1, 7.3]), ratio=np.array([0.01, 0.02, 0.03])),
    "by mode": RatioByMode(ratio=np.array([0.01, 0.007])),
    "rayleigh": Rayleigh(alpha=0.1, beta=1e-4),
    "loss": LossFactor(eta=0.04),
}


def structure(base=None, **changes):
    given = {
        "K": stiffness(),
        "M": sp.eye_array(N, format="csr") * 0.3,
        "F": RNG.random((N, 2)),
        "Cq": RNG.random((3, N)),
        "Cv": RNG.random((3, N)),
        "Du": RNG.random((3, 2)),
        "damping": Damping(base=base, viscous=0.1 * stiffness(), stiffness_loss=0.01 * stiffness()),
        "inputs": (Input(name="Ölpumpe", unit="N", amplitude=2.5), Input(name="=2+5", unit="N m")),
        "outputs": tuple(Output(name=f"p{i}", unit="mm", resolution=r) for i, r in enumerate((None, 0.1, 2.0))),
        "unknowns": Unknowns(
            node=tuple(str(i // 3) for i in range(N)), direction=("x", "y", "rz") * 3, xyz=RNG.random((N, 3))
        ),
        "units": UnitSystem(length="mm", mass="t", time="s", temperature="K"),
        "title": "Träger <b>",
    }
    return Structure(**(given | changes))


MODELS = {
    **{f"structure, {name}": structure(base) for name, base in BASES.items()},
    "structure, acceleration": structure(Cq=None, Cv=None, Ca=RNG.random((3, N))),
    "structure, bare": Structure(K=stiffness(), M=sp.eye_array(N)),
    "thermal": Thermal(
        K=stiffness(), E=sp.eye_array(N), F=RNG.random((N, 1)), C=RNG.random((2, N)), D=RNG.random((2, 1))
    ),
    "thermal, bare": Thermal(K=stiffness(), E=sp.eye_array(N)),
    "state space, dense": StateSpace(
        A=RNG.random((4, 4)), B=RNG.random((4, 1)), C=RNG.random((2, 4)), D=np.ones((2, 1))
    ),
    "state space, sparse": StateSpace(
        A=-stiffness(), E=stiffness(shift=1.0), B=RNG.random((N, 1)), C=RNG.random((1, N))
    ),
    "state space, descriptor": StateSpace(A=RNG.random((4, 4)), E=np.eye(4), B=RNG.random((4, 1))),
}


@pytest.mark.parametrize("name", MODELS)
def test_round_trip(tmp_path, name, assert_same_record):
    """Every kind, damping, channel, label and unit comes back to the last bit, and so does the fingerprint."""
    from dataclasses import replace

    model = MODELS[name]
    path = tmp_path / "ein Modell ü.h5"
    io.save(path, model)
    back = io.load(path)
    assert back.source == str(path)
    assert_same_record(replace(back, source=""), model)
    assert fingerprint(back) == fingerprint(model)


def test_state_matrices_keep_their_form(tmp_path):
    """A dense state matrix stays dense, a sparse one sparse."""
    for name, sparse in (("state space, dense", False), ("state space, sparse", True)):
        io.save(tmp_path / "m.h5", MODELS[name])
        assert sp.issparse(io.load(tmp_path / "m.h5").A) == sparse


def test_thin_load_of_many_columns(tmp_path, assert_same_record):
    """Large, mostly empty load matrices are stored sparse and come back whole."""
    n, m = 3000, 40
    F = np.zeros((n, m))
    F[np.arange(m) * 7, np.arange(m)] = 1.0
    model = Structure(K=stiffness(n), M=sp.eye_array(n), F=F)
    io.save(tmp_path / "m.h5", model)
    assert (tmp_path / "m.h5").stat().st_size < F.nbytes
    assert np.array_equal(io.load(tmp_path / "m.h5").F, F)


# ---- a file written by hand ----------------------------------------------------------------------------------------


def write(path, kind="structure", attributes=None, without=(), **extra):
    """A small model file written as an analyst would; extra datasets or groups by name."""
    parts = {
        "structure": {
            "stiffness": 2 * np.eye(2),
            "mass": np.eye(2),
            "load": [[1.0], [0.0]],
            "displacement_output": np.eye(2),
        },
        "thermal": {"conductance": 2 * np.eye(2), "capacity": np.eye(2), "load": [[1.0], [0.0]], "output": np.eye(2)},
        "state space": {"A": -np.eye(2), "B": [[1.0], [0.0]], "C": np.eye(2)},
    }[kind]
    with h5py.File(path, "w") as file:
        file.attrs.update({"format": "modesieve model", "version": 1, "kind": kind} | (attributes or {}))
        for name, value in (parts | extra).items():
            if name not in without:
                file[name] = value
    return path


@pytest.fixture
def path(tmp_path):
    return tmp_path / "m.h5"


def refusal(path, error, **places):
    with pytest.raises(error) as caught:
        io.load_model(path, places or None)
    return caught.value


def test_ten_line_writer(path):
    """A file written by hand reads with default names and without units."""
    model = io.load(write(path))
    assert isinstance(model, Structure)
    assert [c.name for c in (*model.inputs, *model.outputs)] == ["u1", "y1", "y2"]
    assert model.units == UnitSystem()


def test_channels_written_as_lists_of_texts(path):
    """Names, units and weights written as plain lists are read; NaN means no weight."""
    extra = {
        "inputs/name": ["Kraft"],
        "inputs/unit": ["N"],
        "inputs/amplitude": [3],
        "outputs/name": np.array(["a", "b"], dtype="S3"),
        "outputs/resolution": [np.nan, 1e-6],
    }
    model = io.load(write(path, **extra))
    assert model.inputs == (Input(name="Kraft", unit="N", amplitude=3.0),)
    assert model.outputs == (Output(name="a"), Output(name="b", resolution=1e-6))


def test_unknowns_with_whole_number_nodes(path):
    """Node labels may be numbers."""
    model = io.load(write(path, **{"unknowns/node": [7, 9], "unknowns/xyz": np.ones((2, 3))}))
    assert model.unknowns.node == ("7", "9")
    assert model.unknowns.direction == ()


@pytest.mark.parametrize(
    ("extra", "base"),
    [
        ({"attributes": {"damping_ratio": 0.02}}, ModalRatio(ratio=0.02)),
        ({"attributes": {"rayleigh": [0.5, 1e-3]}}, Rayleigh(alpha=0.5, beta=1e-3)),
        ({"attributes": {"loss_factor": np.float32(0.25)}}, LossFactor(eta=0.25)),
    ],
)
def test_damping_attributes(path, extra, base):
    """Base damping as an attribute."""
    assert io.load(write(path, **extra)).damping.base == base


def test_damping_tables(path):
    """Base damping as a table over hertz, or by mode."""
    base = io.load(write(path, damping_by_frequency=[[10.0, 0.01], [20.0, 0.02]])).damping.base
    assert np.allclose(base.omega, [20 * math.pi, 40 * math.pi], rtol=1e-15)
    assert base.ratio.tolist() == [0.01, 0.02]
    assert io.load(write(path, damping_by_mode=[0.01, 0.02])).damping.base.ratio.tolist() == [0.01, 0.02]


def test_foreign_file(path):
    """A file of another layout needs no conversion: places say where the matrices lie."""
    with h5py.File(path, "w") as file:
        file["model/K"], file["model/M"], file["forces"] = 2 * np.eye(2), np.eye(2), [[1.0, 0.0]]
    places = {"stiffness": "/model/K", "mass": "/model/M", "load": io.Place(path="/forces", transposed=True)}
    model = io.load_model(path, places)
    assert (model.kind, model.n, model.m, model.p) == ("structure", 2, 1, 0)


def test_file_without_format(path):
    """A file without a format whose matrices have the right names is a model."""
    with h5py.File(path, "w") as file:
        file["A"], file["B"], file["published"] = -np.eye(2), np.ones((2, 1)), 3.0
    assert io.load(path).kind == "state space"


# ---- refusals ------------------------------------------------------------------------------------------------------


def test_misspelt_matrix(path):
    """A missing matrix is named together with the name it may have been given."""
    error = refusal(write(path, without=("stiffness",), stifness=np.eye(2)), FileError)
    assert str(error) == (
        "the matrix stiffness is missing\n"
        "  expected: a dataset or group stiffness\n"
        "  got:      displacement_output, load, mass, stifness\n"
        f"  where:    {path}\n"
        '  remedy:   rename "stifness" to "stiffness", or say stiffness = "/stifness"'
    )


def test_missing_place(path):
    """A place that does not exist is refused with its name."""
    error = refusal(write(path), FileError, mass="/model/M")
    assert (error.what, error.expected) == ("the matrix mass is missing", "a dataset or group /model/M")


def test_misspelt_place_name(path):
    """A misspelt matrix name among the places gets close matches."""
    error = refusal(write(path), FileError, stifness="/K")
    assert error.remedy == "did you mean stiffness?"


@pytest.mark.parametrize(
    ("extra", "what", "expected", "got"),
    [
        ({"Load": np.eye(2), "without": ["load"]}, "unknown dataset", "load", "Load"),
        ({"velocity_outputs": np.eye(2)}, "unknown dataset", "velocity_output", "velocity_outputs"),
        ({"input/name": ["a"]}, "unknown dataset", "inputs", "input"),
        ({"attributes": {"dampng_ratio": 0.1}}, "unknown attribute", "damping_ratio", "dampng_ratio"),
        ({"attributes": {"unit_lenght": "mm"}}, "unknown attribute", "unit_length", "unit_lenght"),
        ({"inputs/names": ["a"]}, "unknown entry in inputs", "name or unit or amplitude", "names"),
    ],
)
def test_misspelt_optional_names(path, extra, what, expected, got):
    """A name that nearly is an optional one is refused: leaving it out silently would change the answer."""
    error = refusal(write(path, **extra), FileError)
    assert (error.what, error.expected, error.got, error.remedy) == (what, expected, got, "correct the name")


def test_other_names_are_left_alone(path):
    """What has nothing to do with the model may lie in the same file."""
    assert io.load(write(path, notes=[1, 2], attributes={"author": "x", "TITLE": ""})).n == 2


@pytest.mark.parametrize(
    ("extra", "what", "expected", "got", "remedy"),
    [
        ({"mass": np.eye(3)}, "mass has the wrong shape", "(2, 2): n by n as stiffness", "(3, 3)", ""),
        ({"load": np.ones((1, 2))}, "load has the wrong shape", "(2, 2): 2 rows, one per unknown", "(1, 2)", ""),
        (
            {"velocity_output": np.ones((1, 2))},
            "velocity_output has the wrong shape",
            "(2, 2): 2 columns, one per unknown, and as many rows as the other outputs",
            "(1, 2)",
            "",
        ),
        (
            {"feedthrough": np.ones((1, 2))},
            "feedthrough has the wrong shape",
            "(2, 1): outputs by inputs",
            "(1, 2)",
            "store the transpose",
        ),
    ],
)
def test_wrong_shapes(path, extra, what, expected, got, remedy):
    """Shapes are held against each other before anything is read."""
    error = refusal(write(path, **extra), ModelError)
    assert (error.what, error.expected, error.got, error.remedy) == (what, expected, got, remedy)
    assert error.where == f"{path}, /{what.split()[0]}"


def test_not_square(path):
    """A stiffness that is not square is refused."""
    error = refusal(write(path, stiffness=np.ones((2, 3))), ModelError)
    assert error.what == "stiffness has the wrong shape"


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_values_that_are_not_numbers(path, value):
    """NaN and Inf are refused with dataset and file."""
    error = refusal(write(path, mass=[[1.0, value], [0.0, 1.0]]), FileError)
    assert str(error) == (
        "mass holds values that are not numbers\n"
        "  expected: finite values\n"
        "  got:      NaN or Inf\n"
        f"  where:    {path}, /mass"
    )


def test_complex_where_real_is_meant(path):
    """A complex matrix is refused with a remedy."""
    error = refusal(write(path, stiffness=np.eye(2) * (1 + 0.1j)), FileError)
    assert (error.what, error.got) == ("the dataset has the wrong type", "complex numbers (complex128)")
    assert error.remedy == "store the real part, or a real form of the model"


def test_two_base_dampings(path):
    """Two base dampings are refused, both named."""
    error = refusal(write(path, attributes={"damping_ratio": 0.1}, damping_by_mode=[0.1]), ModelError)
    assert (error.what, error.got) == ("more than one base damping", "damping_ratio and damping_by_mode")


@pytest.mark.parametrize(
    ("extra", "error", "what"),
    [
        ({"attributes": {"damping_ratio": 2.0}}, ModelError, "damping_ratio is out of range"),
        ({"attributes": {"damping_ratio": -0.1}}, ModelError, "damping_ratio is out of range"),
        ({"attributes": {"damping_ratio": "2 %"}}, FileError, "the attribute has the wrong type or value"),
        ({"attributes": {"damping_ratio": np.nan}}, FileError, "the attribute has the wrong type or value"),
        ({"attributes": {"rayleigh": [1.0]}}, FileError, "the attribute has the wrong type or value"),
        ({"damping_by_frequency": [[1.0, 0.1, 3.0]]}, FileError, "damping_by_frequency has the wrong shape"),
        ({"damping_by_frequency": [[2.0, 0.1], [1.0, 0.1]]}, ModelError, "frequencies do not ascend"),
        ({"damping_by_frequency": [[2.0, 1.1]]}, ModelError, "damping ratios out of range"),
        ({"damping_by_mode": [[0.1]]}, FileError, "damping_by_mode has the wrong shape"),
        ({"damping_by_mode": [-0.1]}, ModelError, "damping ratios out of range"),
        ({"damping": np.eye(3)}, ModelError, "damping has the wrong shape"),
    ],
)
def test_bad_damping(path, extra, error, what):
    """Every base damping is checked for type, shape and range."""
    assert refusal(write(path, **extra), error).what == what


def test_percent_as_ratio_gets_a_hint(path):
    """A ratio of 2 suggests that 2 % was meant."""
    assert refusal(write(path, attributes={"damping_ratio": 2}), ModelError).remedy == "write 0.02 if 2 % is meant"


def test_damping_of_other_kinds(path):
    """A thermal model with a damping ratio is refused."""
    error = refusal(write(path, "thermal", {"damping_ratio": 0.1}), ModelError)
    assert error.what == "a thermal model with a damping"


@pytest.mark.parametrize(
    ("attributes", "what", "remedy"),
    [
        ({"format": "other"}, "unknown format", ""),
        ({"format": "modesieve modl"}, "unknown format", 'did you mean "modesieve model"?'),
        ({"version": 2}, "unknown version of the model file", "use a newer version of this program"),
        ({"kind": "struktur"}, "unknown kind of model", 'did you mean "structure"?'),
        ({"kind": 3}, "the attribute has the wrong type or value", ""),
        ({"channel_units": "none"}, "unknown channel_units", ""),
    ],
)
def test_bad_root_attributes(path, attributes, what, remedy):
    """Format, version and kind are checked, with close matches."""
    write(path, attributes=attributes)
    with pytest.raises(FileError) as caught:
        io.load(path)
    assert (caught.value.what, caught.value.remedy) == (what, remedy)


def test_nothing_that_looks_like_a_model(path):
    """An HDF5 file of something else is refused with what it holds."""
    with h5py.File(path, "w") as file:
        file["x"] = 1
    error = refusal(path, FileError)
    assert (error.what, error.got) == ("the file does not say what it holds", "x")


@pytest.mark.parametrize(
    ("extra", "error", "what"),
    [
        ({"inputs/name": ["a", "b"]}, ModelError, "name has the wrong number of entries"),
        ({"outputs/name": ["a", "a"]}, ModelError, "channel names are not unique"),
        ({"outputs/name": ["a", ""]}, ModelError, "channel names are not unique"),
        ({"inputs/name": [1.5]}, FileError, "the dataset has the wrong type"),
        ({"inputs/amplitude": [0.0]}, ModelError, "amplitude must be above 0"),
        ({"inputs/amplitude": [np.inf]}, ModelError, "amplitude must be above 0"),
        ({"inputs/amplitude": ["3 N"]}, FileError, "the dataset has the wrong type"),
        ({"inputs/name": np.array([b"\xff"])}, FileError, "a text is not UTF-8"),
        ({"inputs/name": ["x" * 5000]}, FileError, "a text is too long"),
        ({"inputs": [1.0]}, FileError, "inputs is not a group"),
        ({"unknowns/node": ["a"]}, ModelError, "node has the wrong number of entries"),
        ({"unknowns/xyz": np.ones((2, 2))}, ModelError, "coordinates do not fit the model"),
        ({"inputs/unit": ["parsec/fortnite"]}, UnitError, "channel u1: unknown unit 'fortnite'"),
    ],
)
def test_bad_labels(path, extra, error, what):
    """Channels and labels are checked for number, type and uniqueness."""
    assert refusal(write(path, **extra), error).what == what


def test_dense_stiffness_is_read_without_a_dense_copy(path):
    """A dense n by n dataset of a structure becomes sparse a few rows at a time."""
    n = 800
    write(path, stiffness=stiffness(n).toarray(), mass=np.eye(n), without=("load", "displacement_output"))
    model = io.load(path)
    assert model.K.nnz == 3 * n - 2
    assert model.M.nnz == n


def test_refused_file_leaves_no_open_handle(path):
    """After a refusal the file can be replaced at once."""
    refusal(write(path, mass=np.eye(3)), ModelError)
    with h5py.File(path, "w") as file:
        file["x"] = 1


def test_real_matrices(matrix_market_file, matrix_market_pair):
    """Outside matrices go through a file unchanged, explicit zeros of a singular mass included."""
    for name in ("01", "05", "08"):
        K, M = matrix_market_pair(name)
        model = io.load(matrix_market_file(name))
        assert (model.K != K).nnz == 0
        assert model.M.nnz == M.nnz


def test_building(shared_data):
    """A published (A, B, C) file that knows nothing of this format is read as it is."""
    model = io.load(shared_data / "building48.h5")
    assert (model.kind, model.n, model.m, model.p) == ("state space", 48, 1, 1)
