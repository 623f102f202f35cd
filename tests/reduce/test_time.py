"""Time responses against closed forms, the matrix exponential and published steps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem
from modesieve.reduce.response.time import impulse_response, step_response, time_grid


@dataclass
class Poles:
    eigenvalue: np.ndarray
    always_kept: tuple[str, ...] = ()


def oscillators(x: list[float], d: list[float], p: int = 1, m: int = 1, seed: int = 0) -> SecondOrderModal:
    rng, k = np.random.default_rng(seed), len(x)
    zero = np.zeros((p, k))
    b = np.ones((k, 1)) if m == 1 else rng.normal(size=(k, m))
    cq = np.ones((1, k)) if p == 1 else rng.normal(size=(p, k))
    return SecondOrderModal(
        x=x, d=d, eta=np.zeros(k), b=b, cq=cq, cv=zero, ca=zero, D=np.zeros((p, m)), X=np.zeros((p, m))
    )


def mixed(seed: int) -> FirstOrderModal:
    """A real pole, a pair, a defective group, an integrator and an unstable pole."""
    rng = np.random.default_rng(seed)
    blocks = (
        np.array([[-1.3]]),
        np.array([[-0.1, 2.0], [-2.0, -0.1]]),
        np.array([[-3.0, 1.0, 0.4], [0.0, -3.0, 1.0], [0.0, 0.0, -3.0]]),
        np.array([[0.0]]),
        np.array([[0.2]]),
        np.array([[-0.4, 5.0], [-5.0, -0.4]]),
    )
    return FirstOrderModal(
        blocks=blocks, B=rng.normal(size=(10, 2)), C=rng.normal(size=(3, 10)), D=rng.normal(size=(3, 2))
    )


def reference(system: SmallSystem, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Step and impulse response from one exponential of the whole system at every time."""
    A, B, C, D = system.state_space()
    n, m = B.shape
    wide = np.zeros((n + m, n + m))
    wide[:n, :n], wide[:n, n:] = A, B
    whole = [expm(wide * s) for s in t]
    return np.array([C @ E[:n, n:] + D for E in whole]), np.array([C @ E[:n, :n] @ B for E in whole])


@settings(max_examples=15, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**6))
def test_propagation_equals_the_exponential_of_the_whole_system(seed: int) -> None:
    """Blocks of every size, integrating and unstable ones included, on equal and on arbitrary steps."""
    rng = np.random.default_rng(seed)
    system = mixed(seed)
    for t in (np.linspace(0, 6, 31), np.cumsum(rng.uniform(0.01, 0.5, 20))):
        step, impulse = reference(system, t)
        np.testing.assert_allclose(step_response(system, t), step, atol=1e-11 * np.abs(step).max())
        np.testing.assert_allclose(impulse_response(system, t), impulse, atol=1e-11 * np.abs(impulse).max())


def test_second_order_closed_forms() -> None:
    """Underdamped, critical, overdamped, rigid-body and unstable single modes have textbook step responses."""
    t = np.linspace(0, 9, 91)
    wd = 2 * np.sqrt(1 - 0.15**2)
    under = (1 - np.exp(-0.3 * t) * (np.cos(wd * t) + 0.3 / wd * np.sin(wd * t))) / 4
    np.testing.assert_allclose(step_response(oscillators([4.0], [0.6]), t)[:, 0, 0], under, atol=1e-13)
    critical = (1 - np.exp(-2 * t) * (1 + 2 * t)) / 4
    np.testing.assert_allclose(step_response(oscillators([4.0], [4.0]), t)[:, 0, 0], critical, atol=1e-13)
    over = 0.25 - (np.exp(-t) / 3 - np.exp(-4 * t) / 12)
    np.testing.assert_allclose(step_response(oscillators([4.0], [5.0]), t)[:, 0, 0], over, atol=1e-13)
    np.testing.assert_allclose(step_response(oscillators([0.0], [0.0]), t)[:, 0, 0], t**2 / 2, rtol=1e-12)
    np.testing.assert_allclose(impulse_response(oscillators([0.0], [0.0]), t)[:, 0, 0], t, rtol=1e-12)
    growing = np.cosh(0.5 * t)
    np.testing.assert_allclose(step_response(oscillators([-0.25], [0.0]), t)[:, 0, 0], (growing - 1) / 0.25, rtol=1e-11)


