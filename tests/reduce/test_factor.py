"""Factorisations: solutions, pivots, predictions and refusals of both solvers."""

from __future__ import annotations

import gc

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve.reduce.errors import SolveError
from modesieve.reduce.linalg import factorise, predict
from modesieve.reduce.linalg.factor import residual_of
from modesieve.reduce.linalg.fill import factor_nonzeros
from modesieve.reduce.linalg.pardiso import pardiso_available
from modesieve.reduce.linalg.superlu import check_size, dissection

EPS = np.finfo(float).eps
SOLVERS = [
    "superlu",
    pytest.param("pardiso", marks=pytest.mark.skipif(not pardiso_available(), reason="pypardiso is not installed")),
]
solvers = pytest.mark.parametrize("solver", SOLVERS)


def chain(n: int):
    return sp.csr_array(sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]))


def grid(n: int):
    """Five-point Laplacian with two unknowns a node; positive definite."""
    L, identity = chain(n), sp.eye_array(n)
    return sp.csr_array(sp.kron(sp.kron(L, identity) + sp.kron(identity, L), np.array([[1.0, 0.1], [0.1, 1.0]])))


@solvers
@pytest.mark.parametrize("symmetry", ["definite", "indefinite", "none"])
@pytest.mark.parametrize("columns", [0, 1, 5])
def test_solutions_keep_the_shape_and_the_backward_error_of_the_right_hand_side(solver, symmetry, columns):
    """A solve answers vectors and blocks with a backward error of rounding."""
    A = grid(20)
    b = np.random.default_rng(0).standard_normal((800, columns) if columns else 800)
    factor = factorise(A, symmetry=symmetry, solver=solver, groups=np.arange(800) // 2)
    x = factor.solve(b)
    assert x.shape == b.shape
    assert np.abs(A @ x - b).max() < 1e3 * EPS * (8 * np.abs(x).max() + np.abs(b).max())
    assert factor.n == 800
    assert factor.nonzeros >= A.nnz // 2
    assert factor.memory_bytes > 0


@solvers
@pytest.mark.parametrize("symmetry", ["indefinite", "none"])
def test_complex_matrices_and_complex_right_hand_sides(solver, symmetry):
    """Complex symmetric and general matrices, and complex loads on a real matrix, are solved."""
    A = grid(12)
    Z = sp.csr_array(A * (1 + 0.02j) - 0.3 * sp.eye_array(288))
    if symmetry == "none":
        Z = sp.csr_array(Z + sp.triu(0.1j * A))
    b = np.random.default_rng(1).standard_normal((288, 3)) + 1j
    x = factorise(Z, symmetry=symmetry, solver=solver).solve(b)
    assert np.abs(Z @ x - b).max() < 1e-12 * np.abs(x).max()
    y = factorise(A, symmetry="definite", solver=solver).solve(b)
    assert np.abs(A @ y - b).max() < 1e-12 * np.abs(y).max()


@solvers
def test_a_general_matrix_with_empty_diagonal_is_solved(solver):
    """A permutation has no diagonal at all; row exchanges find the pivots."""
    A = sp.csr_array(sp.eye_array(50).tocsr()[np.random.default_rng(2).permutation(50)] * 3.0)
    b = np.arange(50.0)
    assert np.allclose(A @ factorise(A, symmetry="none", solver=solver).solve(b), b)


@solvers
@pytest.mark.parametrize("mu", [0.5, 1.7, 4.03])
def test_negative_pivots_are_the_eigenvalues_below_the_shift(solver, mu):
    """Sylvester's law on a matrix with known eigenvalues 2 - 2 cos(k pi/(n+1))."""
    n = 200
    known = 2 - 2 * np.cos(np.arange(1, n + 1) * np.pi / (n + 1))
    inertia = factorise(sp.csr_array(chain(n) - mu * sp.eye_array(n)), symmetry="indefinite", solver=solver).inertia()
    assert inertia.reliable, inertia.reason
    assert (inertia.negative, inertia.zero) == (np.count_nonzero(known < mu), 0)
    assert inertia.negative + inertia.positive == n


@solvers
def test_multiplier_rows_with_zero_diagonal_add_one_negative_pivot_each(solver):
    """[[K, G^T], [G, 0]] with K definite has as many negative eigenvalues as G has rows (Benzi, Golub, Liesen 2005)."""
    G = sp.csr_array((np.tile([1.0, -1.0], 3), (np.repeat([0, 1, 2], 2), [5, 90, 10, 150, 11, 170])), shape=(3, 200))
    inertia = factorise(sp.csr_array(sp.block_array([[chain(200), G.T], [G, None]])), symmetry="indefinite",
                        solver=solver).inertia()  # fmt: skip
    assert inertia.reliable, inertia.reason
    assert (inertia.negative, inertia.positive) == (3, 200)


def test_row_exchanges_withdraw_the_count():
    """SuperLU solves [[0, 1], [1, 0]] by exchanging rows, and then does not claim to know its signs."""
    factor = factorise(sp.csr_array(np.array([[0.0, 1.0], [1.0, 0.0]])), symmetry="indefinite", solver="superlu")
    assert factor.solve(np.array([1.0, 2.0])).tolist() == [2.0, 1.0]
    assert not factor.inertia().reliable
    assert "rows were exchanged" in factor.inertia().reason


@solvers
def test_a_matrix_without_symmetry_has_no_inertia(solver):
    """A general factorisation never reports signs as reliable."""
    assert not factorise(grid(3), symmetry="none", solver=solver).inertia().reliable


@pytest.mark.skipif(not pardiso_available(), reason="pypardiso is not installed")
def test_an_indefinite_matrix_is_refused_as_definite():
    """The Cholesky form stops at the first negative pivot and says so."""
    with pytest.raises(SolveError, match="not definite"):
        factorise(sp.csr_array(np.diag([1.0, -1.0])), symmetry="definite", solver="pardiso")


def test_a_singular_matrix_is_refused():
    """An empty row has no pivot."""
    with pytest.raises(SolveError, match="singular"):
        factorise(sp.csr_array(np.diag([1.0, 0.0])), symmetry="indefinite", solver="superlu")


@solvers
def test_many_factors_live_side_by_side(solver):
    """Thirty factors of different matrices keep their own data, and die without harm."""
    A, b = grid(6), np.ones(72)
    factors = [factorise(A * (i + 1), symmetry="indefinite", solver=solver) for i in range(30)]
    answers = [f.solve(b) * (i + 1) for i, f in enumerate(factors)]
    assert max(np.abs(a - answers[0]).max() for a in answers) < 1e-12
    del factors
    gc.collect()


@solvers
def test_a_released_factor_refuses_to_solve(solver):
    """After release the memory is gone; using the factor is an error with its reason, twice released is harmless."""
    factor = factorise(grid(4), symmetry="definite", solver=solver)
    factor.release()
    factor.release()
    with pytest.raises(SolveError, match="released"):
        factor.solve(np.ones(32))


@solvers
def test_prediction_agrees_with_the_factorisation(solver):
    """Nonzeros and memory are foreseen within a factor of 1.5 (the fill of the order that is then used)."""
    A, groups = grid(40), np.arange(3200) // 2
    foreseen = predict(A, symmetry="definite", solver=solver, groups=groups)
    factor = factorise(A, symmetry="definite", solver=solver, groups=groups)
    assert foreseen.solver == factor.solver
    assert 1 / 1.5 < foreseen.nonzeros / factor.nonzeros < 1.5
    assert 1 / 1.5 < foreseen.memory_bytes / factor.memory_bytes < 1.5
    assert foreseen.fits
    assert foreseen.label == ("estimate" if solver == "superlu" else "from the solver's own analysis")


def test_what_superlu_cannot_hold_is_refused_with_the_alternative():
    """More than 2^31/30 nonzeros: refused before SuperLU fails, naming the package that can."""

    class Huge:
        nnz = 80_000_000

    with pytest.raises(SolveError, match="install the extra 'fast'"):
        check_size(Huge())


def test_memory_that_is_not_there_is_foreseen(monkeypatch):
    """Too little free memory: the prediction says so."""
    monkeypatch.setattr("modesieve.reduce.linalg.superlu.free_bytes", lambda: 1000)
    foreseen = predict(grid(10), symmetry="definite", solver="superlu")
    assert not foreseen.fits
    assert "1000 bytes are free" in foreseen.reason


@pytest.mark.skipif(not pardiso_available(), reason="pypardiso is not installed")
def test_pardiso_refuses_before_it_runs_out_of_memory(monkeypatch):
    """The analysis is compared with what is free before the numbers are computed."""
    monkeypatch.setattr("modesieve.reduce.linalg.pardiso.free_bytes", lambda: 1000)
    with pytest.raises(SolveError, match="would not fit"):
        factorise(grid(10), symmetry="definite", solver="pardiso")


def test_the_solver_that_is_missing_is_named(monkeypatch):
    """PARDISO asked for and not there: refused; not asked for: SuperLU is taken."""
    monkeypatch.setattr("modesieve.reduce.linalg.pardiso._pardiso", lambda: None)
    with pytest.raises(SolveError, match="extra 'fast'"):
        factorise(grid(3), symmetry="definite", solver="pardiso")
    assert factorise(grid(3), symmetry="definite").solver.startswith("SuperLU")


def test_fill_is_counted_exactly():
    """Against elimination by hand on random weighted graphs (George and Liu 1981, chapter 5)."""
    rng = np.random.default_rng(3)
    for _ in range(25):
        n = int(rng.integers(1, 25))
        graph = rng.random((n, n)) < 0.15
        graph = np.triu(graph, 1) | np.triu(graph, 1).T
        order, weight = rng.permutation(n), rng.integers(1, 4, n)
        assert factor_nonzeros(sp.csr_array(graph), weight, order) == _fill_by_elimination(graph, weight, order)


def _fill_by_elimination(graph, weight, order) -> int:
    P, w, total = graph[np.ix_(order, order)].copy(), weight[order], 0
    for k in range(len(P)):
        below = np.flatnonzero(P[k, k + 1 :]) + k + 1
        total += w[k] * (w[k] + 1) // 2 + w[k] * w[below].sum()
        P[np.ix_(below, below)] = True
    return int(total)


def test_rows_of_one_node_stay_together_in_the_order():
    """The order works on the graph of nodes: the rows of every node are neighbours in it."""
    order = dissection(grid(8), np.arange(128) // 2)
    assert sorted(order) == list(range(128))
    assert np.all(order[0::2] // 2 == order[1::2] // 2)


@solvers
def test_explicit_zeros_and_unsorted_rows_change_nothing(solver):
    """Stored zeros and unsorted column indices give the same answer; the caller's matrix is not touched."""
    A = grid(5)
    B = sp.csr_array(sp.coo_array(A))
    B.indices[:2], B.data[:2] = B.indices[:2][::-1].copy(), B.data[:2][::-1].copy()
    B.has_sorted_indices = False
    before = B.indices.copy()
    b = np.arange(50.0)
    factor = factorise(B, symmetry="definite", solver=solver)
    assert np.allclose(factor.solve(b), factorise(A, symmetry="definite", solver=solver).solve(b), rtol=1e-13)
    assert np.array_equal(B.indices, before)
    assert residual_of(A, factor) < 1e-14
