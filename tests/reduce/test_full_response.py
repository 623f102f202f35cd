"""The full model's response against dense solutions and formulas, for every kind and every damping."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve.reduce.errors import ChoiceError, SolveError
from modesieve.reduce.linalg import lowest_pairs
from modesieve.reduce.linalg.pardiso import pardiso_available
from modesieve.reduce.model import (
    Damping,
    LossFactor,
    ModalRatio,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
)
from modesieve.reduce.response import direct
from modesieve.reduce.response.dynamic import dynamic_of
from modesieve.reduce.response.full import SMALL, full_response

SOLVERS = [
    "superlu",
    pytest.param("pardiso", marks=pytest.mark.skipif(not pardiso_available(), reason="pypardiso is not installed")),
]
solvers = pytest.mark.parametrize("solver", SOLVERS)

N = 400
OMEGA = np.linspace(0.002, 0.15, 12)
RNG = np.random.default_rng(5)
LOAD, SEEN = RNG.standard_normal((N, 2)), RNG.standard_normal((3, N))


def chain(n: int = N, *, free: bool = False):
    d = 2 * np.ones(n)
    if free:
        d[0] = d[-1] = 1
    return sp.csr_array(sp.diags_array([-np.ones(n - 1), d, -np.ones(n - 1)], offsets=[-1, 0, 1]))


ONE = sp.csr_array(sp.eye_array(N))
GAPS = sp.csr_array(sp.diags_array(np.tile([1.0, 0.0], N // 2)))
DASHPOTS = sp.csr_array(([0.1, 0.3], ([3, 250], [3, 250])), shape=(N, N))
WIDE = sp.csr_array(sp.block_diag([0.01 * chain(N // 2), sp.csr_array((N // 2, N // 2))]))

DAMPINGS = {
    "undamped": Damping(),
    "Rayleigh": Damping(base=Rayleigh(alpha=0.001, beta=0.02)),
    "mass proportional": Damping(base=Rayleigh(alpha=0.001, beta=0.0)),
    "loss factor": Damping(base=LossFactor(eta=0.02)),
    "dashpots": Damping(viscous=DASHPOTS),
    "dashpots on Rayleigh": Damping(base=Rayleigh(alpha=0.001, beta=0.02), viscous=DASHPOTS),
    "small imaginary stiffness": Damping(stiffness_loss=DASHPOTS),
    "wide viscous": Damping(viscous=WIDE),
    "wide imaginary": Damping(stiffness_loss=WIDE),
    "wide imaginary on loss factor": Damping(base=LossFactor(eta=0.02), stiffness_loss=WIDE),
    "everything": Damping(base=Rayleigh(alpha=0.001, beta=0.002), viscous=WIDE, stiffness_loss=WIDE),
}


def impedance(model: Structure, omega: float):
    """Dense Z(w), written down from the definition of every damping part."""
    K, M, base = model.K.toarray(), model.M.toarray(), model.damping.base
    Z = K - omega**2 * M + 0j
    if isinstance(base, Rayleigh):
        Z += 1j * omega * (base.alpha * M + base.beta * K)
    if isinstance(base, LossFactor):
        Z += 1j * base.eta * np.sign(omega) * K
    if model.damping.viscous is not None:
        Z += 1j * omega * model.damping.viscous.toarray()
    if model.damping.stiffness_loss is not None:
        Z += 1j * np.sign(omega) * model.damping.stiffness_loss.toarray()
    return Z


def assert_close(G, reference, rtol=1e-8):
    """Largest entry's difference relative to the largest entry, frequency by frequency."""
    scale = np.abs(reference).max(axis=(1, 2))
    np.testing.assert_array_less(np.abs(G - reference).max(axis=(1, 2)), rtol * scale)


@solvers
@pytest.mark.parametrize("name", DAMPINGS)
@pytest.mark.parametrize(("K", "M"), [(chain(), ONE), (chain(free=True), ONE), (chain(), GAPS)],
                         ids=["supported", "free", "massless unknowns"])  # fmt: skip
def test_structures_with_every_damping_match_a_dense_solution(solver, name, K, M):
    """One factorisation answers all frequencies, with the backward error asked for."""
    model = Structure(K=K, M=M, F=LOAD, Cq=SEEN, damping=DAMPINGS[name])
    full = full_response(model, OMEGA, solver=solver)
    assert_close(full.G, np.array([SEEN @ np.linalg.solve(impedance(model, w), LOAD.astype(complex)) for w in OMEGA]))
    assert full.worst_backward_error < 1e-12
    assert set(full.method) == {"krylov"}
    assert full.factorisations == 1