def test_a_high_mode_keeps_its_digits_over_many_periods() -> None:
    """20 kHz, zeta = 1e-4, 2,000 samples over 500 periods: still exact to nine digits."""
    omega, zeta = 2 * np.pi * 2e4, 1e-4
    t = np.linspace(0, 500 / 2e4, 2001)
    wd = omega * np.sqrt(1 - zeta**2)
    exact = np.exp(-zeta * omega * t) * np.sin(wd * t) / wd
    got = impulse_response(oscillators([omega**2], [2 * zeta * omega]), t)[:, 0, 0]
    np.testing.assert_allclose(got, exact, atol=1e-9 / omega)


def test_feedthrough_answers_a_step_at_once_and_is_left_out_of_the_impulse() -> None:
    """D and X appear in the step at t = 0; the impulse response holds the modes only."""
    system = SecondOrderModal(
        x=[1.0], d=[0.2], eta=[0.0], b=[[1.0]], cq=[[1.0]], cv=[[0.0]], ca=[[0.0]], D=[[2.0]], X=[[0.5]]
    )
    t = np.array([0.0, 1.0])
    assert step_response(system, t)[0, 0, 0] == 2.5
    assert impulse_response(system, t)[0, 0, 0] == 0.0
    nothing = system.select(np.array([], dtype=int))
    np.testing.assert_array_equal(step_response(nothing, t)[:, 0, 0], [2.5, 2.5])


def test_published_settling_of_a_first_order_lag() -> None:
    """95.0, 98.2 and 99.3 % after 3, 4 and 5 time constants (Ogata, Modern Control Engineering, ch. 5, from memory)."""
    system = FirstOrderModal(blocks=(np.array([[-0.25]]),), B=[[1.0]], C=[[0.25]], D=[[0.0]])
    got = step_response(system, 4.0 * np.array([3.0, 4.0, 5.0]))[:, 0, 0]
    np.testing.assert_allclose(got, [0.950213, 0.981684, 0.993262], atol=5e-7)


def test_published_exponential_of_moler_and_van_loan() -> None:
    """A = [[-49, 24], [-64, 31]], eigenvalues -1 and -17, as one block: e^A.

    Moler and Van Loan, SIAM Rev. 20 (1978) 801-836, Example 1, printed to six digits (from memory); digits beyond by
    a 40-digit Taylor series.
    """
    A = np.array([[-49.0, 24.0], [-64.0, 31.0]])
    system = FirstOrderModal(blocks=(A,), B=np.eye(2), C=np.eye(2), D=np.zeros((2, 2)))
    printed = [[-0.735759, 0.551819], [-1.471518, 1.103638]]
    exact = [[-0.7357587581447531, 0.5518190996580977], [-1.471517599088261, 1.103638240715573]]
    for t in (np.array([1.0]), np.linspace(0, 1, 11)):
        got = impulse_response(system, t)[-1]
        np.testing.assert_allclose(got, printed, atol=5e-7)
        np.testing.assert_allclose(got, exact, rtol=1e-12)


def test_time_grid_for_real_poles_covers_fast_and_slow() -> None:
    """From a tenth of the fastest time constant to five of the slowest, with few distinct steps."""
    t = time_grid(Poles(-np.array([1e-4, 0.01, 2.0]) + 0j), (0.0, 3.0))
    assert t[0] == 0
    assert t[1] <= 0.05 + 1e-12
    assert t[-1] >= 5e4 * (1 - 1e-9)
    assert len(t) < 1500
    assert len(np.unique([f"{h:.6e}" for h in np.diff(t)])) < 30


@pytest.mark.parametrize(
    ("lam", "end"),
    [
        ([-1.0 + 10j], 5 / 1.0),
        ([-0.001 + 10j], 12 * 2 * np.pi / 10),
        ([0j, 0j, -1.0 + 10j], 5.0),
        ([0.1 + 0j, -0.01 + 0j], 3 / 0.1),
        ([0j], 12 * 2 * np.pi / 20),
    ],
)
def test_time_grid_ends_where_the_slowest_mode_has_told_its_story(lam: list[complex], end: float) -> None:
    """Five time constants, twelve periods, or three e-foldings of growth, whichever comes first."""
    t = time_grid(Poles(np.array(lam)), (0.0, 20.0))
    assert end * (1 - 1e-9) <= t[-1] <= 1.3 * end  # real poles end on a whole step
    assert np.all(np.diff(t) > 0)


@pytest.mark.parametrize("t", [[], [1.0, 0.5], [-1.0, 0.0], [0.0, np.nan], [[0.0, 1.0]]])
def test_times_that_are_no_grid_are_refused(t: list[float]) -> None:
    """Empty, descending, negative, not finite or two-dimensional times."""
    with pytest.raises(ChoiceError, match="no time grid"):
        step_response(oscillators([1.0], [0.1]), np.array(t))
