"""Modes files and reduced models' files: everything comes back to the last digit, and nothing else is believed."""

import contextlib
import dataclasses
import random
from functools import cache

import h5py
import numpy as np
import pytest
import scipy.sparse as sp

from modesieve import io
from modesieve.io.record_file import fields, read_record, write_record
from modesieve.io.reduced_file import as_model
from modesieve.reduce.errors import FileError, ModesieveError
from modesieve.reduce.fingerprint import origin_of
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.modal.records import Certificate, Modes, Ranking
from modesieve.reduce.model import (
    Damping,
    Input,
    LossFactor,
    ModalRatio,
    Output,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
    UnitSystem,
)
from modesieve.reduce.response.records import ErrorFigure, FullResponse
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal
from modesieve.reduce.truncation.guarantee import Guarantee, SpotCheck
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import Above, Band, Count, Keep, ReducedModel, Tolerance
from modesieve.reduce.truncation.truncate import truncate

N = 24
OMEGA = np.linspace(0.01, 1.0, 17)


def stiffness(n=N):
    off = -np.ones(n - 1)
    return sp.diags_array([off, 2.0 * np.ones(n), off], offsets=[-1, 0, 1]).tocsr()


def ports():
    F, C = np.zeros((N, 1)), np.zeros((2, N))
    F[3], C[0, 5], C[1, 20] = 1.0, 1.0, 1.0
    return F, C


def structure(base, **changes):
    F, C = ports()
    given = {
        "K": stiffness(),
        "M": sp.eye_array(N),
        "F": F,
        "Cq": C,
        "damping": Damping(base=base),
        "inputs": (Input(name="Kraft", unit="N", amplitude=2.0),),
        "outputs": (Output(name="a", unit="mm", resolution=0.1), Output(name="b", unit="mm")),
        "units": UnitSystem(length="mm", force="N", time="s"),
        "title": "chain",
    }
    return Structure(**(given | changes))


def thermal():
    F, C = ports()
    return Thermal(K=stiffness(), E=sp.eye_array(N), F=F, C=C)


def state_space():
    rng = np.random.default_rng(5)
    A = rng.standard_normal((8, 8)) - 4 * np.eye(8)
    return StateSpace(A=A, B=rng.standard_normal((8, 1)), C=rng.standard_normal((2, 8)), D=np.ones((2, 1)))


MODELS = {
    "ratio": structure(ModalRatio(ratio=0.01)),
    "loss factor": structure(LossFactor(eta=0.02)),
    "rates": structure(Rayleigh(alpha=0.01, beta=0.02), Cq=None, Ca=ports()[1]),
    "dashpot": structure(None, damping=Damping(viscous=sp.diags_array([0.1] + [0.0] * (N - 1)))),
    "thermal": thermal(),
    "state space": state_space(),
}


@cache
def modes_of(name):
    return find_modes(MODELS[name], (0.0, 0.6))


@cache
def small_of(name, choice=None):
    ranking = rank(modes_of(name), by="decay" if name == "thermal" else "coupling", band=(0.01, 0.6))
    return truncate(ranking, choice or Count(modes=5), band=(0.01, 0.6))


@pytest.fixture
def path(tmp_path):
    return tmp_path / "result.h5"


# ---- modes ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_modes_round_trip(path, name, assert_same_record):
    """Modes of every kind of model come back to the last bit, vectors included, tied to their model again."""
    modes = modes_of(name)
    io.save(path, modes)
    back = io.load_modes(path, MODELS[name])
    assert_same_record(back, modes)
    assert np.array_equal(back.vectors, modes.vectors)
    assert (back.left is None) == (modes.left is None)
    assert back.left is None or np.array_equal(back.left, modes.left)
    assert back.model is MODELS[name]
    assert io.load(path).model is None


def test_modes_survive_the_model_file(tmp_path):
    """Modes fit the model that was saved and loaded again: the fingerprint sees meaning, not bytes."""
    io.save(tmp_path / "model.h5", MODELS["ratio"])
    io.save(tmp_path / "modes.h5", modes_of("ratio"))
    assert len(io.load_modes(tmp_path / "modes.h5", io.load(tmp_path / "model.h5"))) == len(modes_of("ratio"))


def test_modes_of_another_model_are_refused(path):
    """A changed damping is another model: both fingerprints are named."""
    io.save(path, modes_of("ratio"))
    other = MODELS["loss factor"]
    with pytest.raises(FileError) as caught:
        io.load_modes(path, other)
    assert str(caught.value) == (
        "the modes belong to another model\n"
        f"  expected: modes of this model, fingerprint {origin_of(other).fingerprint[:12]}\n"
        f"  got:      modes of chain, {origin_of(MODELS['ratio']).fingerprint[:12]}\n"
        f"  where:    {path}\n"
        "  remedy:   compute the modes again; matrices, damping or channels have changed"
    )