@solvers
@pytest.mark.parametrize(
    "base",
    [
        ModalRatio(ratio=0.01),
        RatioByFrequency(omega=np.array([0.0, 0.1]), ratio=np.array([0.01, 0.03])),
        RatioByMode(ratio=np.array([0.02, 0.01])),
    ],
)
@pytest.mark.parametrize("local", [None, DASHPOTS, WIDE], ids=["alone", "dashpots", "wide viscous"])
def test_damping_by_mode_is_a_low_rank_term_of_the_counted_modes(solver, base, local):
    """``j w M Phi diag(2 zeta omega) Phi^T M``; the rest of the model stays undamped."""
    K, M = chain(), sp.csr_array(sp.diags_array(np.linspace(1, 2, N)))
    pairs = lowest_pairs(K, M, count=15, solver=solver)
    model = Structure(K=K, M=M, F=LOAD, Cq=SEEN, damping=Damping(base=base, viscous=local))
    omega_i = np.sqrt(pairs.x)
    zeta = {
        ModalRatio: lambda: np.full(15, 0.01),
        RatioByFrequency: lambda: np.interp(omega_i, [0.0, 0.1], [0.01, 0.03]),
        RatioByMode: lambda: np.r_[0.02, np.full(14, 0.01)],
    }[type(base)]()
    U = M @ pairs.vectors
    reference = np.array([
        SEEN @ np.linalg.solve(impedance(model, w) + 1j * w * (U * (2 * zeta * omega_i)) @ U.T, LOAD.astype(complex))
        for w in OMEGA
    ])  # fmt: skip
    full = full_response(model, OMEGA, pairs=pairs, solver=solver)
    assert_close(full.G, reference)
    assert full.worst_backward_error < 1e-12
    assert full.factorisations == 1


def test_damping_by_mode_needs_the_modes():
    """Without the counted modes the full model is not defined: refused, with what to do."""
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, damping=Damping(base=ModalRatio(ratio=0.01)))
    with pytest.raises(ChoiceError, match="find the modes first"):
        full_response(model, OMEGA)


@solvers
def test_outputs_of_all_kinds_are_summed(solver):
    """Displacement, velocity and acceleration rows and the feedthrough, ``Cq + j w Cv - w^2 Ca``."""
    through = np.arange(6.0).reshape(3, 2)
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, Cv=2 * SEEN, Ca=3 * SEEN, Du=through,
                      damping=Damping(base=LossFactor(eta=0.05)))  # fmt: skip
    reference = np.array([
        model.output_at(w) @ np.linalg.solve(impedance(model, w), LOAD.astype(complex)) + through for w in OMEGA
    ])  # fmt: skip
    assert_close(full_response(model, OMEGA, solver=solver).G, reference)


@solvers
def test_thermal_models_over_six_decades(solver):
    """``(K + j w E)^-1`` from slow to fast, a few shifts at most."""
    model = Thermal(K=chain(), E=sp.csr_array(sp.diags_array(np.linspace(1, 3, N))), F=LOAD, C=SEEN)
    omega = np.logspace(-5, 1, 40)
    full = full_response(model, omega, solver=solver)
    K, E = model.K.toarray(), model.E.toarray()
    assert_close(full.G, np.array([SEEN @ np.linalg.solve(K + 1j * w * E, LOAD) for w in omega]))
    assert full.worst_backward_error < 1e-12
    assert full.factorisations <= 4


@solvers
@pytest.mark.parametrize("dense", [False, True])
def test_non_symmetric_state_space_dense_and_sparse(solver, dense):
    """``(j w E - A)^-1 B`` with flow (upwind differences) and a mass matrix."""
    A = sp.csr_array(-chain() - 0.3 * sp.diags_array([np.ones(N), -np.ones(N - 1)], offsets=[0, -1]))
    E = sp.csr_array(sp.diags_array(np.linspace(1, 3, N)))
    if dense:
        A, E = A.toarray() + 0.001 * RNG.standard_normal((N, N)), E.toarray()
    omega = np.logspace(-4, 0, 30)
    full = full_response(StateSpace(A=A, E=E, B=LOAD, C=SEEN), omega, solver=solver)
    A, E = (X if dense else X.toarray() for X in (A, E))
    assert_close(full.G, np.array([SEEN @ np.linalg.solve(1j * w * E - A, LOAD) for w in omega]))
    assert full.worst_backward_error < 1e-12
    assert full.factorisations <= 4


