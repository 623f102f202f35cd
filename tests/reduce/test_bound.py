"""The guarantee of a small model: over the whole band, between samples, against three references, spot-checked."""

from dataclasses import replace

import numpy as np
import pytest
from brute_force import exact_solver, random_case, without_mode

from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.certify import certify, grid_of
from modesieve.reduce.truncation.diagonal import diagonal
from modesieve.reduce.truncation.enclosure import enclose, entries
from modesieve.reduce.truncation.supremum import Gap, hub_suprema, residual_functions, spread, suprema
from modesieve.reduce.truncation.tails import with_tail_levels


def cut(seed, levels, kind=None, form=None, drop=3):
    """A random case, its hub, a kept set with every third mode dropped and the small model."""
    case = random_case(seed, kind, form)
    hub = build_hub(case.modes, 3, shifted=case.shifted)
    always = {i + 1 for i, reason in enumerate(case.modes.always_kept) if reason}
    kept = tuple(sorted(always | {i for i in range(1, len(case.modes) + 1) if i % drop}))
    return case, hub, kept, with_tail_levels(hub, kept, levels).system


def fine(edges, points=60):
    return (edges[:-1, None] + np.linspace(0, 1, points) * np.diff(edges)[:, None]).ravel()


DAMPED = ("rayleigh", "loss", "ratio", "table", "by mode")


@pytest.mark.parametrize("levels", [0, 1])
@pytest.mark.parametrize("form", [*DAMPED, None])
def test_nothing_exceeds_an_enclosure_inside_its_interval(form, levels):
    """Difference, residuals, factor and every entry stay below the interval bounds, coarse intervals included."""
    for seed in range(6):
        kind = "thermal" if form is None else "structure"
        case, hub, _, small = cut(seed, levels, kind, form)
        edges = np.linspace(0.01, 0.9, 12) * case.omega_c
        left, right = edges[:-1], edges[1:]
        gap, w = Gap(hub=hub, small=diagonal(small)), fine(edges)
        upper, middle = gap.relative(left, right, threshold=0.0)
        slack = 1e-13 * np.max(largest_singular_value(hub.response(w)))
        difference = np.swapaxes(gap._difference.at(w), 1, 2)
        total = (largest_singular_value(difference) + hub.error(w)).reshape(len(left), -1)
        assert np.all(total.max(axis=1) <= upper[:, 0] * (1 + 1e-6) + slack)
        assert np.all(middle <= upper * (1 + 1e-12))
        assert np.all(hub.error(w).reshape(len(left), -1).max(axis=1) <= hub_suprema(hub, left, right)[0] * (1 + 1e-9))
        factor = hub.rest.supremum(w, hub.x_c, hub.sigma).reshape(len(left), -1)
        assert np.all(factor.max(axis=1) <= spread(hub, left, right)[0] * (1 + 1e-12))
        whole = (np.abs(difference) + hub.entry_error(w)).reshape(len(left), 60, -1)
        assert np.all(whole.max(axis=1) <= gap.per_entry(left, right)[0] * (1 + 1e-6) + slack)


def test_residuals_as_functions_agree_with_the_hub():
    """The residual's rational form and the hub's own evaluation are the same numbers."""
    for seed, kind in ((1, "structure"), (8, "thermal"), (11, "structure")):
        case, hub, _, _ = cut(seed, 0, kind)
        w = np.linspace(0.1, 0.9, 7) * case.omega_c
        load, out = residual_functions(hub)
        ours, theirs = hub.residuals(w)
        assert np.allclose(
            load.at(w), ours * hub.amplitudes, rtol=1e-9, atol=1e-12 * np.abs(hub.load_rest).max(initial=1)
        )
        assert np.allclose(out.at(w), theirs / hub.resolutions, rtol=1e-9, atol=1e-12)


def test_a_sharp_peak_between_samples_is_found():
    """A dropped mode with a bandwidth far below the sample spacing is caught by branch and bound, to one per cent."""
    case, hub, _, _ = cut(5, 0, "structure", "ratio")
    light = replace(hub, system=replace(hub.system, d=hub.system.d * 1e-3))
    drop = len(case.modes) // 2
    kept = tuple(i for i in range(1, len(case.modes) + 1) if i != drop)
    gap = Gap(hub=light, small=diagonal(with_tail_levels(light, kept, 0).system))
    w_i, d_i = np.sqrt(light.terms.x[drop - 1]), light.terms.d[drop - 1]
    edges = np.linspace(0.9 * w_i, 1.07 * w_i, 7)
    found = suprema(lambda l, r: gap.relative(l, r, threshold=0.0), edges)[0]
    near = w_i + np.linspace(-20, 20, 4001) * d_i / 2
    true = largest_singular_value(np.swapaxes(gap._difference.at(near), 1, 2)).max()
    sampled = largest_singular_value(np.swapaxes(gap._difference.at(edges), 1, 2)).max()
    assert sampled < 0.1 * true
    assert true <= found.value
    assert found.reached >= 0.985 * found.value


