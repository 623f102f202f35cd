"""Discrete forms and simulation: exact against the matrix exponential, closed forms and split runs."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from scipy.linalg import expm

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.discrete import (
    discretise,
    folded_poles,
    step_matrices,
    suggested_sample_time,
)
from modesieve.reduce.response.simulate import random_response, simulate, steady_state
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem

DT = 0.1


def oscillators(seed: int) -> SecondOrderModal:
    rng = np.random.default_rng(seed)
    k, m, p = 4, 2, 3
    return SecondOrderModal(
        x=rng.uniform(0.5, 9.0, k), d=rng.uniform(0.01, 0.5, k), eta=np.full(k, 0.05), b=rng.normal(size=(k, m)),
        cq=rng.normal(size=(p, k)), cv=rng.normal(size=(p, k)), ca=rng.normal(size=(p, k)),
        D=rng.normal(size=(p, m)), X=rng.normal(size=(p, m)), eta_X=0.05,
    )  # fmt: skip


def blocks(seed: int) -> FirstOrderModal:
    rng = np.random.default_rng(seed)
    parts = (
        np.array([[-1.3]]),
        np.array([[-0.1, 2.0], [-2.0, -0.1]]),
        np.array([[-3.0, 1.0, 0.4], [0.0, -3.0, 1.0], [0.0, 0.0, -3.0]]),
        np.array([[0.0]]),
    )
    return FirstOrderModal(
        blocks=parts, B=rng.normal(size=(7, 2)), C=rng.normal(size=(3, 7)), D=rng.normal(size=(3, 2))
    )


def lag(a: float = 1.0) -> FirstOrderModal:
    return FirstOrderModal(blocks=(np.array([[-a]]),), B=[[1.0]], C=[[1.0]], D=[[0.0]])


def reference(system: SmallSystem, u: np.ndarray, hold: str, delay: float) -> np.ndarray:
    """Outputs at the samples by exact integration from corner to corner of the delayed input."""
    A, B, C, D = system.state_space()
    times = np.arange(len(u)) * DT

    def value(t: float, side: float) -> np.ndarray:
        if hold == "zero":
            k = int(np.floor((t - delay + side * 1e-9) / DT + 1e-9 * (side > 0)))
            return u[min(k, len(u) - 1)] if k >= 0 else np.zeros(u.shape[1])
        return np.array([np.interp(t - delay, times, column, left=0.0) for column in u.T])

    corners = np.unique(np.round(np.concatenate([times, times + delay % DT]), 12))
    corners = corners[corners <= times[-1] + 1e-9]
    x = np.zeros(len(A))
    out = [C @ x + D @ value(0.0, 1)]
    for a, b in pairwise(corners):
        E, G0, G1 = step_matrices([A], B, b - a)
        x = E @ x + G0 @ value(a, 1) + G1 @ value(b, -1)
        if abs(b / DT - round(b / DT)) < 1e-9:
            out.append(C @ x + D @ value(b, 1))
    return np.array(out)


@pytest.mark.parametrize("make", [oscillators, blocks])
@pytest.mark.parametrize("hold", ["zero", "linear"])
@pytest.mark.parametrize("delay", [0.0, 0.07, 0.1, 0.13, 0.2, 0.25])
def test_discrete_steps_are_exact_for_their_hold_and_delay(make: object, hold: str, delay: float) -> None:
    """The discrete form equals exact integration of the held or linear, delayed input."""
    system: SmallSystem = make(1)  # type: ignore[operator]
    u = np.random.default_rng(3).normal(size=(12, 2))
    u[0] = 0.0
    y, _ = discretise(system, DT, hold=hold, delay=delay).run(u)  # type: ignore[arg-type]
    expected = reference(system, u, hold, delay)
    np.testing.assert_allclose(y, expected, atol=1e-12 * np.abs(expected).max())


def test_held_step_matrix_is_the_matrix_exponential() -> None:
    """Ad = expm(A dt), and Bd solves A Bd = (Ad - I) B."""
    system = oscillators(2)
    A, B, _, _ = system.state_space()
    d = discretise(system, DT)
    np.testing.assert_allclose(d.A, expm(A * DT), atol=1e-13)
    np.testing.assert_allclose(A @ d.B, (expm(A * DT) - np.eye(len(A))) @ B, atol=1e-12)


@pytest.mark.parametrize("hold", ["zero", "linear"])
@pytest.mark.parametrize("make", [oscillators, blocks])
def test_simulation_on_even_times_equals_the_discrete_model(make: object, hold: str) -> None:
    """Two independent walks through the same history agree."""
    system: SmallSystem = make(5)  # type: ignore[operator]
    u = np.random.default_rng(7).normal(size=(40, 2))
    if hold == "linear":
        u[0] = 0.0  # the discrete state starts from rest before the first sample
    run = simulate(system, np.arange(40) * DT, u, hold=hold)  # type: ignore[arg-type]
    y, _ = discretise(system, DT, hold=hold).run(u)  # type: ignore[arg-type]
    np.testing.assert_allclose(run.y, y, atol=1e-12 * np.abs(y).max())


def test_a_split_run_equals_one_run() -> None:
    """The state at a sample is all that the future needs, on uneven times too."""
    system = blocks(9)
    rng = np.random.default_rng(11)
    t, u = np.cumsum(rng.uniform(0.01, 0.3, 50)), rng.normal(size=(50, 2))
    whole = simulate(system, t, u, hold="linear")
    first = simulate(system, t[:21], u[:21], hold="linear")
    second = simulate(system, t[20:], u[20:], hold="linear", state=first.state)
    np.testing.assert_allclose(np.vstack([first.y, second.y[1:]]), whole.y, atol=1e-12 * np.abs(whole.y).max())


def test_first_and_second_order_closed_forms() -> None:
    """Steps of 1/(s + a) and 1/(s^2 + 2 z s + 1): textbook closed forms (Ogata, Modern Control Engineering, ch. 5)."""
    t = np.array([0.0, 0.1, 0.5, 2.0, 7.0])
    y = simulate(lag(2.0), t, np.ones((5, 1))).y[:, 0]
    np.testing.assert_allclose(y, (1 - np.exp(-2 * t)) / 2, atol=1e-14)
    z, wd = 0.05, np.sqrt(1 - 0.05**2)
    one = SecondOrderModal(
        x=[1.0], d=[2 * z], eta=[0.0], b=[[1.0]], cq=[[1.0]], cv=[[0.0]], ca=[[0.0]], D=[[0.0]], X=[[0.0]]
    )
    y = simulate(one, t, np.ones((5, 1))).y[:, 0]
    np.testing.assert_allclose(y, 1 - np.exp(-z * t) * (np.cos(wd * t) + z / wd * np.sin(wd * t)), atol=1e-13)


def test_steady_state_stays() -> None:
    """A run that starts steady under a constant input does not move; an integrator has no steady state."""
    system = oscillators(4)
    u = np.array([1.0, -2.0])
    run = simulate(system, np.arange(30) * 0.2, np.tile(u, (30, 1)), state=steady_state(system, u))
    np.testing.assert_allclose(run.y, np.tile(run.y[0], (30, 1)), atol=1e-12 * np.abs(run.y).max())
    with pytest.raises(ChoiceError, match="no steady state"):
        steady_state(blocks(1), u)


def test_a_pole_past_nyquist_folds_and_says_where() -> None:
    """827 Hz sampled at 1 kHz appears at 173 Hz; a sample time from the poles removes it."""
    one = SecondOrderModal(
        x=[(2 * np.pi * 827) ** 2],
        d=[10.0],
        eta=[0.0],
        b=[[1.0]],
        cq=[[1.0]],
        cv=[[0.0]],
        ca=[[0.0]],
        D=[[0.0]],
        X=[[0.0]],
    )
    (folded,) = folded_poles(one, 1e-3, band=(0.0, 2 * np.pi * 200))
    assert folded.hz == pytest.approx(827, rel=1e-6)
    assert folded.appears_hz == pytest.approx(173, rel=1e-5)
    assert folded.in_band
    assert folded_poles(one, suggested_sample_time(one)) == ()


def test_white_noise_through_a_lag() -> None:
    """Variance of 1/(s + a) under a white density S (one-sided, per Hz) is S/(4 a): half of S times H2^2 = 1/(2a)."""
    hz = np.concatenate([[0.0], np.geomspace(1e-4, 1e5, 40_000)])
    out = random_response(lag(3.0), hz, np.full((len(hz), 1), 0.2))
    assert out.rms[0] == pytest.approx(np.sqrt(0.2 / 12), rel=1e-4)
    G = 1.01 * lag(3.0).response(2 * np.pi * hz)
    assert random_response(lag(3.0), hz, np.full((len(hz), 1), 0.2), G).error == pytest.approx(0.01 * out.rms)


@pytest.mark.parametrize(
    ("dt", "delay", "match"), [(0.0, 0.0, "positive"), (np.nan, 0.0, "positive"), (0.1, -1.0, "negative")]
)
def test_impossible_sampling_is_refused(dt: float, delay: float, match: str) -> None:
    """A sample time must be positive and a delay not negative."""
    with pytest.raises(ChoiceError, match=match):
        discretise(lag(), dt, delay=delay)


def test_histories_that_do_not_fit_are_refused() -> None:
    """Times must ascend and inputs have one column each."""
    with pytest.raises(ChoiceError, match="ascend"):
        simulate(lag(), np.array([0.0, 1.0, 1.0]), np.ones((3, 1)))
    with pytest.raises(ChoiceError, match="fit"):
        simulate(lag(), np.array([0.0, 1.0]), np.ones((2, 2)))
