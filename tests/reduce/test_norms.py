"""Norms against closed forms and direct computation."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import solve_sylvester

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import (
    frobenius,
    h2_norm,
    h_infinity_norm,
    largest_singular_value,
    worst_ratio,
)
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal


def lag(a: float) -> FirstOrderModal:
    return FirstOrderModal(blocks=(np.array([[-a]]),), B=[[1.0]], C=[[1.0]], D=[[0.0]])


def oscillator(zeta: float, omega: float = 1.0, gain: float = 1.0) -> SecondOrderModal:
    zero = [[0.0]]
    return SecondOrderModal(
        x=[omega**2], d=[2 * zeta * omega], eta=[0.0], b=[[gain]], cq=[[1.0]], cv=zero, ca=zero, D=zero, X=zero
    )  # fmt: skip


def real_poles(lam: list[float], residues: list[float]) -> FirstOrderModal:
    blocks = tuple(np.array([[v]]) for v in lam)
    return FirstOrderModal(blocks=blocks, B=np.array(residues)[:, None], C=np.ones((1, len(lam))), D=[[0.0]])


@settings(max_examples=30, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**6), p=st.integers(1, 5), m=st.integers(1, 5))
def test_singular_values_and_worst_ratio_by_brute_force(seed: int, p: int, m: int) -> None:
    """Batches agree with one-by-one singular values, and the screened search finds the true worst ratio."""
    rng = np.random.default_rng(seed)
    G = (rng.normal(size=(40, p, m)) + 1j * rng.normal(size=(40, p, m))) * 10 ** rng.uniform(-9, 9, (40, 1, 1))
    scale = 10 ** rng.uniform(-9, 9, 40)
    each = np.array([np.linalg.norm(g, 2) for g in G])
    np.testing.assert_allclose(largest_singular_value(G), each, rtol=1e-13)
    assert np.all(frobenius(G) >= each * (1 - 1e-13))
    value, at = worst_ratio(G, scale)
    assert value == pytest.approx((each / scale).max(), rel=1e-13)
    assert at == int(np.argmax(each / scale))


def test_extreme_and_missing_values() -> None:
    """No overflow at 1e200, infinite entries give inf, empty channels give 0."""
    assert largest_singular_value(np.full((1, 1, 2), 1e200))[0] == pytest.approx(np.sqrt(2) * 1e200)
    assert largest_singular_value(np.array([[[np.inf, 1.0], [0.0, 1.0]]]))[0] == np.inf
    assert largest_singular_value(np.array([[[np.nan, 1.0]]]))[0] == np.inf
    assert largest_singular_value(np.zeros((3, 0, 2))).tolist() == [0.0, 0.0, 0.0]
    assert worst_ratio(np.zeros((0, 2, 2)), np.zeros(0)) == (0.0, 0)


def test_first_order_norms() -> None:
    """1/(s + a): H2 = 1/sqrt(2a), H-infinity = 1/a.

    Skogestad and Postlethwaite, Multivariable Feedback Control, 2nd ed. 2005, section 4.10 (from memory).
    """
    for a in (1.0, 0.3, 250.0):
        assert h2_norm(lag(a)) == pytest.approx(1 / np.sqrt(2 * a), rel=1e-13)
        assert h_infinity_norm(lag(a))[0] == pytest.approx(1 / a, rel=1e-12)


@pytest.mark.parametrize(
    ("zeta", "h2", "peak"), [(0.01, 5.0, 50.0025002), (0.05, 2.23606798, 10.0125235), (0.2, 1.11803399, 2.55155182)]
)
def test_second_order_norms(zeta: float, h2: float, peak: float) -> None:
    """1/(s^2 + 2 zeta s + 1): H2 = 1/(2 sqrt zeta), H-infinity = 1/(2 zeta sqrt(1 - zeta^2)).

    Closed forms; their approximations in W. Gawronski, Advanced Structural Dynamics and Active Control of Structures,
    Springer 2004, chapter 5. The numbers are evaluations of the closed forms to nine digits.
    """
    assert h2_norm(oscillator(zeta)) == pytest.approx(h2, rel=1e-8)
    value, at = h_infinity_norm(oscillator(zeta))
    assert value == pytest.approx(peak, rel=1e-8)
    assert at == pytest.approx(np.sqrt(1 - 2 * zeta**2), rel=1e-4)


def test_h_infinity_in_mechanical_units() -> None:
    """A 1 kHz mode with a tiny gain beside a slow one: the level set does not depend on the units."""
    one, two = oscillator(0.001, 6283.0, 3e-4), oscillator(0.02, 40.0, 1e-7)
    both = SecondOrderModal(
        **{k: np.concatenate([getattr(one, k), getattr(two, k)]) for k in ("x", "d", "eta", "b")},
        **{k: np.concatenate([getattr(one, k), getattr(two, k)], axis=1) for k in ("cq", "cv", "ca")},
        D=one.D, X=one.X,
    )  # fmt: skip
    omega = np.sort(np.concatenate([np.linspace(39.0, 41.0, 20001), np.linspace(6270.0, 6296.0, 20001)]))
    grid = np.abs(both.response(omega)).max()
    value, _ = h_infinity_norm(both)
    assert grid <= value * (1 + 1e-12)
    assert value == pytest.approx(grid, rel=1e-5)


@settings(max_examples=15, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**6))
def test_h_infinity_is_the_supremum(seed: int) -> None:
    """No frequency of a dense grid is above the norm, and a refined grid reaches it."""
    rng = np.random.default_rng(seed)
    k = 6
    system = SecondOrderModal(
        x=rng.uniform(0.5, 30.0, k), d=rng.uniform(0.02, 0.3, k), eta=np.zeros(k), b=rng.normal(size=(k, 2)),
        cq=rng.normal(size=(3, k)), cv=0.1 * rng.normal(size=(3, k)), ca=np.zeros((3, k)),
        D=rng.normal(size=(3, 2)), X=np.zeros((3, 2)),
    )  # fmt: skip
    value, at = h_infinity_norm(system)
    omega = np.linspace(0.0, 12.0, 6000)
    gains = largest_singular_value(system.response(omega))
    assert gains.max() <= value * (1 + 1e-9)
    near = at + np.linspace(-1e-3, 1e-3, 11) if np.isfinite(at) else np.array([1e9])
    assert largest_singular_value(system.response(near)).max() == pytest.approx(value, rel=1e-6)


def test_h2_error_of_kept_sets_is_not_monotone() -> None:
    """G = (s+4)/((s+1)(s+3)(s+5)(s+10)), slowest 0, 1, 2, 3 poles kept.

    D. A. Wilson, Proc. IEE 117 (1970) 1161-1165 and B. C. Moore, IEEE TAC 26 (1981) 17-32 (the system, from memory);
    formula of the error: Vuillemin, Maillard, Poussot-Vassal, arXiv 2009.11540. The four values were computed
    independently from the residues 1/24, -1/28, -1/40, 2/105.
    """
    lam, res = [-1.0, -3.0, -5.0, -10.0], [1 / 24, -1 / 28, -1 / 40, 2 / 105]
    errors = [h2_norm(real_poles(lam[r:], res[r:])) for r in range(4)]
    np.testing.assert_allclose(errors, [0.0164127, 0.0186625, 0.0041411, 0.0042592], atol=6e-8)
    assert errors[0] == pytest.approx(1.64126919e-2, rel=1e-8)
    assert h_infinity_norm(real_poles(lam, res))[0] == pytest.approx(4 / 150, rel=1e-12)


@settings(max_examples=15, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**6))
def test_h2_equals_the_modal_double_sum(seed: int) -> None:
    """The Gramian form agrees with ``sum tr(R_i R_j^H)/(-lambda_i - conj(lambda_j))`` over real poles."""
    rng = np.random.default_rng(seed)
    lam = -rng.uniform(0.1, 20.0, 5)
    b, c = rng.normal(size=(5, 2)), rng.normal(size=(3, 5))
    system = FirstOrderModal(blocks=tuple(np.array([[v]]) for v in lam), B=b, C=c, D=np.zeros((3, 2)))
    total = sum((c[:, i] @ c[:, j]) * (b[i] @ b[j]) / (-lam[i] - lam[j]) for i in range(5) for j in range(5))
    assert h2_norm(system) == pytest.approx(np.sqrt(total), rel=1e-9)
    P = solve_sylvester(np.diag(lam), np.diag(lam), -b @ b.T)
    assert h2_norm(system) == pytest.approx(np.sqrt(np.trace(c @ P @ c.T)), rel=1e-9)


def test_undefined_norms_are_refused_with_their_reason() -> None:
    """Feedthrough makes H2 infinite; an integrator or an unstable pole makes both undefined."""
    with pytest.raises(ChoiceError, match="H2 norm is undefined"):
        h2_norm(FirstOrderModal(blocks=(np.array([[-1.0]]),), B=[[1.0]], C=[[1.0]], D=[[2.0]]))
    for pole in (0.0, 0.5):
        with pytest.raises(ChoiceError, match="open left half plane"):
            h2_norm(lag(-pole))
        with pytest.raises(ChoiceError, match="H-infinity norm is undefined"):
            h_infinity_norm(lag(-pole))


def test_a_loss_factor_counts_as_half_of_it() -> None:
    """Norms belong to the viscous form with zeta = eta/2."""
    lossy = SecondOrderModal(
        x=[9.0], d=[0.0], eta=[0.04], b=[[1.0]], cq=[[1.0]], cv=[[0.0]], ca=[[0.0]], D=[[0.0]], X=[[0.0]]
    )
    assert h_infinity_norm(lossy)[0] == pytest.approx(h_infinity_norm(oscillator(0.02, 3.0))[0], rel=1e-12)
    assert h2_norm(lossy) == pytest.approx(h2_norm(oscillator(0.02, 3.0)), rel=1e-12)