def test_a_lightly_damped_state_space_with_complex_poles():
    """Oscillators inside the band: poles near the axis are met without losing accuracy."""
    n = 150
    wn = np.linspace(1, 20, n)
    A = np.block([[np.zeros((n, n)), np.eye(n)], [-np.diag(wn**2), -np.diag(0.02 * wn)]])
    B, C = RNG.standard_normal((2 * n, 1)), RNG.standard_normal((1, 2 * n))
    omega = np.linspace(0.5, 25, 60)
    full = full_response(StateSpace(A=A, B=B, C=C), omega)
    assert_close(full.G, np.array([C @ np.linalg.solve(1j * w * np.eye(2 * n) - A, B) for w in omega]))
    assert full.worst_backward_error < 1e-12


def test_small_models_are_solved_one_by_one():
    """A two-mass chain: the formula of its transfer function (textbook), each frequency by its own factorisation."""
    k, m, c = 4.0, 2.0, 0.1
    model = Structure(K=k * chain(2), M=m * np.eye(2), F=np.array([[1.0], [0.0]]), Cq=np.array([[0.0, 1.0]]),
                      damping=Damping(base=Rayleigh(alpha=0.0, beta=c / k)))  # fmt: skip
    omega = np.array([0.0, 0.5, 1.5])
    s = 1j * omega
    z = 2 * (k + c * s) + m * s**2
    full = full_response(model, omega)
    np.testing.assert_allclose(full.G[:, 0, 0], (k + c * s) / (z**2 - (k + c * s) ** 2), rtol=1e-13)
    assert set(full.method) == {"direct"}
    assert full.factorisations == 3


@pytest.mark.parametrize("n", [2, N])
def test_a_free_body_at_rest_is_singular_and_everything_else_is_answered(n):
    """Zero frequency of a free body: nan and named; the other frequencies are not touched."""
    model = Structure(K=chain(n, free=True), M=np.eye(n), F=np.eye(n)[:, :1], Cq=np.eye(n)[-1:],
                      damping=Damping(base=LossFactor(eta=0.02)))  # fmt: skip
    full = full_response(model, np.array([0.0, 0.01, 0.02]))
    assert full.method[0] == "singular"
    assert np.isnan(full.G[0]).all()
    assert np.isfinite(full.G[1:]).all()


def test_an_undamped_mode_on_a_frequency_is_singular():
    """Exactly at the natural frequency of one undamped mass there is no answer."""
    model = Structure(K=np.eye(1) * 4, M=np.eye(1), F=np.eye(1), Cq=np.eye(1))
    full = full_response(model, np.array([1.0, 2.0]))
    assert full.method == ("direct", "singular")


def test_zero_frequency_of_a_supported_body_is_the_static_answer():
    """Statics through the same call."""
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN)
    full = full_response(model, np.array([0.0, 0.01, 0.02]))
    np.testing.assert_allclose(full.G[0], SEEN @ np.linalg.solve(chain().toarray(), LOAD), rtol=1e-8)


def test_known_modes_save_solves():
    """The modes that are at hand are taken into the space: fewer solves, the same answer."""
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, damping=Damping(base=LossFactor(eta=0.01)))
    pairs = lowest_pairs(model.K, model.M, count=30, solver="superlu")
    alone = full_response(model, OMEGA, solver="superlu")
    helped = full_response(model, OMEGA, pairs=pairs, solver="superlu")
    assert helped.solves < alone.solves / 1.5
    assert_close(helped.G, alone.G)


def test_wrong_known_modes_do_no_harm():
    """Vectors that are no modes, passed off as good ones: the residual check sends those frequencies elsewhere."""
    from dataclasses import replace

    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, damping=Damping(base=LossFactor(eta=0.01)))
    pairs = lowest_pairs(model.K, model.M, count=10, solver="superlu")
    wrong = replace(pairs, x=pairs.x * 1.01)
    full = full_response(model, OMEGA, pairs=wrong, solver="superlu")
    assert full.worst_backward_error < 1e-12
    assert_close(full.G, full_response(model, OMEGA, solver="superlu").G)


