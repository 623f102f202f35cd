"""Published and closed-form facts about errors of truncated models.

Sources stand beside each check. Values marked "memory" were recalled from the publication and re-computed
independently of this program; values marked "closed form" follow from a formula given here.
"""

from itertools import pairwise

import numpy as np
import pytest

from modesieve.reduce.response.norms import h2_norm, h_infinity_norm
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal
from modesieve.reduce.truncation.dense import error_norm, sum_bound
from modesieve.reduce.truncation.floor import hankel_values, of_matrices
from modesieve.reduce.truncation.set_error import h2_error


def wilson():
    """G = (s+4)/((s+1)(s+3)(s+5)(s+10)) in modal form, slowest first.

    D. A. Wilson, Proc. IEE 117 (1970) 1161-1165; B. C. Moore, IEEE TAC 26 (1981) 17-32 (memory).
    """
    A = np.array([[0, 0, 0, -150.0], [1, 0, 0, -245], [0, 1, 0, -113], [0, 0, 1, -19]])
    B, C = np.array([[4.0], [1], [0], [0]]), np.array([[0.0, 0, 0, 1]])
    lam, V = np.linalg.eig(A)
    order = np.argsort(-lam.real)
    lam, V = lam.real[order], V[:, order].real
    return FirstOrderModal(
        blocks=tuple(np.array([[v]]) for v in lam), B=np.linalg.solve(V, B), C=C @ V, D=np.zeros((1, 1))
    ), (A, B, C)


def chain():
    """RC chain of 10 unit sections, driven and read at the driven node: lambda_k and phi_1k^2 in closed form."""
    k = np.arange(1, 11)
    x = 4 * np.sin((2 * k - 1) * np.pi / 42) ** 2
    phi = 2 / np.sqrt(21) * np.sin((2 * k - 1) * np.pi / 21)
    blocks = tuple(np.array([[-v]]) for v in x)
    return FirstOrderModal(blocks=blocks, B=phi[:, None], C=phi[None, :], D=np.zeros((1, 1)))


def test_hankel_values_of_wilsons_example():
    """Published 0.1594e-1, 0.2724e-2, 0.1272e-3, 0.8006e-5 (Moore 1981, memory); more digits re-computed."""
    system, matrices = wilson()
    exact = [1.59383875e-2, 2.72425190e-3, 1.27203662e-4, 8.00595148e-6]
    assert of_matrices(*matrices) == pytest.approx(exact, rel=1e-8)
    assert hankel_values(system) == pytest.approx(exact, rel=1e-6)
    assert of_matrices(*matrices) == pytest.approx([0.1594e-1, 0.2724e-2, 0.1272e-3, 0.8006e-5], rel=4e-4)


def test_residues_and_norms_of_wilsons_example():
    """Residues 1/24, -1/28, -1/40, 2/105; DC = H-infinity = 4/150; H2 = 1.64126919e-2 (closed form, re-computed)."""
    system, _ = wilson()
    assert (system.C[0] * system.B[:, 0]) == pytest.approx([1 / 24, -1 / 28, -1 / 40, 2 / 105], rel=1e-12)
    assert h_infinity_norm(system) == pytest.approx((4 / 150, 0.0), rel=1e-9, abs=1e-6)
    assert h2_norm(system) == pytest.approx(1.64126919e-2, rel=1e-8)


