"""The modal stage on real input, on odd models, and with its certificate withdrawn."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve.examples import chain, grid_plate, random_state_space, straight_beam, tube
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.errors import ChoiceError, ModelError, ModesieveError
from modesieve.reduce.inspection import inspect_model
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.model import (
    Damping,
    LossFactor,
    ModalRatio,
    RatioByMode,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
)
from modesieve.reduce.response.full import full_response
from modesieve.reduce.truncation.records import Count, Tolerance
from modesieve.reduce.truncation.truncate import truncate


@pytest.mark.parametrize("name", ["01", "05", "08", "26"])
@pytest.mark.parametrize("solver", ["auto", "superlu"])
def test_real_structures(matrix_market_pair: Any, reference_eigenvalues: Any, name: str, solver: Any) -> None:
    """The twenty lowest eigenvalues of Harwell-Boeing pairs within 1e-8, none missing, each with its true residual."""
    K, M = matrix_market_pair(name)
    reference = np.array(reference_eigenvalues[f"bcsstk{name}"]["lowest_eigenvalues_K_M"])
    modes = find_modes(Structure(K=K, M=M), count=20, solver=solver)
    np.testing.assert_allclose(modes.omega[:20] ** 2, reference, rtol=1e-8)
    assert modes.certificate.complete in ("all", "counted")
    assert modes.residual[:20].max() < 1e-7


@pytest.mark.parametrize("name", ["01", "05", "08", "26"])
def test_real_structures_are_truncated_and_compared(matrix_market_pair: Any, name: str) -> None:
    """The whole job on each pair: the small model's error is measured against a full solution of 1e-12."""
    K, M = matrix_market_pair(name)
    n = K.shape[0]
    F, C = np.zeros((n, 1)), np.zeros((1, n))
    F[n // 3], C[0, n // 3] = 1.0, 1.0
    model = Structure(K=K, M=M, F=F, Cq=C, damping=Damping(base=ModalRatio(ratio=0.01)))
    modes = find_modes(model, count=20)
    band = (0.2 * modes.omega[0], modes.omega[9])
    small = truncate(rank(modes, band=band), Count(modes=12), band=band)
    check = compare(model, [small], modes=modes, band=band, times=False)
    assert check.full.worst_backward_error <= 1e-12
    assert check.checks[0].certainty == "measured"
    assert np.isfinite(check.checks[0].peak_error.value)


def test_a_buckling_pencil_is_refused(matrix_market_pair: Any) -> None:
    """bcsstk10's "mass" is indefinite: refused, and the message says so."""
    K, M = matrix_market_pair("10")
    with pytest.raises(ModelError, match="indefinite"):
        find_modes(Structure(K=K, M=M), count=10)


def test_deleting_one_mode_withdraws_the_certificate(monkeypatch: pytest.MonkeyPatch) -> None:
    """A solver that loses a mode is caught by the count: no certificate, and the reason names both numbers."""
    import modesieve.reduce.modal.certified as stage

    honest = stage.certified_pairs

    def forgetful(*args: Any, **kwargs: Any) -> Any:
        from dataclasses import replace

        pairs, count = honest(*args, **kwargs)
        keep = np.arange(len(pairs.x)) != 3
        fewer = replace(pairs, x=pairs.x[keep], vectors=pairs.vectors[:, keep], residuals=pairs.residuals[keep])
        return fewer, count

    monkeypatch.setattr(stage, "certified_pairs", forgetful)
    modes = find_modes(chain(1200), count=12)
    assert modes.certificate.complete == "no"
    assert modes.certificate.reason


@pytest.mark.parametrize(
    ("damping", "zeta"),
    [
        (Damping(base=ModalRatio(ratio=0.02)), lambda w: np.full_like(w, 0.02)),
        (Damping(base=Rayleigh(alpha=0.1, beta=0.02)), lambda w: 0.05 / w + 0.01 * w),
        (Damping(base=LossFactor(eta=0.04)), lambda w: np.full_like(w, 0.02)),
        (Damping(base=RatioByMode(ratio=np.array([0.01, 0.03]))), lambda w: np.array([0.01] + [0.03] * (len(w) - 1))),
        (Damping(), lambda w: np.zeros_like(w)),
    ],
)
def test_every_base_damping_reaches_the_eigenvalues(damping: Damping, zeta: Any) -> None:
    """The damping ratio of every mode follows its rule."""
    modes = find_modes(chain(12, damping=damping))
    np.testing.assert_allclose(modes.damping_ratio, zeta(modes.omega), atol=1e-12)


def test_local_damping_gives_complex_modes_that_reproduce_the_response() -> None:
    """A dashpot at one mass, viscous: all complex modes together are the full response."""
    n = 20
    D = sp.csr_array(([0.3], ([5], [5])), shape=(n, n))
    model = chain(n, damping=Damping(base=Rayleigh(alpha=0.01, beta=0.0), viscous=D))
    modes = find_modes(model)
    omega = np.linspace(0.01, 2.2, 40)
    full = full_response(model, omega)
    np.testing.assert_allclose(modes.system.response(omega), full.G, atol=1e-9 * np.abs(full.G).max())
    assert modes.residual.max() < 1e-9


def test_full_set_of_modes_is_the_full_model() -> None:
    """All modes of a thermal plate and of a random state space give the directly solved response."""
    for model in (grid_plate(7, 6, sources=[(1, 1)], sensors=[(4, 4)], film=0.3), random_state_space(5, repeats=3)):
        modes = find_modes(model)
        omega = np.array([0.01, 0.3, 2.0, 11.0])
        full = full_response(model, omega, modes=modes)
        np.testing.assert_allclose(modes.system.response(omega), full.G, atol=1e-9 * np.abs(full.G).max())


def test_a_lightly_damped_beam_keeps_every_mode_that_couples() -> None:
    """1 % damping at "2 % of local": no in-band mode that couples is dropped."""
    model = straight_beam(30, 3.0, tube(0.1, 0.005), damping=Damping(base=ModalRatio(ratio=0.01)))
    band = (0.0, 2 * np.pi * 400)
    modes = find_modes(model, band)
    small = truncate(rank(modes, band=band), Tolerance(value=0.02), band=band)
    inside = {int(n) for n in modes.numbers if modes.omega[n - 1] <= band[1]}
    assert inside <= set(small.kept)


def test_a_free_body_has_finite_errors_and_a_reason_at_rest() -> None:
    """A free-free run over 0 to 300 Hz: rigid-body modes kept and named, finite errors, DC null with its reason."""
    model = straight_beam(20, 2.0, tube(0.1, 0.005), supports="free-free", damping=Damping(base=ModalRatio(ratio=0.01)))
    band = (0.0, 2 * np.pi * 300)
    modes = find_modes(model, band)
    assert modes.always_kept[:2] == ("rigid body", "rigid body")
    small = truncate(rank(modes, band=band), Count(modes=6), band=band)
    assert {1, 2} <= set(small.kept)
    check = compare(model, [small], modes=modes, band=band).checks[0]
    assert np.isfinite(check.peak_error.value)
    assert check.dc_error is None
    assert check.dc_reason


def test_repeated_modes_couple_in_as_few_vectors_as_possible() -> None:
    """On a square plate one source reaches one member of each pair; the other couples by rounding only."""
    modes = find_modes(grid_plate(6, 6, sources=[(1, 2)], sensors=[(1, 2)]))
    pairs = [c for i, c in enumerate(modes.cluster) if len(c) == 2 and c[0] == i + 1]
    assert pairs
    for first, second in pairs:
        weak, strong = sorted(abs(modes.system.B[n - 1, 0]) for n in (first, second))  # type: ignore[union-attr]
        assert weak < 1e-14
        assert strong > 1e-3


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_reordering_and_scaling_unknowns_changes_nothing(seed: int) -> None:
    """A permutation and a change of length unit leave eigenvalues and response as they are."""
    rng = np.random.default_rng(seed)
    model = chain(15, damping=Damping(base=ModalRatio(ratio=0.02)))
    order, scale = rng.permutation(15), 1e3
    P = sp.eye_array(15, format="csr")[order]
    K, M = P @ model.K @ P.T * scale**2, P @ model.M @ P.T * scale**2
    assert model.Cq is not None
    other = Structure(K=K, M=M, F=P @ model.F * scale, Cq=model.Cq @ P.T.toarray() * scale, damping=model.damping)
    a, b = find_modes(model), find_modes(other)
    np.testing.assert_allclose(a.omega, b.omega, rtol=1e-12)
    omega = np.linspace(0.05, 1.9, 30)
    np.testing.assert_allclose(a.system.response(omega), b.system.response(omega), rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize(
    ("make", "match"),
    [
        (lambda: Structure(K=np.array([[2.0, -1], [-0.5, 2]]), M=np.eye(2)), "symmetric"),
        (lambda: Structure(K=np.eye(2), M=np.diag([1.0, -1.0])), "indefinite"),
        (lambda: Thermal(K=-np.eye(3), E=np.eye(3)), "conductance"),
        (lambda: Structure(K=np.diag([1.0, 0.0]), M=np.diag([1.0, 0.0])), "."),
        (lambda: StateSpace(A=np.diag([1.0, 0.0]), E=np.diag([1.0, 0.0])), "."),
    ],
)
def test_models_without_modes_are_refused(make: Any, match: str) -> None:
    """Non-symmetric, indefinite, wrong sign, singular pencils: a stated refusal."""
    with pytest.raises(ModesieveError, match=match):
        find_modes(make())


def test_impossible_requests_are_refused() -> None:
    """More modes than exist, a band upside down."""
    with pytest.raises(ChoiceError):
        find_modes(chain(5), count=6)
    with pytest.raises(ChoiceError):
        find_modes(chain(5), (2.0, 1.0))


def test_ranking_orders_and_refuses_unknown_measures() -> None:
    """Every measure orders all modes; a misspelt one is refused with the close name."""
    modes = find_modes(chain(12, damping=Damping(base=ModalRatio(ratio=0.02))))
    for name in rank(modes).measures:
        table = rank(modes, by=name, band=(0.1, 1.0))
        assert sorted(table.order) == list(range(1, 13))
    with pytest.raises(ChoiceError, match="band-share"):
        rank(modes, by="bandshare")


def test_facts_of_a_model() -> None:
    """Inspection reports sizes, parts, total mass and what would be done next."""
    facts = inspect_model(chain(6))
    assert (facts.n, facts.inputs, facts.outputs) == (6, 1, 1)
    assert facts.total_mass is not None
    assert facts.total_mass[0] == pytest.approx(6.0)
    assert facts.next_steps
    apart = Structure(K=sp.block_diag([chain(3).K, chain(2).K]), M=sp.eye_array(5))
    assert sorted(inspect_model(apart).parts) == [2, 3]


def test_imaginary_stiffness_with_an_acceleration_output_is_not_refused() -> None:
    """A damped spring and an accelerometer: complex modes exist, and follow the full model to the order of eta."""
    n, eta = 12, 0.01
    loss = sp.csr_array(([eta], ([4], [4])), shape=(n, n))
    base = chain(n)
    damping = Damping(base=Rayleigh(alpha=0.02, beta=0.01), stiffness_loss=loss)
    model = Structure(K=base.K, M=base.M, F=base.F, Ca=base.Cq, damping=damping)
    omega = np.linspace(0.05, 1.9, 60)
    G = full_response(model, omega).G
    gap = np.abs(find_modes(model).system.response(omega) - G).max()
    assert gap < 2 * eta * np.abs(G).max()