def test_what_no_space_answers_is_solved_directly(monkeypatch):
    """With hardly any columns allowed, every frequency falls back to its own factorisation and says so."""
    monkeypatch.setattr("modesieve.reduce.response.full.COLUMNS", 6)
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, damping=Damping(base=LossFactor(eta=0.01)))
    full = full_response(model, OMEGA, solver="superlu")
    assert "direct" in full.method
    assert full.worst_backward_error < 1e-12
    reference = np.array([SEEN @ np.linalg.solve(impedance(model, w), LOAD.astype(complex)) for w in OMEGA])
    assert_close(full.G, reference)


def test_many_modes_in_the_band_take_more_shifts():
    """Most of a chain's 400 modes inside the band: still solved, by spaces or one by one, to the same tolerance."""
    model = Structure(K=chain(), M=ONE, F=LOAD[:, :1], Cq=SEEN, damping=Damping(base=LossFactor(eta=0.005)))
    omega = np.linspace(0.1, 1.8, 40)
    full = full_response(model, omega, solver="superlu")
    reference = np.array([SEEN @ np.linalg.solve(impedance(model, w), LOAD[:, :1].astype(complex)) for w in omega])
    assert_close(full.G, reference)
    assert full.worst_backward_error < 1e-12


def test_the_backward_error_reported_is_the_true_one():
    """Recomputed from a dense Z with its exact 2-norm, the figure is never above what was reported (times 1.01)."""
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=np.eye(N), damping=DAMPINGS["dashpots on Rayleigh"])
    full = full_response(model, OMEGA)
    for w, X, reported in zip(OMEGA, full.G, full.backward_error, strict=True):  # Cq = I: G is the solution itself
        Z = impedance(model, w)
        r, x, f = (np.linalg.norm(A, axis=0) for A in (LOAD - Z @ X, X, LOAD))
        assert np.max(r / (np.linalg.norm(Z, 2) * x + f)) <= 1.01 * reported + 1e-16


def test_the_norm_bound_never_exceeds_the_norm():
    """The size used in backward errors is a lower bound of norm(Z) for every kind of model."""
    for name, damping in DAMPINGS.items():
        model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, damping=damping)
        dynamic = dynamic_of(model)
        for w in (0.01, 1.3, 7.0):
            exact = np.linalg.norm(impedance(model, w), 2)
            assert 0.05 * exact < dynamic.norm(w) <= exact * (1 + 1e-12), name


def test_a_mistaken_solution_is_seen(monkeypatch):
    """A solve that is wrong in one digit in a thousand is refined or reported, never passed on as exact."""
    honest = direct.factorise

    def sloppy(A, **settings):
        factor = honest(A, **settings)
        solve = factor.solve
        factor.solve = lambda B: solve(B) * 1.001
        return factor

    monkeypatch.setattr(direct, "factorise", sloppy)
    model = Structure(
        K=chain(50), M=np.eye(50), F=LOAD[:50], Cq=SEEN[:, :50], damping=Damping(base=LossFactor(eta=0.1))
    )
    full = full_response(model, OMEGA, solver="superlu")
    reference = np.array(
        [SEEN[:, :50] @ np.linalg.solve(impedance(model, w), LOAD[:50].astype(complex)) for w in OMEGA]
    )
    error = np.abs(full.G - reference).max(axis=(1, 2)) / np.abs(reference).max(axis=(1, 2))
    assert np.all((error < 1e-8) | (full.backward_error > 1e-12))


def test_a_model_without_outputs_has_an_empty_response():
    """No outputs: the right shape, nothing in it."""
    model = Structure(K=chain(), M=ONE, F=LOAD)
    full = full_response(model, OMEGA)
    assert full.G.shape == (len(OMEGA), 0, 2)


def test_progress_reaches_the_end():
    """The listener hears of every frequency."""
    heard = []
    model = Structure(K=chain(), M=ONE, F=LOAD, Cq=SEEN, damping=Damping(base=LossFactor(eta=0.01)))
    full_response(model, OMEGA, progress=heard.append)
    assert heard[-1].done == heard[-1].total == len(OMEGA)
    assert SMALL < N


def test_running_out_of_memory_is_not_swallowed(monkeypatch):
    """A refusal for want of memory is the user's to know, not a singular frequency."""

    def refuse(A, **settings):
        raise SolveError("the factorisation would not fit into memory")

    monkeypatch.setattr(direct, "factorise", refuse)
    with pytest.raises(SolveError, match="memory"):
        full_response(Structure(K=chain(20), M=np.eye(20), F=LOAD[:20], Cq=SEEN[:, :20]), OMEGA)