@pytest.mark.parametrize(
    ("keep", "error", "bound", "floor"),
    [
        (1, 0.015, 0.0188095238, 2.72e-3),
        (2, 0.0030952381, 0.0069047619, 1.27e-4),
        (3, 0.0019047619, 0.0019047619, 8.0e-6),
    ],
)
def test_errors_and_bounds_of_wilsons_example(keep, error, bound, floor):
    """True H-infinity error at 0, sum bound, and Hankel floor for 1, 2, 3 slow modes (closed form).

    Bound: triangle inequality on partial fractions (Antoulas 2005, ch. 9, memory); equality when one mode is dropped.
    Floor: K. Glover, Int. J. Control 39 (1984) 1115-1193 (memory).
    """
    system, _ = wilson()
    small = system.select(np.arange(keep))
    value, at = error_norm(system, small)
    assert value == pytest.approx(error, rel=1e-8)
    assert at == pytest.approx(0.0, abs=1e-6)
    ours = sum_bound(system, np.arange(keep, 4))
    assert ours.h_infinity == pytest.approx(bound, rel=1e-8)
    assert ours.peak_to_peak[0, 0] == pytest.approx(bound, rel=1e-8)
    assert hankel_values(system)[keep] == pytest.approx(floor, rel=2e-3)
    assert value >= hankel_values(system)[keep]


def test_h2_error_is_not_monotone_in_the_count():
    """0.0164127, 0.0186625, 0.0041411, 0.0042592 for 0 to 3 kept modes: one is worse than none, three than two.

    Formula: Vuillemin, Maillard and Poussot-Vassal, arXiv 2009.11540 (seen); values re-computed.
    """
    system, _ = wilson()
    Q = h2_error(system, [np.array([i]) for i in range(4)], np.ones(1), np.ones(1))
    errors = [Q.of((np.arange(4) >= keep).astype(float))[0] for keep in range(4)]
    assert errors == pytest.approx([0.0164127, 0.0186625, 0.0041411, 0.0042592], abs=5e-8)
    assert errors[1] > errors[0]
    assert errors[3] > errors[2]


def test_symmetric_chain_meets_its_bound():
    """Collocated symmetric systems reach their norm at 0, so that error equals bound for every count.

    Follows from Liu, Sreeram and Teo, Syst. Control Lett. 34 (1998) 209-215 (memory); values in closed form.
    """
    system = chain()
    shares = [0.18941246, 0.18104465, 0.16505256, 0.14285714, 0.11643057, 0.08812094, 0.06044371, 0.03585811,
              0.01654869, 0.00423116]  # fmt: skip
    x = -np.array([block[0, 0] for block in system.blocks])
    assert system.C[0] ** 2 / x == pytest.approx(shares, abs=6e-9)
    for keep, error in ((1, 0.81058754), (2, 0.62954289), (3, 0.46449033), (5, 0.20520262)):
        value, at = error_norm(system, system.select(np.arange(keep)))
        assert value == pytest.approx(error, abs=1e-8)
        assert at == pytest.approx(0.0, abs=1e-6)
        assert sum_bound(system, np.arange(keep, 10)).h_infinity == pytest.approx(value, rel=1e-9)


def test_hankel_values_and_twice_the_tail_of_the_chain():
    """Hankel values of the chain, and balanced truncation's error 2 x tail, met at 0 for symmetric one-port systems.

    Opmeer and Reis, IEEE TAC 60 (2015) 2207-2212 (seen); values re-computed.
    """
    system = chain()
    values = hankel_values(system)
    exact = [0.359176789, 0.100086530, 0.0341442948, 0.00593339248, 6.18041667e-4, 3.94673012e-5]
    assert values[:6] == pytest.approx(exact, rel=2e-8)
    A, B, C, _ = system.state_space()
    P = -(B @ B.T) / (np.diag(A)[:, None] + np.diag(A)[None, :])
    vectors = np.linalg.eigh(P)[1][:, ::-1]
    for r, error in ((1, 0.281646422), (2, 0.081473361), (3, 0.013184771)):
        V = vectors[:, :r]
        balanced = FirstOrderModal(blocks=(V.T @ A @ V,), B=V.T @ B, C=C @ V, D=np.zeros((1, 1)))
        at_zero = (system.response(np.zeros(1)) - balanced.response(np.zeros(1)))[0, 0, 0].real
        assert abs(at_zero) == pytest.approx(error, abs=2e-9)
        assert abs(at_zero) == pytest.approx(2 * values[r:].sum(), abs=2e-9)


