"""Selection by the error of the set, and the choice of modes and levels by a guaranteed tolerance."""

from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from brute_force import DenseShift, all_modes, exact_solver, modes_record, random_case

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import Damping, ModalRatio, Structure
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.records import Tolerance
from modesieve.reduce.truncation.search import smallest_guaranteed
from modesieve.reduce.truncation.select import score_warnings, select
from modesieve.reduce.truncation.set_error import band_error, h2_error


def candidates(seed, count=14):
    """A system of ``count`` modes of a random model with distant ports, or None where it has no H2 norm."""
    case = random_case(seed, "thermal" if seed % 2 else "structure", "ratio")
    x = case.truth.x
    if len(x) <= count or np.any(x <= 0) or getattr(case.model, "Ca", None) is not None:
        return None
    return case, modes_record(case.model, case.truth, count, (x[count - 1] + x[count]) / 2).system


def errors_of(case, system, seed):
    a, r = np.ones(case.model.m), np.ones(case.model.p)
    units = [np.array([i]) for i in range(system.terms)]
    w = np.geomspace(1e-3, 2, 60) * case.omega_c if seed % 2 else np.linspace(0.01, 1, 60) * case.omega_c
    return h2_error(system, units, a, r), band_error(system, units, w, a, r)


def exhaustive(error, count):
    sets = np.array(list(combinations(range(error.units), count)))
    dropped = np.ones((len(sets), error.units))
    dropped[np.arange(len(sets))[:, None], sets] = 0
    return float(error.of(dropped).min())


def test_h2_set_error_is_the_h2_norm_of_what_is_dropped():
    """d^T Q d equals the squared H2 norm of the dropped terms, integrated over frequency."""
    case, system = next(c for c in map(candidates, range(0, 40, 2)) if c is not None)
    Q = h2_error(system, [np.array([i]) for i in range(system.terms)], np.ones(case.model.m), np.ones(case.model.p))
    drop = np.zeros(system.terms)
    drop[[1, 4, 7]] = 1
    w = np.concatenate([np.linspace(0, 40, 400_001)]) * np.sqrt(system.x[-1]) / 4
    G = sum(system.term_response(w, i) for i in (1, 4, 7))
    power = np.sum(np.abs(G) ** 2, axis=(1, 2))
    integral = np.sum((power[1:] + power[:-1]) / 2 * np.diff(w)) / np.pi
    assert Q.of(drop)[0] ** 2 == pytest.approx(integral, rel=2e-3)


def test_search_finds_the_exhaustive_optimum():
    """Without enumerating subsets the search comes within 1 % of the optimum, for H2 and for the band error."""
    tried = missed = 0
    for seed in range(16):
        found = candidates(seed)
        if found is None:
            continue
        for error in errors_of(*found, seed):
            best = exhaustive(error, 5)
            tried += 1
            missed += select(error, 5).error > 1.01 * best
    assert tried >= 12
    assert missed == 0


def test_scores_that_mislead_are_named():
    """A score's set more than 10 % worse than the best, or worse than keeping nothing, draws a warning."""
    found = score_warnings({"decay": 1.45, "coupling": 0.2, "peak-share": 1.05}, 0.19, 1.0)
    assert len(found) == 2
    assert "decay is worse than keeping nothing" in found[0].replace("by ", "")
    assert "peak-share" in found[1]


def test_orders_are_compared_with_the_result():
    """An order by frequency is evaluated on the same error and never beats the set found."""
    case, system = next(c for c in map(candidates, range(1, 60, 2)) if c is not None)
    error = errors_of(case, system, 1)[0]
    found = select(error, 4, orders={"decay": np.arange(system.terms)})
    assert found.error <= found.of_score["decay"]
    assert found.nothing == pytest.approx(error.of(np.ones(error.units))[0])


def test_undefined_h2_error_is_refused():
    """Undamped modes and acceleration outputs have no H2 error: said, not inf."""
    case = random_case(2, "structure", "none")
    units = [np.array([i]) for i in range(case.modes.system.terms)]
    with pytest.raises(ChoiceError, match="H2 error is undefined"):
        h2_error(case.modes.system, units, np.ones(case.model.m), np.ones(case.model.p))


# ---- by tolerance ----------------------------------------------------------------------------------------------------


def string(n=200, modes=24, ratio=0.01):
    """A fixed string of n masses, collocated force and displacement off centre, 1 % damping."""
    K = np.diag(np.full(n, 2.0)) - np.diag(np.ones(n - 1), 1) - np.diag(np.ones(n - 1), -1)
    F = np.zeros((n, 1))
    F[61] = 1
    model = Structure(K=K, M=np.eye(n), F=F, Cq=F.T, damping=Damping(base=ModalRatio(ratio=ratio)))
    truth = all_modes(K, np.eye(n))
    record = modes_record(model, truth, modes, (truth.x[modes - 1] + truth.x[modes]) / 2)
    return model, truth, record, build_hub(record, 3, shifted=DenseShift(K, np.eye(n), 0.0))


