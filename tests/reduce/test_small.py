"""Small modal systems: the sum of terms against the state-space form, solved directly."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem

OMEGA = np.array([-2.0, 0.0, 0.3, 1.7, 40.0])


def second_order(seed: int, k: int = 4, m: int = 2, p: int = 3, eta: float = 0.0) -> SecondOrderModal:
    rng = np.random.default_rng(seed)
    return SecondOrderModal(
        x=rng.uniform(0.5, 9.0, k), d=rng.uniform(0.01, 0.5, k), eta=np.full(k, eta), b=rng.normal(size=(k, m)),
        cq=rng.normal(size=(p, k)), cv=rng.normal(size=(p, k)), ca=rng.normal(size=(p, k)),
        D=rng.normal(size=(p, m)), X=rng.normal(size=(p, m)), eta_X=eta,
    )  # fmt: skip


def first_order(seed: int, m: int = 2, p: int = 3) -> FirstOrderModal:
    rng = np.random.default_rng(seed)
    blocks = (
        np.array([[-1.3]]),
        np.array([[-0.1, 2.0], [-2.0, -0.1]]),
        np.array([[-3.0, 1.0, 0.4], [0.0, -3.0, 1.0], [0.0, 0.0, -3.0]]),
        np.array([[-0.02]]),
    )
    return FirstOrderModal(
        blocks=blocks, B=rng.normal(size=(7, m)), C=rng.normal(size=(p, 7)), D=rng.normal(size=(p, m))
    )


def direct(system: SmallSystem, omega: np.ndarray) -> np.ndarray:
    A, B, C, D = system.state_space()
    eye = np.eye(len(A))
    return np.array([C @ np.linalg.solve(1j * w * eye - A, B) + D for w in omega])


@pytest.mark.parametrize("make", [second_order, first_order])
@settings(max_examples=20, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**6))
def test_response_equals_the_state_space_form(make: object, seed: int) -> None:
    """The modal sum and a direct solve of the state-space form agree to rounding."""
    system = make(seed)  # type: ignore[operator]
    G = direct(system, OMEGA)
    np.testing.assert_allclose(system.response(OMEGA), G, atol=1e-12 * np.abs(G).max(), rtol=0)


@pytest.mark.parametrize("make", [second_order, first_order])
def test_terms_add_up_to_the_response(make: object) -> None:
    """Feedthrough plus all terms is the response, and a selection holds the selected terms only."""
    system: SmallSystem = make(5)  # type: ignore[operator]
    terms = [system.term_response(OMEGA, i) for i in range(system.terms)]
    np.testing.assert_allclose(sum(terms) + system.through(OMEGA), system.response(OMEGA), atol=1e-13)
    np.testing.assert_allclose(
        system.select(np.array([2, 0])).response(OMEGA), terms[0] + terms[2] + system.through(OMEGA), atol=1e-13
    )
    assert system.select(np.array([], dtype=int)).states == 0
    np.testing.assert_allclose(system.select(np.array([], dtype=int)).response(OMEGA), system.through(OMEGA))


@pytest.mark.parametrize("make", [second_order, first_order])
def test_poles_are_the_eigenvalues_of_the_state_matrix(make: object) -> None:
    """Poles agree with the eigenvalues of A as a set."""
    system: SmallSystem = make(9)  # type: ignore[operator]
    poles = np.sort_complex(np.round(system.poles, 4))
    np.testing.assert_allclose(
        poles, np.sort_complex(np.round(np.linalg.eigvals(system.state_space()[0]), 4)), atol=2e-4
    )


def test_loss_factor_is_complex_stiffness_in_frequency_and_half_of_it_in_time() -> None:
    """x (1 + j eta sgn w) in the response; the time-domain pole has zeta = eta/2."""
    one = SecondOrderModal(
        x=[4.0], d=[0.0], eta=[0.06], b=[[1.0]], cq=[[1.0]], cv=[[0.0]], ca=[[0.0]], D=[[0.0]], X=[[0.5]], eta_X=0.06
    )
    G = one.response(np.array([2.0, -2.0]))[:, 0, 0]
    np.testing.assert_allclose(G[0], 1 / (4 * 0.06j) + 0.5 / (1 + 0.06j))
    np.testing.assert_allclose(G[1], np.conj(G[0]))
    np.testing.assert_allclose(np.max(-one.poles.real) / 2.0, 0.03)


def test_an_undamped_resonance_is_infinite_without_a_warning() -> None:
    """A frequency exactly on an undamped pole gives an infinite response, not an exception."""
    one = FirstOrderModal(blocks=(np.array([[0.0]]),), B=[[1.0]], C=[[1.0]], D=[[0.0]])
    assert not np.isfinite(one.response(np.array([0.0]))[0, 0, 0])


def test_direct_parts_go_with_their_terms() -> None:
    """A first-order term's own feedthrough is in its response, in the sum and in the state space; dropping drops it."""
    base, rng = first_order(3), np.random.default_rng(4)
    direct = rng.normal(size=(base.terms, 3, 2))
    system = replace(base, direct=direct)
    shift = direct.sum(axis=0)
    np.testing.assert_allclose(system.response(OMEGA), base.response(OMEGA) + shift, atol=1e-13)
    np.testing.assert_allclose(system.term_response(OMEGA, 1), base.term_response(OMEGA, 1) + direct[1], atol=1e-13)
    np.testing.assert_allclose(system.through(OMEGA), base.through(OMEGA), atol=0)
    np.testing.assert_allclose(system.state_space()[3], base.D + shift, atol=1e-13)
    some = system.select(np.array([2, 0]))
    np.testing.assert_allclose(some.feedthrough, base.D + direct[2] + direct[0], atol=1e-13)
