"""What must not change: random models, drawn by hypothesis."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
from hypothesis import given, settings
from hypothesis import strategies as st

from modesieve.examples import random_state_space
from modesieve.reduce import Keep, find_modes, full_response, rank, truncate
from modesieve.reduce.model import Damping, ModalRatio, StateSpace, Structure

SEEDS = st.integers(0, 10**6)
fixed = settings(max_examples=12, deadline=None, derandomize=True)
OMEGA = np.linspace(0.3, 8.0, 25)


def structure(seed: int, n: int = 14) -> Structure:
    rng = np.random.default_rng(seed)
    Q = np.linalg.qr(rng.normal(size=(n, n)))[0]
    K = Q @ np.diag(rng.uniform(0.5, 60.0, n)) @ Q.T
    M = np.diag(rng.uniform(0.5, 2.0, n))
    return Structure(
        K=(K + K.T) / 2,
        M=M,
        F=rng.normal(size=(n, 2)),
        Cq=rng.normal(size=(3, n)),
        damping=Damping(base=ModalRatio(ratio=0.02)),
    )


@fixed
@given(seed=SEEDS)
def test_reordering_and_scaling_of_unknowns_changes_nothing(seed: int) -> None:
    """A permutation and any diagonal scaling of the unknowns leave eigenvalues and response as they are."""
    model, rng = structure(seed), np.random.default_rng(seed + 1)
    n = model.n
    T = sp.csr_array(np.diag(rng.uniform(0.2, 5.0, n))[rng.permutation(n)])
    assert model.Cq is not None
    twin = Structure(
        K=T.T @ model.K @ T, M=T.T @ model.M @ T, F=T.T @ model.F, Cq=model.Cq @ T.toarray(), damping=model.damping
    )
    a, b = find_modes(model), find_modes(twin)
    np.testing.assert_allclose(a.omega, b.omega, rtol=1e-10)
    G = a.system.response(OMEGA)
    np.testing.assert_allclose(b.system.response(OMEGA), G, atol=1e-9 * np.abs(G).max())


@fixed
@given(seed=SEEDS)
def test_reordering_and_scaling_of_channels_goes_through(seed: int) -> None:
    """Permuted and scaled inputs and outputs permute and scale the response, and keep the ranking by weighted size."""
    model, rng = structure(seed), np.random.default_rng(seed + 2)
    rows, columns = rng.permutation(3), rng.permutation(2)
    assert model.Cq is not None
    twin = Structure(K=model.K, M=model.M, F=3 * model.F[:, columns], Cq=model.Cq[rows], damping=model.damping)
    a, b = find_modes(model), find_modes(twin)
    expected = 3 * a.system.response(OMEGA)[:, rows][:, :, columns]
    np.testing.assert_allclose(b.system.response(OMEGA), expected, atol=1e-9 * np.abs(expected).max())
    assert rank(a, by="peak-share").order.tolist() == rank(b, by="peak-share").order.tolist()


@fixed
@given(seed=SEEDS)
def test_all_modes_are_the_full_model(seed: int) -> None:
    """The sum over every mode is the directly solved response, of structures and of state space with groups."""
    for model in (structure(seed), random_state_space(seed, repeats=seed % 3)):
        modes = find_modes(model)
        full = full_response(model, OMEGA, modes=modes)
        np.testing.assert_allclose(modes.system.response(OMEGA), full.G, atol=1e-8 * np.abs(full.G).max())


@fixed
@given(seed=SEEDS)
def test_left_and_right_vectors_are_biorthogonal(seed: int) -> None:
    """W V = I and A = W Lambda V for random dense systems, in whatever blocks they come."""
    A = random_state_space(seed, n=12, repeats=seed % 4).A
    modes = find_modes(StateSpace(A=A, B=np.eye(12), C=np.eye(12)))
    blocks, V, W, _ = modes.system.state_space()
    scale = np.linalg.norm(W) * np.linalg.norm(V)
    np.testing.assert_allclose(W @ V, np.eye(12), atol=1e-13 * scale)
    np.testing.assert_allclose(W @ blocks @ V, A, atol=1e-12 * scale * np.linalg.norm(A))


@fixed
@given(seed=SEEDS, data=st.data())
def test_a_reduced_model_keeps_the_kept_eigenvalues(seed: int, data: st.DataObject) -> None:
    """The poles of the small model are those of the kept modes, to the last digit of the table."""
    modes = find_modes(structure(seed))
    numbers = data.draw(st.sets(st.integers(1, len(modes)), min_size=1))
    small = truncate(modes, Keep(numbers=tuple(sorted(numbers))), band=(0.3, 8.0))
    upper = np.sort_complex(small.system.poles[small.system.poles.imag > 0])
    kept = np.sort_complex(modes.eigenvalue[np.array(small.kept) - 1])
    np.testing.assert_allclose(upper, kept, rtol=1e-12)