def exact(truth, w, modes):
    zeta = np.where(np.arange(len(truth.x)) < modes, 0.01, 0.0)
    return (truth.phi[61] ** 2 / (truth.x + 2j * zeta * w[:, None] * np.sqrt(truth.x) - w[:, None] ** 2)).sum(1)


def test_two_tolerances_choose_differently():
    """The same model at 5 % and 0.5 % of local gets different (modes, levels), each within its tolerance everywhere."""
    _, truth, modes, hub = string()
    top = 0.6 * np.sqrt(hub.x_c)
    w = np.linspace(1e-4, top, 8000)
    G = exact(truth, w, 24)
    chosen = []
    for value in (0.05, 0.005):
        found = smallest_guaranteed(modes, hub, Tolerance(value=value, of="local"), (0.0, top), spots=0)
        assert found.guarantee.holds
        assert found.guarantee.local.value <= value
        assert found.guarantee.local.certainty == "guaranteed"
        R = found.system.response(w)[:, 0, 0]
        assert np.max(np.abs(G - R) / np.maximum(np.abs(G), found.guarantee.threshold)) <= value
        chosen.append((len(found.kept), found.static.levels))
        assert found.static.damped or any("ring" in note for note in found.notes)
    assert chosen[0] != chosen[1]


def test_half_the_tolerance_is_priced():
    """The result says what half the tolerance would need."""
    _, _, modes, hub = string()
    found = smallest_guaranteed(modes, hub, Tolerance(value=0.02, of="peak"), (0.0, 0.6 * np.sqrt(hub.x_c)), spots=0)
    assert found.half is not None
    assert any("half the tolerance" in note for note in found.notes)


def test_no_lightly_damped_mode_in_the_band_goes_in_silence():
    """Peak tolerances may leave in-band resonances out; the notes then list them."""
    _, _, modes, hub = string()
    band = (0.0, 0.8 * np.sqrt(hub.x_c))
    found = smallest_guaranteed(modes, hub, Tolerance(value=0.2, of="peak"), band, spots=0)
    inside = {int(i) for i in modes.numbers[modes.omega <= band[1]]}
    left_out = sorted(inside - set(found.kept))
    assert left_out
    assert any(all(str(i) in note for i in left_out) for note in found.notes)


def test_search_results_hold_against_every_mode():
    """On random models the chosen model meets its tolerance by brute force, for each reference."""
    met = 0
    for seed in range(14):
        case = random_case(seed, "thermal" if seed % 2 else "structure", "rayleigh")
        hub = build_hub(case.modes, 3, shifted=case.shifted)
        band, of = (0.0, 0.7 * case.omega_c), ("peak", "local")[seed % 2]
        try:
            found = smallest_guaranteed(case.modes, hub, Tolerance(value=0.03, of=of), band, solve=exact_solver(case))
        except ChoiceError:
            continue
        met += 1
        w = np.geomspace(1e-6, 1, 3000) * band[1]
        G = case.response(w)
        error = largest_singular_value(G - found.system.response(w))
        scale = found.guarantee.peak_reference
        if of == "local":
            scale = np.maximum(largest_singular_value(G), found.guarantee.threshold)
        assert np.max(error / scale) <= 0.03
        assert all(check.passed for check in found.guarantee.spot_checks)
    assert met >= 8


def test_absolute_tolerance_counts_all_inputs_at_their_amplitudes():
    """An absolute tolerance is in output units, inputs at their amplitudes added."""
    case = random_case(8, "thermal")
    hub = build_hub(case.modes, 3, shifted=case.shifted)
    band = (0.0, 0.5 * case.omega_c)
    w = np.geomspace(1e-6, 1, 2000) * band[1]
    G = case.response(w)
    size = np.abs(G).sum(axis=2).max()
    found = smallest_guaranteed(case.modes, hub, Tolerance(value=0.01 * size, of="absolute"), band, spots=0)
    assert np.abs(G - found.system.response(w)).sum(axis=2).max() <= 0.01 * size


def test_a_tolerance_out_of_reach_says_how_near_it_came():
    """No set meets an absurd tolerance: the error says the best value and what to do."""
    _, _, modes, hub = string(modes=4)
    with pytest.raises(ChoiceError, match="at best") as caught:
        smallest_guaranteed(modes, hub, Tolerance(value=1e-9, of="local"), (0.0, 0.9 * np.sqrt(hub.x_c)), spots=0)
    assert "compute more modes" in str(caught.value)


def test_a_withdrawn_guarantee_cannot_choose():
    """Without a count there is no guaranteed choice."""
    _, _, modes, hub = string(modes=8)
    undamped = replace(hub, system=replace(hub.system, d=0 * hub.system.d))
    with pytest.raises(ChoiceError, match="undamped"):
        smallest_guaranteed(modes, undamped, Tolerance(value=0.02), (0.0, 0.5 * np.sqrt(hub.x_c)), spots=0)