@pytest.mark.parametrize("kind", ["structure", "thermal"])
def test_guaranteed_figures_cover_the_exact_error(kind):
    """Peak, local, absolute and pair figures are no smaller than the exact ones on a fine grid, and close to them."""
    close = []
    for seed in range(16):
        form = DAMPED[seed % 5] if kind == "structure" else None
        case, hub, kept, small = cut(seed, seed % 3, kind, form)
        band = (0.0, 0.8 * case.omega_c)
        promise = certify(case.modes, small, band, hub=hub, kept=kept, solve=exact_solver(case))
        assert promise.holds, promise.reason
        assert len(promise.spot_checks) >= 2
        assert all(check.passed for check in promise.spot_checks)
        w = fine(grid_of(hub, small, band)[1:], 5)
        G, R = case.response(w), small.response(w)
        error, size = largest_singular_value(G - R), largest_singular_value(G)
        if promise.peak is not None:
            assert error.max() / promise.peak_reference <= promise.peak.value * (1 + 1e-9) + 1e-13
        local = np.max(error / np.maximum(size, promise.threshold))
        assert local <= promise.local.value * (1 + 1e-9) + 1e-13
        absolute = np.abs(G - R).sum(axis=2).max(axis=0)
        ours = np.array([figure.value for figure in promise.absolute])
        assert np.all(absolute <= ours * (1 + 1e-9) + 1e-13 * size.max())
        assert promise.figure("absolute").value == ours.max()
        if local > 1e-6:
            close.append(promise.local.value / local)
    assert np.median(close) <= 1.03


def test_elastic_peak_is_the_reference_of_free_models():
    """Rigid-body motion grows without limit towards 0 Hz: the peak reference leaves it out and stays finite."""
    seeds = [s for s in range(60) if np.any(random_case(s, "structure", "ratio").truth.x == 0)][:3]
    for seed in seeds:
        case, hub, kept, small = cut(seed, 1, "structure", "ratio")
        promise = certify(case.modes, small, (0.0, 0.7 * case.omega_c), hub=hub, kept=kept, spots=0)
        assert promise.holds
        assert np.isfinite(promise.peak.value)
        assert np.isfinite(promise.local.value)


def test_a_wrong_coupling_is_found_by_the_spot_checks():
    """One coupling off by 1 % in the list that hub and small model share: the promise is withdrawn, the place named."""
    found = tried = 0
    for seed in range(12):
        case = random_case(seed, "structure", "rayleigh")
        system = case.modes.system
        loud = int(np.argmax(np.abs(system.b).max(axis=1) * np.abs(system.cq + system.cv + system.ca).max(axis=0)))
        b = system.b.copy()
        b[loud] *= 1.01
        modes = replace(case.modes, system=replace(system, b=b))
        hub = build_hub(modes, 3, shifted=case.shifted)
        always = tuple(range(1, len(modes) + 1))
        small = with_tail_levels(hub, always, 2).system
        promise = certify(modes, small, (0.0, 0.8 * case.omega_c), hub=hub, kept=always, solve=exact_solver(case))
        tried += 1
        found += not promise.holds
        if not promise.holds:
            assert "Hz" in promise.reason
            assert promise.peak is None
            assert promise.local is None
    assert found == tried


def test_one_mode_deleted_withdraws_the_guarantee():
    """A list that lost a mode after it was counted is not the list that was counted."""
    case = random_case(4, "structure", "rayleigh")
    modes = without_mode(case.modes, 1)
    small = modes.system
    promise = certify(modes, small, (0.0, 0.5 * case.omega_c), spots=0)
    assert not promise.holds
    assert "not the one that was counted" in promise.reason


def test_samples_at_hand_are_checked_too():
    """A full response handed in is held against the promise; a wrong one breaks it."""
    case, hub, kept, small = cut(7, 1, "thermal")
    band = (0.0, 0.5 * case.omega_c)
    full = exact_solver(case)(np.geomspace(1e-3, 0.5, 9) * case.omega_c)
    assert certify(case.modes, small, band, hub=hub, kept=kept, full=full, spots=0).holds
    wrong = replace(full, G=full.G * 1.05)
    assert not certify(case.modes, small, band, hub=hub, kept=kept, full=wrong, spots=0).holds


def test_undamped_modes_in_the_band_are_refused_with_the_reason():
    """An undamped mode inside the band has an infinite response: no relative or absolute figure, and the mode named."""
    case, hub, kept, small = cut(2, 1, "structure", "none")
    promise = certify(case.modes, small, (0.0, 0.9 * case.omega_c), hub=hub, kept=kept, spots=0)
    assert not promise.holds
    assert "undamped" in promise.reason
    assert len(promise.omega) > 100  # the pointwise curve stays


def test_band_past_the_counting_point():
    """Modal damping says nothing above the counted modes: a band that reaches there is refused."""
    case, hub, kept, small = cut(4, 1, "structure", "ratio")
    promise = certify(case.modes, small, (0.0, 1.2 * case.omega_c), hub=hub, kept=kept, spots=0)
    assert not promise.holds
    assert "past the counting point" in promise.reason


def test_error_curve_is_two_sided():
    """The stored curve brackets the exact error at every one of its frequencies."""
    case, hub, kept, small = cut(12, 1)
    promise = certify(case.modes, small, (0.0, 0.8 * case.omega_c), hub=hub, kept=kept, spots=0)
    w = promise.omega[1:]
    error = largest_singular_value(case.response(w) - small.response(w))
    with np.errstate(invalid="ignore"):
        assert not np.any(error > promise.upper[1:])
        assert not np.any(error < promise.lower[1:])


def test_lower_enclosure():
    """The reference's lower bound is never above the response inside the interval."""
    case, hub, _, _ = cut(9, 0, "structure", "rayleigh")
    edges = np.linspace(0.05, 0.9, 40) * case.omega_c
    reference = Gap(hub=hub, small=hub.terms)._reference
    found = enclose(reference, edges[:-1], edges[1:])
    values = largest_singular_value(hub.response(fine(edges))).reshape(39, -1)
    assert np.all(found.lower <= values.min(axis=1) * (1 + 1e-9))
    assert np.all(values.max(axis=1) <= found.upper * (1 + 1e-9))
    assert np.median(found.lower / found.upper) > 0.3
    assert entries(reference, edges[:-1], edges[1:]).shape == (39, hub.direct.shape[1], hub.direct.shape[0])
