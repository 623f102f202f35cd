"""Eigenpairs against exact spectra, clusters, free bodies, singular mass, and matrices from the literature."""

from __future__ import annotations

import json

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.io import mmread
from scipy.linalg import eigh, null_space

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.linalg import all_pairs, certified_pairs, factorise, lowest_pairs, residuals, shift_and_factor
from modesieve.reduce.linalg import lanczos as module
from modesieve.reduce.linalg.pardiso import pardiso_available

SOLVERS = [
    "superlu",
    pytest.param("pardiso", marks=pytest.mark.skipif(not pardiso_available(), reason="pypardiso is not installed")),
]
solvers = pytest.mark.parametrize("solver", SOLVERS)


def chain(n: int, k: float = 1.0, *, free: bool = False):
    d = 2 * np.ones(n)
    if free:
        d[0] = d[-1] = 1 if n > 1 else 0
    return sp.csr_array(k * sp.diags_array([-np.ones(n - 1), d, -np.ones(n - 1)], offsets=[-1, 0, 1]))


def chain_x(n: int, k: float = 1.0):
    """``4 k/m sin^2(j pi/(2 (n + 1)))`` between walls (textbook, e.g. Meirovitch, Analytical Methods in Vibrations)."""
    return 4 * k * np.sin(np.arange(1, n + 1) * np.pi / (2 * (n + 1))) ** 2


def identity(n: int):
    return sp.csr_array(sp.eye_array(n))


def check(K, M, pairs, known, rtol=1e-10):
    """Eigenvalues, M-orthonormality, true residuals."""
    k = len(pairs)
    assert pairs.status == "converged", pairs.message
    np.testing.assert_allclose(pairs.x, known[:k], rtol=rtol, atol=rtol * max(abs(known[min(k, len(known) - 1)]), 1e-9))
    np.testing.assert_allclose(pairs.vectors.T @ (M @ pairs.vectors), np.eye(k), atol=1e-11)
    np.testing.assert_allclose(pairs.residuals, residuals(K, M, pairs.x, pairs.vectors), rtol=1e-6, atol=1e-15)
    assert np.all(pairs.residuals < 1e-7)


@solvers
@pytest.mark.parametrize(("n", "count"), [(1, 1), (2, 1), (2, 2), (7, 7), (301, 5), (301, 301), (1500, 25)])
def test_a_chain_matches_its_formula(solver, n, count):
    """Every size, one pair to all of them, to ten digits, and counted."""
    K, M = chain(n, 1e6), identity(n)
    pairs, counted = certified_pairs(K, M, count=count, solver=solver)
    check(K, M, pairs, chain_x(n, 1e6))
    assert counted.reliable
    assert counted.expected == len(pairs) >= count
    assert (counted.mu == np.inf) == pairs.complete == (count == n)


@solvers
def test_everything_below_a_limit_is_returned(solver):
    """below= gives all x under it and goes on to the next gap, where the count is made."""
    n, limit = 900, 0.01
    pairs, counted = certified_pairs(chain(n), identity(n), below=limit, solver=solver)
    known = chain_x(n)
    assert len(pairs) == counted.expected == np.count_nonzero(known < counted.mu)
    assert counted.mu > limit
    check(chain(n), identity(n), pairs, known)
    only = lowest_pairs(chain(n), identity(n), below=limit, solver=solver)
    assert len(only) == np.count_nonzero(known < limit)


@solvers
def test_a_limit_below_all_modes_gives_a_counted_empty_list(solver):
    """No mode below the limit: an empty list, and a count of zero."""
    pairs, counted = certified_pairs(chain(400, 1e6), identity(400), below=1.0, solver=solver)
    assert len(pairs) == counted.expected == 0
    assert counted.reliable
    assert counted.mu >= 1.0


@solvers
@pytest.mark.parametrize("copies", [2, 3, 8])
def test_exact_multiplicities_are_found(solver, copies):
    """Copies of one chain by a Kronecker product: every eigenvalue is that many times repeated."""
    n = 150
    K = sp.csr_array(sp.kron(sp.eye_array(copies), chain(n, 1e4)))
    known = np.repeat(chain_x(n, 1e4), copies)
    for pairs in (
        lowest_pairs(K, identity(n * copies), count=4 * copies, solver=solver),
        certified_pairs(K, identity(n * copies), count=4 * copies, solver=solver)[0],
    ):
        check(K, identity(n * copies), pairs, known)
        assert len(pairs) == 4 * copies


