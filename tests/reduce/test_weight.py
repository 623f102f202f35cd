"""Uncertainty weights: coverage everywhere, stability, minimum phase, how much they cover too much."""

import numpy as np
import pytest
from brute_force import DenseShift, all_modes, chain, membrane, modes_record, random_case

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import Damping, Rayleigh, Structure
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.diagonal import diagonal
from modesieve.reduce.truncation.tails import with_tail_levels
from modesieve.reduce.truncation.weight import Scatter, error_curve, magnitude, scattered, uncertainty_weight


def damped(seed, zeta, modes=10):
    """A one-port chain or membrane with Rayleigh damping zeta at both ends of its computed modes."""
    rng = np.random.default_rng(seed)
    K, M = (chain if seed % 2 else membrane)(rng, 50, False)
    M, n = np.diag(np.diag(M)), len(K)
    F, C = np.zeros((n, 1)), np.zeros((1, n))
    F[rng.integers(n)], C[0, rng.integers(n)] = 1, 1
    truth = all_modes(K, M)
    x_c = (truth.x[modes - 1] + truth.x[modes]) / 2
    base = Rayleigh(alpha=zeta * np.sqrt(truth.x[0]), beta=zeta / np.sqrt(x_c))
    model = Structure(K=K, M=M, F=F, Cq=C, damping=Damping(base=base))
    return truth, model, build_hub(modes_record(model, truth, modes, x_c), 2, shifted=DenseShift(K, M, 0.0))


def exact(truth, model, w):
    base = model.damping.base
    law = truth.x + 1j * w[:, None] * (base.alpha + base.beta * truth.x) - w[:, None] ** 2
    return ((model.Cq @ truth.phi) / law) @ (truth.phi.T @ model.F[:, 0])


def test_weight_covers_the_true_error_everywhere():
    """The weight lies above the exact error on a grid of its own, far below and above the counting point."""
    for seed in range(3):
        truth, model, hub = damped(seed, 0.05)
        small = with_tail_levels(hub, tuple(range(1, 7)), 0).system
        weight = uncertainty_weight(hub, small, pair=(0, 0))
        assert weight.order <= 4
        assert np.all(weight.poles.real < 0)
        assert np.all(weight.zeros.real < 0)
        assert np.all(weight.magnitude >= weight.curve)
        w = np.geomspace(weight.omega[0], weight.certain_to, 20_001)
        error = np.abs(exact(truth, model, w) - small.response(w)[:, 0, 0])
        assert np.all(error <= magnitude(weight.zeros, weight.poles, weight.gain, w) * (1 + 1e-9))


def test_median_over_cover():
    """Well damped models: at most 2 dB over the guaranteed curve in the median of an even logarithmic grid."""
    for seed in (1, 3, 5):
        _, _, hub = damped(seed, 0.1)
        small = with_tail_levels(hub, tuple(range(1, 11)), 0).system
        assert uncertainty_weight(hub, small, pair=(0, 0)).median_db <= 2.0


def test_state_space_is_the_weight():
    """The realisation handed over has the weight's magnitude."""
    _, _, hub = damped(1, 0.05)
    small = with_tail_levels(hub, tuple(range(1, 7)), 0).system
    weight = uncertainty_weight(hub, small, order=2)
    assert weight.order <= 2
    w = np.geomspace(weight.omega[0], weight.omega[-1], 50)
    assert np.abs(weight.system.response(w))[:, 0, 0] == pytest.approx(
        magnitude(weight.zeros, weight.poles, weight.gain, w), rel=1e-6
    )


def test_thermal_weight():
    """Thermal errors are smooth: a low order follows them closely on the whole axis."""
    case = random_case(0, "thermal")
    hub = build_hub(case.modes, 2, shifted=case.shifted)
    weight = uncertainty_weight(hub, with_tail_levels(hub, (1, 2, 3), 0).system)
    w = np.geomspace(1e-2, 20, 2000) * case.omega_c
    error = largest_singular_value(case.response(w) - with_tail_levels(hub, (1, 2, 3), 0).system.response(w))
    assert np.all(error <= magnitude(weight.zeros, weight.poles, weight.gain, w))
    assert weight.median_db <= 2


def test_scatter_is_covered():
    """Random models within the stated scatter stay below the curve, and the curve rises where modes are kept."""
    _, _, hub = damped(1, 0.05)
    small = with_tail_levels(hub, tuple(range(1, 7)), 0).system
    scatter = Scatter(frequency=0.03, damping=0.2)
    w = np.geomspace(0.1, 5, 300) * np.sqrt(hub.x_c)
    bound = scattered(hub, small, w, scatter)
    nominal, d, rng = small.response(w)[:, 0, 0], diagonal(small), np.random.default_rng(3)
    for _ in range(60):
        share = 1 + scatter.frequency * rng.uniform(-1, 1, len(d.x))
        zeta = 1 + scatter.damping * rng.uniform(-1, 1, len(d.x))
        x, viscous = d.x * share**2, d.d * share * zeta
        law = x + 1j * w[:, None] * viscous - w[:, None] ** 2
        moved = (d.cq[0] / law) @ d.b[:, 0]
        assert np.all(np.abs(moved - nominal) <= bound * (1 + 1e-3))
    plain = error_curve(hub, small, w)
    assert np.all(error_curve(hub, small, w, scatter=scatter) >= plain)
    assert np.max(error_curve(hub, small, w, scatter=scatter) / plain) > 2


def test_undamped_rest_is_refused():
    """Modal damping says nothing above the counted modes: no weight on the whole axis, and the frequency named."""
    case = random_case(4, "structure", "ratio")
    hub = build_hub(case.modes, 2, shifted=case.shifted)
    with pytest.raises(ChoiceError, match="resonate undamped"):
        uncertainty_weight(hub, case.modes.system)


def test_acceleration_outputs_are_told_to_grow():
    """An accelerometer's guaranteed error grows like w^2: covered up to a stated frequency, and said so."""
    seed = next(s for s in range(60) if random_case(s, "structure", "rayleigh").model.Ca is not None)
    case = random_case(seed, "structure", "rayleigh")
    hub = build_hub(case.modes, 2, shifted=case.shifted)
    weight = uncertainty_weight(hub, with_tail_levels(hub, tuple(range(1, len(case.modes) + 1)), 0).system)
    assert any("square of the frequency" in note for note in weight.notes)
    assert weight.certain_to > 10 * case.omega_c


def test_orders_beyond_four_are_refused():
    """A weight that has as many states as the model helps nobody."""
    _, _, hub = damped(1, 0.05, modes=4)
    with pytest.raises(ChoiceError, match="1 to 4"):
        uncertainty_weight(hub, hub.system, order=7)
