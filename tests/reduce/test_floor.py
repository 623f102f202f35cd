"""Hankel singular values, the floor under whole-axis errors, and worst errors in time."""

import os
from pathlib import Path

import numpy as np
import pytest
from brute_force import random_case
from scipy.integrate import quad
from scipy.linalg import expm

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import LossFactor, Rayleigh
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.diagonal import diagonal
from modesieve.reduce.truncation.floor import floor_of, hankel_values, of_matrices, whole_axis_error
from modesieve.reduce.truncation.tails import with_tail_levels
from modesieve.reduce.truncation.time_bound import l1_norm, rate_error, rest_gain, step_error, worst_error

DATA = Path(os.environ.get("MODESIEVE_TEST_DATA", "/work/shared/data"))


def oscillator(zeta):
    one, none = np.ones((1, 1)), np.zeros((1, 1))
    return SecondOrderModal(
        x=np.ones(1), d=np.array([2 * zeta]), eta=np.zeros(1), b=one, cq=one, cv=none, ca=none, D=none, X=none
    )


@pytest.mark.parametrize("zeta", [0.01, 0.05, 0.2])
def test_hankel_values_of_one_oscillator(zeta):
    """(sqrt(1 + z^2) +- z)/(4 z) for 1/(s^2 + 2 z s + 1) (closed form)."""
    exact = (np.sqrt(1 + zeta**2) + np.array([zeta, -zeta])) / (4 * zeta)
    assert hankel_values(oscillator(zeta)) == pytest.approx(exact, rel=1e-12)


@pytest.mark.skipif(not (DATA / "building48.h5").exists(), reason="the benchmark's file is not on this machine")
def test_published_hankel_values_of_the_building():
    """48-state building: published Hankel values to 1e-6 of the largest (Chahlaoui and Van Dooren, 2002; file seen)."""
    import h5py

    with h5py.File(DATA / "building48.h5") as file:
        A, B, C = (np.array(file[name]) for name in "ABC")
        published = np.array(file["published_hankel_singular_values"]).ravel()
    assert np.max(np.abs(of_matrices(A, B, C) - published)) <= 1e-6 * published[0]


def test_symmetric_shortcut_agrees_with_two_gramians():
    """Collocated thermal models need one Gramian; a hair off collocation takes two and gives the same values."""
    rng = np.random.default_rng(2)
    x, b = np.sort(rng.uniform(0.1, 9, 8)), rng.normal(size=(8, 2))
    blocks = tuple(np.array([[-v]]) for v in x)
    one = hankel_values(FirstOrderModal(blocks=blocks, B=b, C=b.T, D=np.zeros((2, 2))))
    two = hankel_values(FirstOrderModal(blocks=blocks, B=b, C=b.T * (1 + 1e-15), D=np.zeros((2, 2))))
    assert np.max(np.abs(one - two)) <= 1e-7 * one[0]


def test_undamped_models_have_no_hankel_values():
    """Said with the reason, not inf or nan."""
    with pytest.raises(ChoiceError, match="damping in every mode"):
        hankel_values(oscillator(0.0))


def test_floors_that_are_undefined_say_why():
    """Loss factors, acceleration outputs, and an uncomputed part without stiffness-proportional damping."""
    reasons = []
    for seed in range(40):
        case = random_case(seed, "structure")
        found = floor_of(build_hub(case.modes, 2, shifted=case.shifted))
        base = case.model.damping.base
        if isinstance(base, Rayleigh) and case.model.Ca is None:
            assert found.reason == ""
        else:
            assert found.reason
            assert len(found.floor) == 0
        reasons.append(found.reason)
        if isinstance(base, LossFactor) and case.model.Ca is None:
            assert "loss factor" in found.reason
    assert "" in reasons


