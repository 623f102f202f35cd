"""Counts by Sylvester's law, and counting points."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.linalg import eigh, null_space

from modesieve.reduce.linalg import count_below, gap_above
from modesieve.reduce.linalg.count import find_multipliers
from modesieve.reduce.linalg.pardiso import pardiso_available

SOLVERS = [
    "superlu",
    pytest.param("pardiso", marks=pytest.mark.skipif(not pardiso_available(), reason="pypardiso is not installed")),
]
solvers = pytest.mark.parametrize("solver", SOLVERS)


def chain(n: int, k: float = 1.0):
    return sp.csr_array(k * sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]))


@solvers
@pytest.mark.parametrize("mu", [-1.0, 1e-3, 0.7, 3.9, 5.0])
def test_a_chain_has_as_many_modes_below_a_point_as_its_formula(solver, mu):
    """``x_j = 4 k/m sin^2(j pi / (2 (n + 1)))`` for n masses between walls (e.g. Meirovitch, 1967)."""
    n = 150
    known = 4 * np.sin(np.arange(1, n + 1) * np.pi / (2 * (n + 1))) ** 2
    result = count_below(chain(n), sp.eye_array(n, format="csr"), mu, solver=solver)
    assert result.reliable, result.reason
    assert result.expected == np.count_nonzero(known < mu)
    assert result.negative_pivots == result.expected
    assert result.corrections == ""


@solvers
def test_massless_unknowns_with_definite_stiffness_take_nothing_off(solver):
    """Half of the unknowns without mass: the count is that of the condensed pencil."""
    n = 60
    mass = np.tile([1.0, 0.0], n // 2)
    K, M = chain(n), sp.csr_array(sp.diags_array(mass))
    D = K.toarray()
    m, s = np.arange(0, n, 2), np.arange(1, n, 2)
    condensed = D[np.ix_(m, m)] - D[np.ix_(m, s)] @ np.linalg.solve(D[np.ix_(s, s)], D[np.ix_(s, m)])
    known = np.linalg.eigvalsh(condensed)
    for mu in (known[4] + known[5]) / 2, (known[20] + known[21]) / 2:
        result = count_below(K, M, mu, solver=solver)
        assert result.reliable
        assert result.expected == np.count_nonzero(known < mu)
        assert "30 massless unknowns" in result.corrections


@solvers
def test_negative_stiffness_on_massless_unknowns_is_taken_off(solver):
    """A massless unknown with negative stiffness is a negative pivot that is no mode."""
    K = sp.csr_array(np.array([[3.0, 0.5, 0.0], [0.5, -2.0, 0.0], [0.0, 0.0, 7.0]]))
    M = sp.csr_array(np.diag([1.0, 0.0, 1.0]))
    result = count_below(K, M, 5.0, solver=solver)  # condensed: 3 + 0.125 and 7
    assert (result.expected, result.negative_pivots, result.reliable) == (1, 2, True)
    assert "1 negative pivots of massless unknowns" in result.corrections


@solvers
def test_multiplier_rows_are_found_and_taken_off(solver):
    """Fifty constraints add fifty negative pivots; the modes are those of the constrained chain."""
    n, ties = 400, 50
    at = np.arange(ties) * 7
    G = sp.csr_array(
        (np.r_[np.ones(ties), -np.ones(ties)], (np.r_[np.arange(ties), np.arange(ties)], np.r_[at, at + 3])),
        shape=(ties, n),
    )
    K = sp.csr_array(sp.block_array([[chain(n), G.T], [G, None]]))
    M = sp.csr_array(sp.block_diag([sp.eye_array(n), sp.csr_array((ties, ties))]))
    N = null_space(G.toarray())
    known = eigh(N.T @ (chain(n) @ N), eigvals_only=True)
    mu = (known[14] + known[15]) / 2
    result = count_below(K, M, mu, solver=solver)
    assert result.reliable, result.reason
    assert (result.expected, result.negative_pivots) == (15, 65)
    assert result.corrections == "50 multiplier rows"
    assert find_multipliers(K, M).tolist() == list(range(n, n + ties))


@solvers
def test_a_multiplier_on_a_massless_unknown(solver):
    """The constraint removes a massless unknown: its pivot and the multiplier's are one positive, one negative."""
    K = sp.csr_array(np.array([[2.0, -1.0, 0.0], [-1.0, 3.0, 1.0], [0.0, 1.0, 0.0]]))  # q2 = 0 by the multiplier
    M = sp.csr_array(np.diag([1.0, 0.0, 0.0]))
    assert count_below(K, M, 1.9, solver=solver).expected == 0
    assert count_below(K, M, 2.1, solver=solver).expected == 1


@solvers
def test_a_point_on_an_eigenvalue_is_not_claimed_reliable_or_within_one(solver):
    """Exactly on an eigenvalue no count is wrong by more than its multiplicity."""
    K = sp.csr_array(np.diag([1.0, 2.0, 3.0]))
    result = count_below(K, sp.eye_array(3, format="csr"), 2.0, solver=solver)
    assert not result.reliable or result.expected in (1, 2)


def test_the_counting_point_lies_outside_every_cluster():
    """The first gap wider than a thousandth above the given point is taken, at its middle."""
    x = np.array([1.0, 4.0, 4.0 + 1e-6, 4.0 + 2e-6, 9.0])
    assert gap_above(x, 1.0) == 2.5
    assert gap_above(x, 4.0) == pytest.approx((4.0 + 2e-6 + 9.0) / 2, rel=1e-15)
    assert gap_above(x, 5.0) == 7.0
    assert gap_above(x, 0.2) == 0.6
    assert gap_above(x, 9.0) > 9.0
    assert gap_above(np.zeros(0), 3.0) > 3.0