@solvers
@pytest.mark.parametrize("seed", range(3))
def test_tight_pairs_and_double_modes_of_a_square_membrane(solver, seed):
    """A square grid with one side stretched by 1e-6: pairs 1e-6 apart, all found and counted from any start."""
    n = 25
    L, one = chain(n), sp.eye_array(n)
    K = sp.csr_array(sp.kron(L, one) + (1 + 1e-6) * sp.kron(one, L))
    known = np.sort((chain_x(n)[:, None] + (1 + 1e-6) * chain_x(n)[None, :]).ravel())
    pairs, counted = certified_pairs(K, identity(n * n), count=30, solver=solver, seed=seed)
    check(K, identity(n * n), pairs, known)
    assert counted.expected == len(pairs)


@solvers
@pytest.mark.parametrize("n", [2, 50, 1200])
def test_a_free_chain_has_its_rigid_body_mode(solver, n):
    """``x_j = 4 k/m sin^2(j pi/(2 n))``, j from 0: singular K, a negative shift chosen by the program."""
    K, M = chain(n, 1e6, free=True), identity(n)
    known = 4e6 * np.sin(np.arange(n) * np.pi / (2 * n)) ** 2
    pairs, counted = certified_pairs(K, M, count=min(n, 12), solver=solver)
    assert pairs.sigma < 0
    assert counted.expected == len(pairs)
    assert abs(pairs.x[0]) < 1e-9 * known[1]
    np.testing.assert_allclose(pairs.x[1:], known[1 : len(pairs)], rtol=1e-10)
    np.testing.assert_allclose(np.abs(pairs.vectors[:, 0]), 1 / np.sqrt(n), rtol=1e-9)


@solvers
def test_six_rigid_bodies_at_once(solver):
    """Six unconnected free chains: a six-fold zero and six-fold flexible modes."""
    n = 80
    K = sp.csr_array(sp.kron(sp.eye_array(6), chain(n, 1e3, free=True)))
    known = np.repeat(4e3 * np.sin(np.arange(n) * np.pi / (2 * n)) ** 2, 6)
    pairs, counted = certified_pairs(K, identity(6 * n), count=20, solver=solver)
    assert counted.expected == len(pairs) == 24
    assert np.all(np.abs(pairs.x[:6]) < 1e-9 * known[6])
    np.testing.assert_allclose(pairs.x[6:], known[6:24], rtol=1e-10)