@pytest.mark.parametrize("kind", ["thermal", "structure"])
def test_whole_axis_error_covers_every_frequency(kind):
    """sup e_H is above the hub's bound and its true error far below and far above the spectrum."""
    done = 0
    for seed in range(16):
        case = random_case(seed, kind, "rayleigh")
        hub = build_hub(case.modes, 2, shifted=case.shifted)
        if floor_of(hub).reason:
            continue
        done += 1
        worst = whole_axis_error(hub)
        w = np.geomspace(1e-6, 1e6, 400) * case.omega_c
        assert np.all(hub.error(w) <= worst * (1 + 1e-9))
    assert done >= 4


def test_no_small_model_beats_the_floor():
    """The true whole-axis error of every mode subset lies above the floor for its number of states."""
    seen = 0
    for seed in range(20):
        case = random_case(seed, "thermal")
        if np.any(case.truth.x == 0):
            continue
        hub = build_hub(case.modes, 3, shifted=case.shifted)
        found = floor_of(hub)
        w = np.concatenate([[0.0], np.geomspace(1e-4, 1e4, 4000) * case.omega_c])
        G = case.response(w)
        for count in range(0, len(case.modes) + 1, 2):
            small = with_tail_levels(hub, tuple(range(1, count + 1)), min(count, 1)).system
            error = largest_singular_value(G - small.response(w)).max()
            r = small.states
            if r < len(found.floor):
                assert error >= found.floor[r] * (1 - 1e-6)
                seen += found.floor[r] > 0.05 * error
    assert seen >= 5


# ---- time ------------------------------------------------------------------------------------------------------------


def test_l1_norm_of_exponentials():
    """The enclosing integral of abs(sum of exponentials) is above the true one and within a per cent."""
    rng = np.random.default_rng(5)
    for _ in range(10):
        x, r = np.sort(10 ** rng.uniform(-2, 2, 6)), rng.normal(size=(6, 1, 1))
        breaks = np.geomspace(1e-5, 4e3, 200)
        pieces = zip(np.concatenate([[0], breaks[:-1]]), breaks, strict=True)
        true = sum(quad(lambda t, x=x, r=r: abs(np.exp(-x * t) @ r[:, 0, 0]), a, b, limit=200)[0] for a, b in pieces)
        ours = l1_norm(x, r)[0, 0]
        assert true * (1 - 1e-6) <= ours <= 1.01 * true


def thermal_case(seed):
    case = random_case(seed, "thermal")
    return None if np.any(case.truth.x == 0) else (case, build_hub(case.modes, 2, shifted=case.shifted))


def impulse(case, t):
    """Impulse response of all modes, (t, p, m)."""
    b, c = case.truth.phi.T @ case.model.F, case.model.C @ case.truth.phi
    return np.einsum("tk,pk,km->tpm", np.exp(-np.outer(t, case.truth.x)), c, b)


def peak_to_peak(case, system):
    """``integral abs(g - g_R) dt`` of every entry, feedthrough added, by a fine trapezoidal rule."""
    x = case.truth.x
    t = np.concatenate([[0.0], np.geomspace(1e-5 / x[-1], 40 / x[0], 20_000)])
    d = diagonal(system)
    small = np.einsum("tk,pk,km->tpm", np.exp(-np.outer(t, d.x)), d.cq, d.b)
    g = np.abs(impulse(case, t) - small)
    C, still = case.model.C @ case.truth.still, case.truth.still.T @ case.model.F
    through = np.abs(C @ still + case.model.D - d.D)
    return np.sum((g[1:] + g[:-1]) / 2 * np.diff(t)[:, None, None], axis=0) + through


@pytest.mark.parametrize("levels", [0, 1, 2])
def test_worst_error_in_time_holds(levels):
    """No input within its amplitude makes an output err by more than the bound: peak-to-peak gain by all modes."""
    for seed in range(16):
        found = thermal_case(seed)
        if found is None:
            continue
        case, hub = found
        kept = tuple(range(1, len(case.modes) + 1, 2))
        small = with_tail_levels(hub, kept, levels).system
        bound = worst_error(hub, small)
        true = peak_to_peak(case, small)
        assert np.all(true <= bound.entry * (1 + 1e-6) + 1e-12 * bound.entry.max())
        assert bound.worst == pytest.approx(bound.entry.sum(axis=1))