def test_modal_truncation_of_the_chain_is_far_above_the_floor():
    """Modal truncation is 3 to 2500 times worse than balanced truncation here: the floor must lie below every error."""
    system, values = chain(), hankel_values(chain())
    ratios = [error_norm(system, system.select(np.arange(r)))[0] / (2 * values[r:].sum()) for r in (1, 2, 3, 5)]
    assert ratios[0] == pytest.approx(0.81058754 / 0.281646422, rel=1e-7)
    assert all(one < other for one, other in pairwise(ratios))
    assert all(error_norm(system, system.select(np.arange(r)))[0] >= values[r] for r in range(1, 10))


@pytest.mark.parametrize("a", [1.0, 0.3])
def test_first_order_lag(a):
    """1/(s+a): H2 1/sqrt(2a), H-infinity 1/a, Hankel 1/(2a).

    Skogestad and Postlethwaite, Multivariable Feedback Control, 2nd ed. 2005, section 4.10 (memory).
    """
    one = np.ones((1, 1))
    system = FirstOrderModal(blocks=(np.array([[-a]]),), B=one, C=one, D=0 * one)
    assert h2_norm(system) == pytest.approx(1 / np.sqrt(2 * a), rel=1e-12)
    assert h_infinity_norm(system)[0] == pytest.approx(1 / a, rel=1e-9)
    assert hankel_values(system)[0] == pytest.approx(1 / (2 * a), rel=1e-12)


@pytest.mark.parametrize(
    ("zeta", "h2", "h_infinity", "hankel"),
    [
        (0.01, 5.0, 50.0025002, (25.2512500, 24.7512500)),
        (0.05, 2.23606798, 10.0125235, (5.25624610, 4.75624610)),
        (0.2, 1.11803399, 2.55155182, (1.52475488, 1.02475488)),
    ],
)
def test_single_oscillator(zeta, h2, h_infinity, hankel):
    """1/(s^2+2zs+1): H2 1/(2 sqrt z), H-infinity 1/(2z sqrt(1-z^2)), Hankel (sqrt(1+z^2) +- z)/(4z).

    Single-mode formulas: W. Gawronski, Advanced Structural Dynamics and Active Control of Structures, 2004, ch. 5
    (approximations seen; exact ones in closed form). The pair-by-pair bound is exactly twice the H-infinity norm.
    """
    one, none = np.ones((1, 1)), np.zeros((1, 1))
    system = SecondOrderModal(
        x=np.ones(1), d=np.array([2 * zeta]), eta=np.zeros(1), b=one, cq=one, cv=none, ca=none, D=none, X=none
    )
    assert h2_norm(system) == pytest.approx(h2, rel=1e-8)
    assert h_infinity_norm(system)[0] == pytest.approx(h_infinity, rel=1e-8)
    assert hankel_values(system) == pytest.approx(hankel, rel=1e-8)
    bound = sum_bound(system, np.array([0]))
    assert bound.peak_to_peak[0, 0] / h_infinity_norm(system)[0] == pytest.approx(2.0, rel=1e-8)
    assert bound.h_infinity == pytest.approx(h_infinity_norm(system)[0], rel=1e-9)


def test_peak_to_peak_gain_needs_conjugates_apart():
    """zeta = 0.01: combined H-infinity 50.0, peak-to-peak 63.7, apart 100: the combined figure is no bound in time."""
    zeta = 0.01
    wd = np.sqrt(1 - zeta**2)
    t = np.linspace(0, 1500, 3_000_001)
    g = np.abs(np.exp(-zeta * t) * np.sin(wd * t) / wd)
    gain = np.sum((g[1:] + g[:-1]) / 2) * (t[1] - t[0])
    assert gain == pytest.approx(63.7, abs=0.05)
    assert 1 / (2 * zeta * wd) < gain < 2 / (2 * zeta * wd)