@solvers
@pytest.mark.parametrize("n", [40, 700])
def test_massless_unknowns_are_condensed_without_being_touched(solver, n):
    """Every second mass missing: the pairs of the condensed pencil, in vectors that satisfy the massless rows."""
    K, M = chain(n, 50.0), sp.csr_array(sp.diags_array(np.tile([2.0, 0.0], n // 2)))
    D = K.toarray()
    m, s = np.arange(0, n, 2), np.arange(1, n, 2)
    known = np.linalg.eigvalsh(
        (D[np.ix_(m, m)] - D[np.ix_(m, s)] @ np.linalg.solve(D[np.ix_(s, s)], D[np.ix_(s, m)])) / 2
    )
    load = np.random.default_rng(0).standard_normal((n, 2))  # on massless unknowns too
    pairs, counted = certified_pairs(K, M, count=10, solver=solver, start=load)
    check(K, M, pairs, known)
    assert counted.expected == len(pairs) == 10
    assert np.abs((K @ pairs.vectors)[s]).max() < 1e-8 * np.abs(K @ pairs.vectors).max()


@solvers
def test_all_finite_modes_of_a_singular_mass(solver):
    """Asking for more than exist returns all of them and says that this is all."""
    n = 40
    M = sp.csr_array(sp.diags_array(np.tile([2.0, 0.0], n // 2)))
    pairs, counted = certified_pairs(chain(n), M, count=n, solver=solver)
    assert pairs.complete
    assert len(pairs) == counted.expected == n // 2
    assert counted.mu == np.inf


@solvers
def test_multiplier_rows_constrain_the_modes(solver):
    """Fifty ties by multipliers: the spectrum of the chain on the null space of the constraints."""
    n, ties = 600, 50
    at = np.arange(ties) * 7
    G = sp.csr_array(
        (np.r_[np.ones(ties), -np.ones(ties)], (np.r_[np.arange(ties), np.arange(ties)], np.r_[at, at + 3])),
        shape=(ties, n),
    )
    K = sp.csr_array(sp.block_array([[chain(n), G.T], [G, None]]))
    M = sp.csr_array(sp.block_diag([sp.eye_array(n), sp.csr_array((ties, ties))]))
    N = null_space(G.toarray())
    known = eigh(N.T @ (chain(n) @ N), eigvals_only=True)
    pairs, counted = certified_pairs(K, M, count=15, solver=solver)
    check(K, M, pairs, known, rtol=1e-9)  # the null space and its dense solution carry 1e-10 themselves
    assert (counted.expected, counted.corrections) == (15, "50 multiplier rows")
    assert np.abs(G @ pairs.vectors[:n]).max() < 1e-10


@solvers
@pytest.mark.parametrize("n", [100, 800])
def test_unstable_modes_below_zero_come_first(solver, n):
    """K made indefinite by a negative spring under every mass: three negative x, found and counted."""
    shift = float(chain_x(n)[2] + chain_x(n)[3]) / 2
    K = sp.csr_array(chain(n) - shift * sp.eye_array(n))
    pairs, counted = certified_pairs(K, identity(n), count=8, solver=solver)
    check(K, identity(n), pairs, chain_x(n) - shift, rtol=1e-9)  # x is a difference: digits are lost in K itself
    assert counted.expected == len(pairs)
    assert np.count_nonzero(pairs.x < 0) == 3


@solvers
@pytest.mark.parametrize("name", ["bcsstk01", "bcsstk05", "bcsstk08", "bcsstk26"])
def test_matrices_from_practice(solver, name, shared_data):
    """Harwell-Boeing pairs (Duff, Grimes, Lewis, ACM TOMS 15, 1989) against values refined in 80-bit arithmetic."""
    reference = json.loads((shared_data / "reference_eigenvalues.json").read_text())[name]
    K = sp.csr_array(mmread(shared_data / f"{name}.mtx"))
    M = sp.csr_array(mmread(shared_data / f"{name.replace('stk', 'stm')}.mtx"))
    known = np.array(reference["lowest_eigenvalues_K_M"])
    pairs, counted = certified_pairs(K, M, count=20, solver=solver)
    np.testing.assert_allclose(pairs.x[:20], known, rtol=1e-8)
    assert counted.reliable
    assert counted.expected == len(pairs) >= 20
    assert pairs.residuals.max() < 1e-8


def test_a_restart_under_a_small_allowance_changes_nothing():
    """With room for 60 columns of 2,000 unknowns the basis is restarted; the pairs are the same."""
    n = 2000
    pairs = lowest_pairs(chain(n), identity(n), count=15, solver="superlu", memory_bytes=60 * 8 * n)
    check(chain(n), identity(n), pairs, chain_x(n))


def test_too_little_memory_returns_what_has_converged():
    """A list longer than the allowance holds ends with its status and its remedy in words, not with an error."""
    n = 2000
    pairs = lowest_pairs(chain(n), identity(n), count=100, solver="superlu", memory_bytes=60 * 8 * n)
    assert pairs.status == "memory"
    assert "memory" in pairs.message
    np.testing.assert_allclose(pairs.x, chain_x(n)[: len(pairs)], rtol=1e-8)


def test_an_interrupt_keeps_what_has_converged():
    """Ctrl-C in the middle: the converged pairs come back, marked."""

    def stop(report) -> None:
        if report.stage == "modes" and report.done > 5:
            raise KeyboardInterrupt

    n = 2000
    pairs, counted = certified_pairs(chain(n), identity(n), count=60, solver="superlu", progress=stop)
    assert pairs.status == "interrupted"
    assert len(pairs) > 5
    assert not counted.reliable
    np.testing.assert_allclose(pairs.x, chain_x(n)[: len(pairs)], rtol=1e-8)


def test_a_missing_mode_is_noticed_and_found_again(monkeypatch):
    """One pair struck from the list: the count disagrees, the second pass brings it back."""
    _strike(monkeypatch, once=True)
    n = 1000
    pairs, counted = certified_pairs(chain(n), identity(n), count=12, solver="superlu")
    assert pairs.status == "converged"
    assert len(pairs) == counted.expected
    np.testing.assert_allclose(pairs.x, chain_x(n)[: len(pairs)], rtol=1e-9)


def test_a_mode_that_stays_missing_withdraws_the_guarantee(monkeypatch):
    """If every pass loses it, the list says that it is not complete."""
    _strike(monkeypatch, once=False)
    pairs, counted = certified_pairs(chain(1000), identity(1000), count=12, solver="superlu")
    assert pairs.status == "miscounted"
    assert counted.expected == len(pairs) + 1
    assert "no guarantee" in pairs.message


def _strike(monkeypatch, *, once: bool) -> None:
    """Make the search lose its fourth pair (once, or at every pass)."""
    from dataclasses import replace

    def without(pairs):
        keep = np.arange(len(pairs)) != 3
        return replace(pairs, x=pairs.x[keep], vectors=pairs.vectors[:, keep], residuals=pairs.residuals[keep])

    run, again = module.Search.run, module.Search.again
    monkeypatch.setattr(module.Search, "run", lambda self, goal: without(run(self, goal)))
    if not once:
        monkeypatch.setattr(module.Search, "again", lambda self, *args: without(again(self, *args)))


@solvers
def test_a_given_factor_is_used_and_stays_alive(solver):
    """With a factor at a given shift no other is made, and it can be used afterwards."""
    n = 600
    factor = factorise(sp.csr_array(chain(n) + 0.001 * identity(n)), symmetry="definite", solver=solver)
    pairs = lowest_pairs(chain(n), identity(n), count=10, factor=factor, sigma=-0.001)
    check(chain(n), identity(n), pairs, chain_x(n))
    assert pairs.factorisations == 0
    assert pairs.factor is factor
    assert np.isfinite(factor.solve(np.ones(n))).all()


@solvers
def test_the_basis_holds_the_pairs_and_is_orthonormal(solver):
    """The Krylov space handed on for the response is M-orthonormal and contains the vectors."""
    n = 600
    M = sp.csr_array(sp.diags_array(np.linspace(1, 2, n)))
    pairs = lowest_pairs(chain(n), M, count=10, solver=solver)
    assert pairs.basis is not None
    np.testing.assert_allclose(pairs.basis.T @ (M @ pairs.basis), np.eye(pairs.basis.shape[1]), atol=1e-11)
    rest = pairs.vectors - pairs.basis @ (pairs.basis.T @ (M @ pairs.vectors))
    assert np.abs(rest).max() < 1e-9


@solvers
def test_the_shift_is_zero_for_supported_and_negative_for_free_bodies(solver):
    """The program chooses; a stiff supported body is not taken for a free one."""
    stiff = sp.csr_array(sp.block_diag([chain(50), chain(50, 1e10)]))
    assert shift_and_factor(stiff, identity(100), solver=solver).sigma == 0
    free = shift_and_factor(chain(300, 1e6, free=True), identity(300), solver=solver)
    first = 4e6 * np.sin(np.pi / 600) ** 2
    assert -0.1 * first <= free.sigma <= -1e-4 * first


def test_all_pairs_of_a_stiff_pencil_are_accurate_at_both_ends():
    """Springs from 1 to 1e12: every eigenvalue of the diagonal pencil to ten digits, low end and high end."""
    k = np.logspace(0, 12, 40)
    Q = np.eye(40)
    pairs = all_pairs(sp.csr_array(np.diag(k)), identity(40), solver="superlu")
    np.testing.assert_allclose(pairs.x, k, rtol=1e-10)
    np.testing.assert_allclose(np.abs(pairs.vectors), Q, atol=1e-9)
    assert pairs.complete


def test_the_same_seed_gives_the_same_numbers():
    """Two searches with one seed agree to the last bit."""
    a, b = (lowest_pairs(chain(800), identity(800), count=9, solver="superlu", seed=4) for _ in range(2))
    assert np.array_equal(a.x, b.x)
    assert np.array_equal(a.vectors, b.vectors)


@pytest.mark.parametrize("count", [0, 11])
def test_counts_that_make_no_sense_are_refused(count):
    """None, or more than there are unknowns."""
    with pytest.raises(ChoiceError, match="do not exist"):
        certified_pairs(chain(10), identity(10), count=count, solver="superlu")


@pytest.mark.slow
@solvers
@pytest.mark.parametrize("seed", range(20))
def test_nothing_is_missed_from_twenty_starts(solver, seed):
    """Clusters of eight, tight pairs, six rigid bodies and massless unknowns in one pencil, twenty random starts."""
    n = 60
    cluster = sp.kron(sp.eye_array(8), chain(n, 10.0))
    tight = sp.block_diag([chain(n, 7.0), chain(n, 7.0 * (1 + 1e-6))])
    rigid = sp.kron(sp.eye_array(6), chain(n, 20.0, free=True))
    bare = chain(n, 5.0)
    mass = sp.diags_array(np.tile([1.0, 0.0], n // 2))
    K = sp.csr_array(sp.block_diag([cluster, tight, rigid, bare]))
    M = sp.csr_array(sp.block_diag([sp.eye_array(16 * n), mass]))
    D = bare.toarray()
    m, s = np.arange(0, n, 2), np.arange(1, n, 2)
    condensed = D[np.ix_(m, m)] - D[np.ix_(m, s)] @ np.linalg.solve(D[np.ix_(s, s)], D[np.ix_(s, m)])
    known = np.sort(
        np.concatenate([
            np.repeat(chain_x(n, 10.0), 8), chain_x(n, 7.0), chain_x(n, 7.0 * (1 + 1e-6)),
            np.repeat(80 * np.sin(np.arange(n) * np.pi / (2 * n)) ** 2, 6), np.linalg.eigvalsh(condensed),
        ])
    )  # fmt: skip
    pairs, counted = certified_pairs(K, M, count=60, solver=solver, seed=seed)
    assert counted.reliable, counted.reason
    assert counted.expected == len(pairs) >= 60
    np.testing.assert_allclose(pairs.x, known[: len(pairs)], rtol=1e-9, atol=1e-9)