def test_rest_gain_bounds_the_uncomputed_part():
    """sqrt(W_C W_B) bounds the peak-to-peak gain of the uncomputed modes and meets it for collocated ports."""
    ratios = []
    for seed in range(30):
        found = thermal_case(seed)
        if found is None:
            continue
        case, hub = found
        k = len(case.modes)
        b, c = case.truth.phi[:, k:].T @ case.model.F, case.model.C @ case.truth.phi[:, k:]
        gain = (np.abs(c) / case.truth.x[k:]) @ np.abs(b)
        still = np.abs(case.model.C @ case.truth.still) @ np.abs(case.truth.still.T @ case.model.F)
        assert np.all(gain <= rest_gain(hub) * (1 + 1e-9) + 1e-14)
        ratios.append(np.max(gain / np.maximum(rest_gain(hub), 1e-300)))
        assert still.shape == gain.shape
    assert max(ratios) > 0.99


def test_step_error_decays_with_exact_statics_only():
    """With exact statics the step's error dies out; without, it grows to the static remainder. Both stay in bounds."""
    for seed in range(16):
        found = thermal_case(seed)
        if found is None:
            continue
        case, hub = found
        x = case.truth.x
        b, c = case.truth.phi.T @ case.model.F, case.model.C @ case.truth.phi
        t = np.geomspace(0.01 / x[-1], 30 / x[0], 300)
        still = case.model.C @ case.truth.still @ (case.truth.still.T @ case.model.F)
        full = np.einsum("tk,pk,km->tpm", (1 - np.exp(-np.outer(t, x))) / x, c, b) + still + case.model.D
        for levels in (0, 1):
            small = with_tail_levels(hub, (1,), levels).system
            d = diagonal(small)
            ours = np.einsum("tk,pk,km->tpm", (1 - np.exp(-np.outer(t, d.x))) / d.x, d.cq, d.b) + d.D
            bound = step_error(hub, small, t)
            assert np.all(np.abs(full - ours) <= bound * (1 + 1e-7) + 1e-11 * np.abs(full).max())
            if levels:
                assert np.max(bound[-1]) <= 1e-9 * np.abs(full).max()


def test_rate_bound():
    """Inputs that change at most so fast: a ramp's error is within the bound; inexact statics are refused."""
    case, hub = next(f for f in map(thermal_case, range(30)) if f is not None)
    small = with_tail_levels(hub, (1,), 1).system
    bound = rate_error(hub, small, np.ones(case.model.m))
    x, d = case.truth.x, diagonal(small)
    b, c = case.truth.phi.T @ case.model.F, case.model.C @ case.truth.phi
    # The steady error of unit ramps is the difference of the first moments.
    ramp = np.abs((c / x**2) @ b - (d.cq / d.x**2) @ d.b).sum(axis=1)
    assert np.all(ramp <= bound * (1 + 1e-9))
    with pytest.raises(ChoiceError, match="exact statics"):
        rate_error(hub, with_tail_levels(hub, (1,), 0).system, np.ones(case.model.m))


def test_time_bounds_are_for_thermal_models():
    """An oscillating model is refused with the reason."""
    case = random_case(1, "structure")
    hub = build_hub(case.modes, 1, shifted=case.shifted)
    with pytest.raises(ChoiceError, match="thermal"):
        worst_error(hub, case.modes.system)


def test_expm_agrees_with_the_impulse_used_here():
    """The oracle's own impulse response, against a matrix exponential."""
    case, _ = next(f for f in map(thermal_case, range(30)) if f is not None and not len(f[0].truth.still[0]))
    E, K = case.shifted.M, case.shifted.K
    t = 0.3 / case.truth.x[0]
    direct = case.model.C @ expm(-np.linalg.solve(E, K) * t) @ np.linalg.solve(E, case.model.F)
    assert np.allclose(impulse(case, np.array([t]))[0], direct, rtol=1e-7, atol=1e-9 * np.abs(direct).max())