def test_another_kind_of_file(path):
    """A modes file is no reduced model and no model, and says what it is."""
    io.save(path, modes_of("ratio"))
    with pytest.raises(FileError) as caught:
        io.load_reduced(path)
    assert (caught.value.expected, caught.value.got) == ('format = "modesieve reduced model"', "'modesieve modes'")
    with pytest.raises(FileError, match="this is not a model file"):
        io.load_model(path)


# ---- reduced models ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_reduced_round_trip(path, name, assert_same_record):
    """A reduced model comes back to the last bit: table of all modes, kept ones, statics, samples, ranking, error."""
    small = small_of(name)
    io.save(path, small)
    back = io.load(path)
    assert isinstance(back, ReducedModel)
    assert_same_record(back, small)
    assert_same_record(io.load_reduced(path), small)
    assert back.modes.model is None
    assert back.modes.vectors is None
    assert np.array_equal(back.modes.system.response(OMEGA), small.modes.system.response(OMEGA))
    assert np.array_equal(back.response(OMEGA), small.response(OMEGA))


@pytest.mark.parametrize(
    "choice",
    [
        Count(modes=3),
        Band(low=0.0, high=0.3),
        Keep(numbers=(1, 4, 7)),
        Tolerance(value=0.05, of="peak"),
        (Above(measure="coupling", share=0.5), Above(measure="decay", share=3.0)),
    ],
)
def test_choices_round_trip(path, choice):
    """How the kept set was chosen comes back as the same typed value."""
    io.save(path, small_of("ratio", choice))
    assert io.load(path).choice == choice


def test_guarantee_round_trip(path, assert_same_record):
    """Hub, guarantee and spot checks come back to the last bit; the spot checks also stand at the file's root."""
    small = with_guarantee(small_of("ratio", Band(low=0.01, high=0.3)))
    small = dataclasses.replace(
        small, guarantee=dataclasses.replace(small.guarantee, spot_checks=(*small.guarantee.spot_checks, SPOT))
    )
    io.save(path, small)
    assert_same_record(io.load(path), small)
    with h5py.File(path) as file:
        assert file["spot_checks"].attrs["count"] == len(small.guarantee.spot_checks)


SPOT = SpotCheck(omega=1.0, error=0.1, low=0.0, high=np.inf, slack=1e-12, backward_error=0.0, beside="mode 7")


def test_undefined_and_infinite_figures(path):
    """nan and inf are values like others."""
    small = dataclasses.replace(
        small_of("thermal"), error=ErrorFigure(value=np.nan, certainty="measured", relative_to="peak", note="why")
    )
    io.save(path, small)
    back = io.load(path).error
    assert np.isnan(back.value)
    assert (back.pair, back.at_omega, back.note) == (None, None, "why")


@pytest.mark.parametrize("name", MODELS)
def test_small_model_is_a_model_file(path, name):
    """/model is a model of its own with the same response (a loss factor in state space apart)."""
    small = small_of(name)
    io.save(path, small)
    model = io.load_model(path)
    assert (model.inputs, model.outputs) == (small.modes.origin.inputs, small.modes.origin.outputs)
    assert model.kind == (
        "structure" if isinstance(small.system, SecondOrderModal) and name != "loss factor" else "state space"
    )
    again = find_modes(model, (0.0, 0.6)).system
    if name != "loss factor":
        expected = small.response(OMEGA)
        assert np.allclose(again.response(OMEGA), expected, rtol=0, atol=1e-9 * np.abs(expected).max())


def test_small_model_without_modes():
    """A small model that is all feedthrough still makes a valid model."""
    system = SecondOrderModal(
        x=np.zeros(0), d=np.zeros(0), eta=np.zeros(0), b=np.zeros((0, 1)), cq=np.zeros((2, 0)), cv=np.zeros((2, 0)),
        ca=np.zeros((2, 0)), D=np.ones((2, 1)), X=np.ones((2, 1)),
    )  # fmt: skip
    model = as_model(dataclasses.replace(small_of("ratio"), system=system, kept=()))
    assert isinstance(model, StateSpace)
    assert np.array_equal(model.D, 2 * np.ones((2, 1)))
    assert not np.any(model.B)


# ---- records -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "kind",
    [
        Modes,
        Certificate,
        Ranking,
        ReducedModel,
        FullResponse,
        ErrorFigure,
        SecondOrderModal,
        FirstOrderModal,
        Hub,
        Guarantee,
    ],
)
def test_every_field_has_a_type_that_is_stored(kind):
    """No field of a record is of a type that the file could not hold, other than those kept elsewhere or not at all."""
    elsewhere = {"model", "vectors", "left", "workspace"}
    unknown = {name for name, hint in fields(kind).items() if "Any" in str(hint).replace("tuple[typing.Any, ...]", "")}
    assert unknown <= elsewhere


