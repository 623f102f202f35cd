"""The hub's own bound, against models whose every mode is known."""

from dataclasses import replace

import numpy as np
import pytest
from brute_force import FORMS, DenseShift, modes_record, off_grid, random_case, wide_hub, without_mode

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import Damping, StateSpace, Structure
from modesieve.reduce.response.norms import largest_singular_value as largest
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.rest import Rest, rest_of
from modesieve.reduce.truncation.tails import with_tail_levels


def worst_excess(case, levels, small=None):
    """Largest true error over bound, per entry and for the largest singular value."""
    hub = build_hub(case.modes, levels, shifted=case.shifted)
    rng = np.random.default_rng(1)
    beside = np.sqrt(hub.tail_x) if hub.rest.order == 2 else hub.tail_x
    w = np.sort(np.concatenate([off_grid(rng, case), 0.9999 * beside, 1.0001 * beside]))
    G, H = case.response(w), hub.response(w)
    total, entry = hub.bound(w)
    with np.errstate(invalid="ignore"):
        R = H if small is None else small(hub).system.response(w)
        gap = np.abs(np.abs(G - R) - np.abs(H - R)), np.abs(largest(G - R) - largest(H - R))
        return max(np.nanmax(gap[0] / entry), np.nanmax(gap[1] / total))


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("levels", [0, 2])
def test_bound_of_structures_holds_for_every_damping(form, levels):
    """The hub's bound covers its true error below, at and above the counting point, between and beside poles."""
    for seed in range(20):
        assert worst_excess(random_case(seed, "structure", form), levels) <= 1


@pytest.mark.parametrize("levels", [0, 1, 3])
def test_bound_of_thermal_models_holds(levels):
    """The same for diffusion models, floating ones and massless unknowns included."""
    for seed in range(25):
        assert worst_excess(random_case(seed, "thermal"), levels) <= 1


@pytest.mark.parametrize("levels", [0, 1, 2])
def test_two_sided_error_of_any_small_model(levels):
    """norm(G - R) is norm(H - R) up to the hub's bound, whatever R keeps."""
    for seed in range(20):
        case = random_case(300 + seed)
        always = [i + 1 for i, reason in enumerate(case.modes.always_kept) if reason]
        kept = tuple(sorted({*always, *range(2, len(case.modes), 3)}))
        assert worst_excess(case, 3, lambda hub, kept=kept: with_tail_levels(hub, kept, levels)) <= 1


def test_supremum_is_not_the_value_at_the_counting_point():
    """For thermal and heavily damped models the worst uncomputed mode is not the first one."""
    cases = (Rest(order=1), Rest(alpha=3.0, beta=2.0), Rest(eta=0.3), Rest())
    x_c, sigma, omega = 2.0, -0.5, np.array([0.3, 1.0, 1.3, 5.0])
    x = x_c + np.concatenate([[0.0], np.geomspace(1e-6, 1e8, 200_000)])
    worse = 0
    for rest in cases:
        a, b = rest.coefficients(omega)
        sampled = (x - sigma) / np.abs(a[:, None] * x + b[:, None])
        bound = rest.supremum(omega, x_c, sigma)
        assert np.all(bound >= sampled.max(axis=1) * (1 - 1e-12))
        smooth = np.isfinite(bound)
        assert np.all(bound[smooth] <= sampled.max(axis=1)[smooth] * (1 + 1e-4))
        worse += int(np.sum(sampled.max(axis=1) > 1.5 * sampled[:, 0]))
    assert worse >= 3


def test_undamped_rest_has_no_bound_above_the_counting_point():
    """Above omega_c an undamped uncomputed mode may sit anywhere: the bound is infinite, not undefined."""
    bound = Rest().supremum(np.array([0.5, 1.5, 7.0]), 1.0, 0.0)
    assert np.isfinite(bound[0])
    assert np.all(np.isinf(bound[1:]))


def test_a_missing_mode_is_not_covered():
    """Discriminating case: a bound that believes a list with one mode missing is violated."""
    violated = tried = 0
    for seed in range(16):
        case = random_case(seed, "structure", "rayleigh")
        k = len(case.modes)
        if k < 3:
            continue
        robbed = without_mode(case.modes, k - 2)
        hub = build_hub(robbed, 0, shifted=case.shifted)
        w = np.linspace(0.02, 0.98, 200) * case.omega_c
        tried += 1
        violated += bool(np.any(np.abs(case.response(w) - hub.response(w)) > hub.entry_error(w)))
    assert violated >= 0.3 * tried


def test_the_shift_does_not_matter():
    """Elastic tails made with different shifts give the same hub, to rounding."""
    case = random_case(5, "structure", "ratio")
    K, M = case.shifted.K, case.shifted.M
    w = np.linspace(0.05, 0.9, 40) * case.omega_c
    first = None
    for share in (1e-4, 1e-2, 0.1):
        shifted = DenseShift(K, M, -share * case.omega_c**2)
        hub = build_hub(case.modes, 1, shifted=shifted)
        H = hub.response(w)
        first = H if first is None else first
        assert np.max(np.abs(H - first)) <= 1e-10 * np.max(np.abs(first))


def test_weights_scale_the_total_bound():
    """Amplitude and resolution enter the bound of the largest singular value, never the physical entries."""
    case = random_case(8, "structure", "rayleigh")
    hub = build_hub(case.modes, 2, shifted=case.shifted)
    w = np.array([0.3, 0.7]) * case.omega_c
    heavy = replace(hub, amplitudes=3 * hub.amplitudes, resolutions=hub.resolutions / 2)
    assert heavy.error(w) == pytest.approx(6 * hub.error(w))
    assert heavy.entry_error(w) == pytest.approx(hub.entry_error(w))


def test_all_modes_known_leaves_rounding_alone():
    """With a list of every mode the bound is the rounding limit."""
    case = random_case(21, "thermal")
    modes = modes_record(case.model, case.truth, len(case.truth.x), 2 * case.truth.x[-1])
    modes = replace(modes, certificate=replace(modes.certificate, complete="all", below_omega=None))
    hub = build_hub(modes)
    w = np.geomspace(1e-2, 1e2, 20) * case.omega_c
    assert np.all(hub.entry_error(w) == hub.rounding(w) + hub.defect(w))
    assert np.all(np.abs(case.response(w) - hub.response(w)) <= hub.entry_error(w))


def test_refusals_say_why():
    """No hub without a count, for coupled damping, or for a model that need not be normal."""
    case = random_case(0, "structure")
    no = replace(case.modes, certificate=replace(case.modes.certificate, complete="no", reason="count says 7, list 6"))
    with pytest.raises(ChoiceError, match="count says 7, list 6"):
        build_hub(no, shifted=case.shifted)
    with pytest.raises(ChoiceError, match="local damping"):
        rest_of(Structure(K=np.eye(2), M=np.eye(2), damping=Damping(viscous=np.eye(2))))
    with pytest.raises(ChoiceError, match="state space"):
        rest_of(StateSpace(A=-np.eye(2)))
    with pytest.raises(ChoiceError, match="full model"):
        build_hub(replace(case.modes, vectors=None), shifted=case.shifted)


def test_wide_hub_is_fast():
    """2,000 frequencies at order 200 with 10 x 10 channels stay within seconds (the benchmark times it)."""
    hub = wide_hub(modes=140, ports=10)
    w = np.linspace(0.0, 0.9, 200) * np.sqrt(hub.x_c)
    total, entry = hub.bound(w)
    assert total.shape == (200,)
    assert entry.shape == (200, 10, 10)
    assert np.all(np.isfinite(total))
