"""Bounds from static energies alone, against models whose every mode is known."""

import numpy as np
import pytest
from brute_force import off_grid, random_case

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.bound_sweep import bound_sweep
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.quick import computed_gap, output_energies, quick_error, rest_bound, static_factor
from modesieve.reduce.truncation.tails import with_static_remainder, with_tail_levels


def subset(case, rng):
    always = {i + 1 for i, reason in enumerate(case.modes.always_kept) if reason}
    some = rng.choice(len(case.modes), len(case.modes) // 2, replace=False)
    return tuple(sorted(always | {int(i) + 1 for i in some}))


def elastic(case, system, kept, w):
    """Response of a small model without its rigid-body terms, which the exact one leaves out too."""
    loose = np.flatnonzero(case.truth.x[np.array(kept, dtype=int) - 1] == 0)
    return system.select(np.setdiff1d(np.arange(system.terms), loose)).response(w)


@pytest.mark.parametrize("static", [False, True])
def test_quick_forms_hold(static):
    """Kept subsets, every damping, with and without the static remainder, beside and above the counting point."""
    tried = 0
    for seed in range(120):
        case, rng = random_case(seed), np.random.default_rng(seed)
        hub = build_hub(case.modes, 1, shifted=case.shifted)
        if static and (np.any(hub.terms.cv) or np.any(hub.terms.ca)):
            continue
        tried += 1
        kept, w = subset(case, rng), off_grid(rng, case)
        system = with_static_remainder(hub, kept) if static else with_tail_levels(hub, kept, 0).system
        gap = case.response(w, elastic=True) - elastic(case, system, kept, w)
        total, entry = quick_error(hub, kept, w, static=static)
        assert not np.any(np.abs(gap) > entry)
        assert not np.any(largest_singular_value(gap) > total)
    assert tried > 30


def test_any_small_model_has_a_quick_bound():
    """Computed modes less the small model, plus the energies of the rest: also for tail levels."""
    for seed in range(40):
        case, rng = random_case(seed), np.random.default_rng(seed)
        hub = build_hub(case.modes, 2, shifted=case.shifted)
        if np.any(case.truth.x == 0):
            continue
        kept, w = subset(case, rng), off_grid(rng, case)
        small = with_tail_levels(hub, kept, 1).system
        total, _ = computed_gap(hub, small, w)
        assert not np.any(largest_singular_value(case.response(w) - small.response(w)) > total)


def test_energies_are_those_of_the_uncomputed_modes():
    """W_C(w) and W_B are the sums over all uncomputed modes, at any frequency."""
    case = random_case(3, "structure", "ratio")
    hub = build_hub(case.modes, 1, shifted=case.shifted)
    k, w, sigma = len(case.modes), 0.7 * case.omega_c, case.shifted.sigma
    zero = np.zeros((case.model.p, case.model.n))
    q, v, a = (zero if C is None else C for C in (case.model.Cq, case.model.Cv, case.model.Ca))
    c = (q + 1j * w * v - w**2 * a) @ case.truth.phi[:, k:]
    b = case.truth.phi[:, k:].T @ case.model.F
    x = case.truth.x[k:] - sigma
    assert np.allclose(hub.load_energy, (b.T / x) @ b, rtol=1e-8, atol=1e-12 * np.abs(hub.load_energy).max())
    found = output_energies(hub, np.array([w]))[0]
    assert np.allclose(found, (c / x) @ c.conj().T, rtol=1e-8, atol=1e-10 * np.abs(found).max())


def test_closed_forms_of_the_factors():
    """sigma = 0: thermal remainder w/sqrt(w^2 + lambda_c^2), undamped remainder r^2/(1 - r^2), thermal none 1."""
    case = random_case(8, "thermal")
    hub = build_hub(case.modes, 1, shifted=type(case.shifted)(case.shifted.K, case.shifted.M, 0.0))
    w = np.array([0.1, 0.7, 3.0]) * case.omega_c
    assert static_factor(hub, w) == pytest.approx(w / np.hypot(w, hub.x_c), rel=1e-12)
    assert hub.rest.supremum(w, hub.x_c, 0.0) == pytest.approx(np.ones(3), rel=1e-12)
    case = random_case(2, "structure", "none")
    hub = build_hub(case.modes, 1, shifted=type(case.shifted)(case.shifted.K, case.shifted.M, 0.0))
    r = np.array([0.2, 0.6, 0.95])
    assert static_factor(hub, r * case.omega_c) == pytest.approx(r**2 / (1 - r**2), rel=1e-10)


def test_collocated_is_tight_and_distant_is_not():
    """Thermal, no statics, one collocated port: the bound is met at 0."""
    for seed in (0, 3, 9):
        case = random_case(seed, "thermal")
        hub = build_hub(case.modes, 1, shifted=case.shifted)
        load, rows = np.diag(hub.load_energy), np.diag(hub.output_energy)[: case.model.p]
        assert np.all(rest_bound(hub, np.array([1e-9]))[1][0] <= 1.0001 * np.sqrt(np.outer(rows, load)) * 2)


def test_static_remainder_of_rates_is_refused():
    """Velocity and acceleration outputs have no static remainder."""
    seed = next(s for s in range(60) if random_case(s, "structure").model.Cv is not None)
    case = random_case(seed, "structure")
    hub = build_hub(case.modes, 1, shifted=case.shifted)
    with pytest.raises(ChoiceError, match="static remainder"):
        quick_error(hub, (1,), np.array([0.1]), static=True)


def test_sweep_of_guaranteed_errors():
    """Every count and statics: the guaranteed error covers the exact one, levels help, the floor is whole-axis."""
    case = random_case(0, "thermal")
    hub = build_hub(case.modes, 2, shifted=case.shifted)
    band = (1e-3 * case.omega_c, 0.6 * case.omega_c)
    order = np.arange(1, len(case.modes) + 1)
    sweep = bound_sweep(hub, order, band, of="peak")
    assert set(sweep.errors) == {"none", "feedthrough", "vectors 1", "vectors 2"}
    w = np.geomspace(*band, 300)
    G = case.response(w)
    size = largest_singular_value(G).max()
    for i, count in enumerate(sweep.kept):
        small = with_tail_levels(hub, tuple(range(1, int(count) + 1)), 0).system
        exact = largest_singular_value(G - small.response(w)).max() / size
        assert exact <= sweep.errors["none"][i] * (1 + 1e-3)
    assert sweep.errors["vectors 1"][-1] < sweep.errors["none"][-1]
    assert len(sweep.floor.floor) == hub.system.states + 1
    with pytest.raises(ChoiceError, match="peak or local"):
        bound_sweep(hub, order, band, of="absolute")