def test_unknown_values_are_a_programming_error(tmp_path):
    """A value that no file can hold is not written quietly as something else."""

    @dataclasses.dataclass(frozen=True, kw_only=True)
    class Odd:
        value: object

    with h5py.File(tmp_path / "x.h5", "w") as file, pytest.raises(TypeError, match="records do not hold set"):
        write_record(file, Odd(value={1}))


def test_fields_added_later_are_optional(tmp_path):
    """A file from before a field with a default was added is read with the default; a required one is named."""
    from modesieve.io import hdf5

    path = tmp_path / "x.h5"
    with h5py.File(path, "w") as file:
        write_record(file, Certificate(complete="no", found=3, reason="because"))
        del file.attrs["reason"]
    with hdf5.opened(path) as source:
        assert read_record(source, source.file, Certificate).reason == ""
    with h5py.File(path, "a") as file:
        del file.attrs["complete"]
    with hdf5.opened(path) as source, pytest.raises(FileError) as caught:
        read_record(source, source.file, Certificate)
    assert caught.value.what == "complete is missing"


# ---- damage --------------------------------------------------------------------------------------------------------


def edited(path, edit):
    io.save(path, small_of("ratio"))
    with h5py.File(path, "a") as file:
        edit(file)
    with pytest.raises(ModesieveError) as caught:
        io.load(path)
    return caught.value


def replaced(name, value):
    def edit(file):
        del file[name]
        file[name] = value

    return edit


def attribute(name, key, value):
    def edit(file):
        file[name].attrs[key] = value

    return edit


@pytest.mark.parametrize(
    ("edit", "what"),
    [
        (lambda file: file.__delitem__("table"), "the group table is missing"),
        (lambda file: file.__delitem__("kept"), "the list of kept modes is missing"),
        (lambda file: file.__delitem__("table/eigenvalue"), "eigenvalue is missing"),
        (replaced("kept", [1, 99]), "the kept modes are no list of modes"),
        (replaced("kept", [2, 1]), "the kept modes are no list of modes"),
        (replaced("kept", [1.5]), "the dataset has the wrong type"),
        (replaced("table/residual", np.zeros(3)), "shapes do not agree"),
        (replaced("table/term", np.full(N, 99)), "terms out of range"),
        (replaced("table/system/b", np.zeros((3, 1))), "shapes do not agree"),
        (replaced("system/cq", np.zeros((1, 5))), "shapes do not agree"),
        (replaced("samples/G", np.zeros((2, 2, 1))), "shapes do not agree"),
        (replaced("measures/measures/coupling", np.zeros(3)), "shapes do not agree"),
        (replaced("table/cluster/counts", [5]), "sizes do not agree"),
        (replaced("table/always_kept", [1.0]), "the dataset has the wrong type"),
        (attribute("statics", "kind", "some"), "unknown statics"),
        (attribute("certificate", "complete", "surely"), "the attribute has an unknown value"),
        (attribute("certificate", "found", 2.5), "the attribute is not a whole number"),
        (attribute("certificate", "found", "two"), "the attribute has the wrong type"),
        (attribute("result/error", "certainty", "sworn"), "the attribute has an unknown value"),
        (attribute("result/choice", "record", "os.system"), "the group holds something else"),
        (attribute("system", "record", "subprocess.Popen"), "the group holds something else"),
        (attribute("result", "record", "Modes"), "the group holds something else"),
        (attribute("source", "input_count", 2**40), "impossible number of channels"),
        (attribute("source", "input_count", 2), "name has the wrong number of entries"),
        (attribute("/", "version", 9), "unknown version"),
        (
            replaced("samples", h5py.ExternalLink("other.h5", "/")),
            "a link points into another file; such links are never followed",
        ),
    ],
)
def test_refusals(path, edit, what):
    """Every part of a reduced model's file is held against the others; names in it are never looked up anywhere."""
    assert edited(path, edit).what == what


def test_damaged_bytes(path, tmp_path):
    """Whatever bytes of the files are changed, loading gives a record or a domain error."""
    rng = random.Random(4)
    damaged = tmp_path / "damaged.h5"
    for record in (small_of("ratio"), small_of("state space"), modes_of("thermal")):
        io.save(path, record)
        whole = path.read_bytes()
        for _ in range(25):
            raw = bytearray(whole)
            for _ in range(rng.randrange(1, 6)):
                raw[rng.randrange(len(raw))] = rng.randrange(256)
            damaged.write_bytes(raw)
            with contextlib.suppress(ModesieveError):
                io.load(damaged)
