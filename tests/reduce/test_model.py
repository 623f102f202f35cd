"""The model records: shapes at the door, channels, weights, fingerprints, error texts."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve.reduce.arrays import as_csr, frozen
from modesieve.reduce.errors import ModelError, ModesieveError
from modesieve.reduce.fingerprint import describe_damping, fingerprint, origin_of
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
    Unknowns,
)


def structure(**changes: object) -> Structure:
    parts: dict[str, object] = {"K": 2 * np.eye(3), "M": np.eye(3), "F": np.ones((3, 1)), "Cq": np.ones((2, 3))}
    return Structure(**(parts | changes))  # type: ignore[arg-type]


def test_channels_get_names_when_none_are_given() -> None:
    """Channels without names are u1, u2, ... and y1, y2, ..."""
    model = structure()
    assert [c.name for c in model.inputs] == ["u1"]
    assert [c.name for c in model.outputs] == ["y1", "y2"]
    assert (model.n, model.m, model.p) == (3, 1, 2)


def test_weights_scale_outputs_down_and_inputs_up() -> None:
    """The weighted transfer matrix is G times amplitude over resolution."""
    model = structure(
        inputs=(Input(name="shaker", unit="N", amplitude=10.0),),
        outputs=(Output(name="tip", unit="m", resolution=1e-3), Output(name="root", unit="m")),
    )
    np.testing.assert_allclose(model.weigh(np.ones((4, 2, 1)))[0], [[1e4], [10.0]])
    assert model.has_resolutions


def test_matrices_are_sparse_and_canonical() -> None:
    """Duplicates are summed without touching the caller's matrix."""
    K = sp.csr_array((np.array([1.0, 1.0]), np.array([0, 0]), np.array([0, 2])), shape=(1, 1))
    model = Structure(K=K, M=np.eye(1))
    assert model.K.nnz == 1
    assert model.K[0, 0] == 2.0
    assert K.nnz == 2


def test_records_do_not_change() -> None:
    """The dense arrays of a model are read-only and the caller's own array stays writeable."""
    F = np.ones((3, 1))
    model = structure(F=F)
    with pytest.raises(ValueError, match="read-only"):
        model.F[0, 0] = 2.0
    F[0, 0] = 5.0
    assert model.F[0, 0] == 1.0
    assert frozen(model.F) is model.F


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        (
            {"M": np.eye(2)},
            "mass does not fit stiffness\n  expected: shape (3, 3) as stiffness\n  got:      shape (2, 2)",
        ),
        ({"K": np.ones((2, 3))}, "stiffness is not square\n  expected: n by n, n at least 1\n  got:      shape (2, 3)"),
        (
            {"F": np.ones((1, 3))},
            "load does not fit the model\n  expected: 3 rows, one per unknown\n  got:      shape (1, 3)\n"
            "  remedy:   store the transpose",
        ),
        (
            {"M": np.diag([1.0, np.nan, np.inf])},
            "mass holds values that are not numbers\n  expected: finite values\n  got:      2 NaN or Inf",
        ),
        (
            {"inputs": (Input(name="a"), Input(name="b"))},
            "number of inputs and their names differ\n  expected: 1 names\n  got:      2",
        ),
        (
            {"outputs": (Output(name="a"), Output(name="a"))},
            "channel names are not unique\n  expected: one name per channel\n  got:      a",
        ),
        (
            {"unknowns": Unknowns(node=("1", "2"))},
            "unknown labels do not fit the model\n  expected: 3 entries\n  got:      2\n  where:    unknowns/node",
        ),
        (
            {"Du": np.ones((1, 2))},
            "feedthrough does not fit the channels\n  expected: shape (2, 1)\n  got:      shape (1, 2)",
        ),
    ],
)
def test_a_model_that_does_not_fit_together_is_refused(changes: dict[str, object], text: str) -> None:
    """Each mistake names the matrix, what was expected and what was found."""
    with pytest.raises(ModelError) as caught:
        structure(**changes)
    assert str(caught.value) == text


def test_output_kinds_must_agree_in_their_rows() -> None:
    """Displacement and acceleration outputs are summed row by row, so their row counts must agree."""
    with pytest.raises(ModelError, match="different numbers of rows"):
        structure(Ca=np.ones((3, 3)))


def test_output_at_a_frequency_sums_the_three_kinds() -> None:
    """C(w) = Cq + j w Cv - w^2 Ca."""
    model = structure(Cv=np.ones((2, 3)), Ca=2 * np.ones((2, 3)))
    np.testing.assert_allclose(model.output_at(3.0), (1 + 3j - 18) * np.ones((2, 3)))
    assert model.has_rates


def test_errors_survive_a_trip_to_another_process() -> None:
    """A pickled error keeps its type and every part of its message."""
    error = ModelError("a", expected="b", got="c", where="d", remedy="e")
    twin = pickle.loads(pickle.dumps(error))
    assert type(twin) is ModelError
    assert str(twin) == str(error)
    assert isinstance(twin, ModesieveError)
    assert isinstance(twin, ValueError)


def test_fingerprint_is_of_the_meaning_not_of_the_storage() -> None:
    """Order of entries and index width do not matter; a value, a damping or a channel weight does."""
    K = sp.coo_array(([2.0, 2.0, 2.0], ([2, 0, 1], [2, 0, 1])), shape=(3, 3))
    wide = as_csr(K)
    wide.indices, wide.indptr = wide.indices.astype(np.int64), wide.indptr.astype(np.int64)
    base = fingerprint(structure())
    assert fingerprint(structure(K=K)) == fingerprint(structure(K=wide)) == base
    others = [
        structure(K=2 * np.eye(3) * (1 + 1e-15)),
        structure(damping=Damping(base=ModalRatio(ratio=0.01))),
        structure(damping=Damping(base=RatioByMode(ratio=np.array([0.01])))),
        structure(damping=Damping(viscous=np.eye(3))),
        structure(inputs=(Input(name="u1", amplitude=2.0),)),
    ]
    assert len({base, *map(fingerprint, others)}) == 6


@pytest.mark.parametrize(
    ("damping", "words"),
    [
        (Damping(), "none"),
        (Damping(base=Rayleigh(alpha=2.0, beta=1e-6)), "Rayleigh, alpha 2 1/s, beta 1e-06 s"),
        (Damping(base=LossFactor(eta=0.03)), "loss factor 0.03"),
        (
            Damping(base=RatioByFrequency(omega=np.array([1.0, 2.0]), ratio=np.array([0.01, 0.02]))),
            "damping ratio by frequency, 1 to 2 %, counted modes",
        ),
        (Damping(viscous=sp.eye_array(3)), "a local viscous matrix"),
        (
            Damping(base=LossFactor(eta=0.03), stiffness_loss=sp.eye_array(3)),
            "loss factor 0.03, and a local imaginary stiffness",
        ),
    ],
)
def test_damping_is_told_in_words(damping: Damping, words: str) -> None:
    """The source of damping is part of every report."""
    assert describe_damping(structure(damping=damping)) == words


def test_origin_remembers_the_channels_of_every_kind() -> None:
    """An origin has the channels, size and kind of its model."""
    thermal = Thermal(K=np.eye(2), E=np.eye(2), F=np.ones((2, 2)), C=np.ones((1, 2)))
    control = StateSpace(A=-np.eye(2), B=np.ones((2, 1)), C=np.ones((1, 2)))
    for model in (structure(), thermal, control):
        origin = origin_of(model)
        assert (origin.kind, origin.n, origin.m, origin.p) == (model.kind, model.n, model.m, model.p)
        assert origin.damping == ("none" if isinstance(model, Structure) else "in the matrices")
