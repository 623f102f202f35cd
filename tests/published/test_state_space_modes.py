"""Dense state space against published examples: defective, ill-conditioned and well-known small systems."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.model import StateSpace
from modesieve.reduce.response.small import FirstOrderModal
from modesieve.reduce.response.time import impulse_response
from modesieve.reduce.truncation.records import Count
from modesieve.reduce.truncation.truncate import truncate


def exponential(A: np.ndarray) -> np.ndarray:
    """``e^A`` through the modes: the impulse response at t = 1 of B = C = I."""
    n = len(A)
    modes = find_modes(StateSpace(A=A, B=np.eye(n), C=np.eye(n)))
    assert modes.certificate.complete == "all"
    return np.asarray(impulse_response(modes.system, np.array([1.0]))[0])


def test_moler_and_van_loan_example_1() -> None:
    """Eigenvalues -1 and -17 (SIAM Rev. 20 (1978) 801-836; from memory, recomputed to 40 digits)."""
    E = exponential(np.array([[-49.0, 24.0], [-64.0, 31.0]]))
    expected = [[-0.7357587581447531, 0.5518190996580977], [-1.471517599088261, 1.103638240715573]]
    np.testing.assert_allclose(E, expected, rtol=1e-12)


def test_ward_1_is_defective_and_stays_one_block() -> None:
    """Eigenvalues 3, 3, 6, defective (Ward, SIAM J. Numer. Anal. 14 (1977) 600-610; seen): a block, never two modes."""
    A = np.array([[4.0, 2.0, 0.0], [1.0, 4.0, 1.0], [1.0, 1.0, 4.0]])
    expected = [
        [147.8666224463699, 183.7651386463682, 71.79703239999647],
        [127.7810855231823, 183.7651386463682, 91.88256932318415],
        [127.7810855231824, 163.6796017231806, 111.9681062463718],
    ]
    np.testing.assert_allclose(exponential(A), expected, rtol=1e-12)
    modes = find_modes(StateSpace(A=-A, B=np.eye(3), C=np.eye(3)))
    assert isinstance(modes.system, FirstOrderModal)
    assert sorted(len(a) for a in modes.system.blocks) == [1, 2]
    pair = next(c for c in modes.cluster if c)
    assert len(pair) == 2
    np.testing.assert_allclose(sorted(modes.decay_rate), [3.0, 3.0, 6.0], atol=1e-6)
    # Kept or dropped whole, whatever count is asked.
    with pytest.raises(ChoiceError, match="splitting"):
        truncate(rank(modes), Count(modes=1))
    for count in (2, 3):
        kept = set(truncate(rank(modes), Count(modes=count)).kept)
        assert set(pair) <= kept or not set(pair) & kept


def test_ward_3_is_ill_conditioned() -> None:
    """Eigenvalues -1, -2, -20 (same source, seen): the published digits are good to about 1e-11."""
    A = np.array([[-131.0, 19.0, 18.0], [-390.0, 56.0, 54.0], [-387.0, 57.0, 52.0]])
    expected = [
        [-1.509644158793135, 0.3678794391096522, 0.1353352811751005],
        [-5.632570799891469, 1.471517758499875, 0.4060058435250609],
        [-4.934938326088363, 1.103638317328798, 0.5413411267617766],
    ]
    np.testing.assert_allclose(exponential(A), expected, rtol=1e-10)
    modes = find_modes(StateSpace(A=A, B=np.eye(3), C=np.eye(3)))
    np.testing.assert_allclose(np.sort(modes.decay_rate), [1.0, 2.0, 20.0], rtol=1e-11)
    assert modes.condition.max() > 10


def test_ward_4_is_almost_a_jordan_block() -> None:
    """Ten eigenvalues 0.1 exp(2 pi i k/10) of an almost defective matrix (same source): W V = I only as one group."""
    A = np.diag(np.ones(9), 1)
    A[9, 0] = 1e-10
    modes = find_modes(StateSpace(A=A - 0.5 * np.eye(10), B=np.eye(10), C=np.eye(10)))
    reference = np.sort_complex(0.1 * np.exp(2j * np.pi * np.arange(10) / 10) - 0.5)
    poles = np.sort_complex(modes.system.poles)
    np.testing.assert_allclose(np.abs(poles - reference), 0, atol=1e-3)
    omega = np.array([0.0, 0.1, 1.0])
    direct = np.array([np.linalg.inv(1j * w * np.eye(10) - A + 0.5 * np.eye(10)) for w in omega])
    np.testing.assert_allclose(modes.system.response(omega), direct, rtol=1e-8, atol=1e-8)


FOURTH = StateSpace(
    A=np.array([[0.0, 0, 0, -150], [1, 0, 0, -245], [0, 1, 0, -113], [0, 0, 1, -19]]),
    B=np.array([[4.0], [1], [0], [0]]),
    C=np.array([[0.0, 0, 0, 1]]),
)


def test_fourth_order_example() -> None:
    """(s+4)/((s+1)(s+3)(s+5)(s+10)): Wilson 1970, Moore 1981 (from memory); residues 1/24, -1/28, -1/40, 2/105."""
    modes = find_modes(FOURTH)
    np.testing.assert_allclose(modes.decay_rate, [1, 3, 5, 10], rtol=1e-11)
    system = modes.system
    assert isinstance(system, FirstOrderModal)
    residues = system.C[0] * system.B[:, 0]
    np.testing.assert_allclose(residues, [1 / 24, -1 / 28, -1 / 40, 2 / 105], rtol=1e-10)
    assert residues.sum() == pytest.approx(0, abs=1e-15)
    assert modes.static is not None
    np.testing.assert_allclose(modes.static, [[4 / 150]], rtol=1e-12)


@pytest.mark.parametrize("z", [0.01, 0.05, 0.2])
def test_second_order_norms(z: float) -> None:
    """1/(s^2 + 2 z s + 1): H-infinity 1/(2 z sqrt(1-z^2)), H2 1/(2 sqrt z) (textbook, from memory, recomputed)."""
    modes = find_modes(
        StateSpace(A=np.array([[0.0, 1], [-1, -2 * z]]), B=np.array([[0.0], [1]]), C=np.array([[1.0, 0]]))
    )
    table = rank(modes)
    assert table.measures["peak-share"][0] == pytest.approx(1 / (2 * z * np.sqrt(1 - z**2)), rel=1e-9)
    assert table.measures["energy-share"][0] == pytest.approx(1 / (4 * z), rel=1e-9)
    assert modes.damping_ratio[0] == pytest.approx(z, rel=1e-12)


def test_biorthogonality_and_spectral_sum() -> None:
    """W V = I and A = W Lambda V on a random dense system: nothing is lost by going to modes."""
    rng = np.random.default_rng(12)
    A = rng.normal(size=(25, 25)) - 6 * np.eye(25)
    modes = find_modes(StateSpace(A=A, B=np.eye(25), C=np.eye(25)))
    At, V, W, _ = modes.system.state_space()
    np.testing.assert_allclose(W @ V, np.eye(25), atol=1e-11)
    np.testing.assert_allclose(W @ At @ V, A, atol=1e-10)
    assert modes.residual.max() < 1e-12


def test_building_of_eight_storeys(shared_data: Path) -> None:
    """Chahlaoui and Van Dooren's building, 48 states: all modes give the published magnitude, 1e-8 of its peak."""
    with h5py.File(shared_data / "building48.h5") as file:
        model = StateSpace(A=file["A"][()], B=file["B"][()], C=file["C"][()])
        omega, magnitude = file["frequency_rad_s"][()].ravel(), file["published_magnitude"][()].ravel()
    modes = find_modes(model)
    assert modes.certificate.complete == "all"
    got = np.abs(modes.system.response(omega)[:, 0, 0])
    np.testing.assert_allclose(got, magnitude, atol=1e-8 * magnitude.max())
