"""Small models held against the full one."""

from __future__ import annotations

import warnings
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve.reduce.comparison import compare
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.model import (
    Damping,
    Input,
    LossFactor,
    ModalRatio,
    Output,
    Rayleigh,
    StateSpace,
    Structure,
    Thermal,
)
from modesieve.reduce.response.full import full_response
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation import Count, Keep, Tolerance, truncate

BAND = (0.0, 0.6)


def chain(n: int = 16, *, free: bool = False, base: Any = None, **change: Any) -> Structure:
    """Unit masses and springs; loads at masses 1 and 6, outputs at 16, 6 and 2."""
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tolil()
    K[n - 1, n - 1] = 1.0
    if free:
        K[0, 0] = 1.0
    F, C = np.zeros((n, 2)), np.zeros((3, n))
    F[0, 0] = F[5, 1] = C[0, n - 1] = C[1, 5] = C[2, 1] = 1.0
    values: dict[str, Any] = {"K": K, "M": sp.eye_array(n), "F": F, "Cq": C}
    values["damping"] = Damping(base=Rayleigh(alpha=0.01, beta=0.02) if base is None else base)
    return Structure(**(values | change))


def ladder(n: int = 20) -> Thermal:
    """RC ladder with a source of 2 W at one end and sensors at both."""
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tolil()
    K[n - 1, n - 1] = 1.0
    F, C = np.zeros((n, 1)), np.zeros((2, n))
    F[0, 0] = C[0, n - 1] = C[1, 0] = 1.0
    return Thermal(
        K=K, E=sp.eye_array(n), F=F, C=C, inputs=(Input(name="chip", unit="W", amplitude=2.0),),
        outputs=(Output(name="far", unit="K", resolution=0.1), Output(name="near", unit="K", resolution=0.1)),
    )  # fmt: skip


def test_every_error_agrees_with_its_definition() -> None:
    """sigma, local, phase, peak, absolute and pair errors recomputed from the full response."""
    model = chain(inputs=(Input(name="a", amplitude=2.0), Input(name="b")))
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2, 4)), band=BAND)
    result = compare(model, [small], modes=modes, band=BAND)
    check, full = result.checks[0], result.full
    weight = np.array([2.0, 1.0])
    E, G = (full.G - small.response(full.omega)) * weight, full.G * weight
    sizes, errors = largest_singular_value(G), largest_singular_value(E)
    np.testing.assert_allclose(check.sigma, errors, rtol=1e-10, atol=1e-12 * sizes.max())
    assert result.reference_peak == pytest.approx(sizes.max())
    assert result.threshold == pytest.approx(1e-3 * sizes.max())
    np.testing.assert_allclose(check.local, errors / np.maximum(sizes, result.threshold), rtol=1e-10, atol=1e-12)
    assert check.peak_error.value == pytest.approx(errors.max() / sizes.max(), rel=1e-10)
    assert check.local_error.value == pytest.approx(check.local.max(), rel=1e-12)
    for k, figure in enumerate(check.absolute):
        assert figure.value == pytest.approx(np.abs(E[:, k]).sum(axis=1).max(), rel=1e-10)
        assert figure.pair is not None
        assert figure.pair[1] == model.outputs[k].name
    np.testing.assert_allclose(check.pair_peak, np.abs(E).max(axis=0) / np.abs(G).max(axis=0), rtol=1e-10)
    counts = np.abs(G) > result.threshold
    expected = np.angle(small.response(full.omega) / full.G)
    np.testing.assert_allclose(check.phase[counts], expected[counts], atol=1e-10)
    assert np.isnan(check.phase[~counts]).all()
    assert check.certainty == "measured"
    assert result.worst_backward_error <= 1e-12
    assert result.frequency_count == len(full.omega)


@pytest.mark.parametrize(
    "model", [chain(), chain(base=LossFactor(eta=0.04)), ladder()], ids=["structure", "loss", "thermal"]
)
def test_all_modes_differ_by_rounding_only(model: Any) -> None:
    """The full set of modes: frequency and time errors vanish, and the time curves are measured."""
    modes = find_modes(model, count=model.n)
    assert modes.certificate.complete == "all"
    small = truncate(modes, Keep(numbers=tuple(range(1, model.n + 1))), statics="none", band=(0.0, 1.0))
    result = compare(model, [small])
    check = result.checks[0]
    assert check.peak_error.value < 1e-10
    assert check.dc_error is not None
    assert check.dc_error < 1e-10
    assert result.step is not None
    assert result.impulse is not None
    for curve in (result.step, result.impulse):
        assert curve.certainty == "measured"
        np.testing.assert_allclose(curve.small[0], curve.full, atol=1e-10 * np.abs(curve.full).max())


def test_direct_state_space_with_all_its_modes() -> None:
    """A dense, non-normal model with complex pairs: everything kept reproduces it, and one mode less does not."""
    rng = np.random.default_rng(5)
    A = rng.normal(size=(10, 10)) - 5 * np.eye(10)
    model = StateSpace(A=A, B=rng.normal(size=(10, 1)), C=rng.normal(size=(1, 10)))
    modes = find_modes(model)
    every = tuple(range(1, len(modes) + 1))
    smalls = [truncate(modes, Keep(numbers=k), statics="none", band=(0.1, 30.0)) for k in (every, every[1:])]
    result = compare(model, smalls, modes=modes)
    assert result.checks[0].local_error.value < 1e-9
    assert result.checks[1].local_error.value > 1e-3


def test_static_errors() -> None:
    """The DC error is relative to the largest DC gain: exact with the static remainder, not without."""
    model = ladder()
    modes = find_modes(model, count=8)
    smalls = [truncate(modes, Keep(numbers=(1, 2)), statics=s, band=(1e-3, 0.2)) for s in ("none", "feedthrough")]  # type: ignore[arg-type]
    result = compare(model, smalls, modes=modes)
    none, feedthrough = result.checks
    static = model.C @ np.linalg.solve(model.K.toarray(), model.F)
    kept = smalls[0].response(np.zeros(1))[0]
    expected = np.linalg.norm(static - kept, 2) / np.linalg.norm(static, 2)
    assert none.dc_error == pytest.approx(expected, rel=1e-8)
    assert feedthrough.dc_error is not None
    assert feedthrough.dc_error < 1e-10
    assert [c.label for c in result.checks] == ["2 modes", "2 modes, feedthrough"]


def test_a_free_body_from_zero_gives_finite_errors_and_a_reason_for_the_missing_dc() -> None:
    """0 Hz is left out and said so; no error is inf or nan; the DC error is "none, integrates"."""
    model = chain(free=True)
    modes = find_modes(model, count=8)
    smalls = [truncate(rank(modes, band=BAND), Count(modes=n)) for n in (1, 3)]
    result = compare(model, smalls, band=BAND)
    assert result.full.omega[0] > 0
    assert any("frequency 0 left out" in note for note in result.warnings)
    for check in result.checks:
        assert check.dc_error is None
        assert check.dc_reason.startswith("none, integrates")
        for figure in (check.peak_error, check.local_error, *check.absolute):
            assert np.isfinite(figure.value)
        assert np.isfinite(check.local).all()
    assert "elastic" in result.threshold_note
    assert result.step is not None
    assert np.isfinite(result.step.full).all()
    # The reference is the elastic response: keeping the rigid-body mode alone is 100 % wrong, not 0.
    assert result.checks[0].peak_error.value > 0.5


def test_an_integrating_thermal_model() -> None:
    """A thermal part without any sink: errors finite, no DC."""
    n = 12
    K = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tolil()
    K[0, 0] = K[n - 1, n - 1] = 1.0
    F, C = np.eye(n)[:, :1], np.eye(n)[-1:]
    model = Thermal(K=K, E=sp.eye_array(n), F=F, C=C)
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2)), band=(0.0, 0.3))
    result = compare(model, [small])
    assert np.isfinite(result.checks[0].local_error.value)
    assert result.checks[0].dc_reason == "none, integrates (integrating modes)"


def test_velocity_outputs_have_no_static_answer() -> None:
    """Where the full model's DC gain is zero there is nothing to be relative to."""
    base = chain()
    model = Structure(K=base.K, M=base.M, F=base.F, Cv=base.Cq, damping=base.damping)
    modes = find_modes(model, count=8)
    result = compare(model, [truncate(modes, Keep(numbers=(1, 2)), band=BAND)], modes=modes)
    assert result.checks[0].dc_error is None
    assert result.checks[0].dc_reason == "none, the full model does not answer statically"
    assert result.sweep is not None
    assert {statics for statics, _ in result.sweep.errors} == {"none"}


def test_undamped_models_have_no_relative_error_inside_their_band() -> None:
    """The figures are undefined with the reason, curves of absolute errors remain, nothing is inf."""
    model = chain(damping=Damping())
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2, 3)), band=BAND)
    result = compare(model, [small])
    check = result.checks[0]
    assert check.max_relative_error == {"peak": None, "local": None}
    assert not check.local_error.defined
    assert "undamped mode" in check.local_error.note
    assert str(check.local_error).startswith("undefined: ")
    assert np.isfinite(check.sigma).all()
    assert all(np.isfinite(figure.value) for figure in check.absolute)
    assert result.sweep is None
    assert any("undamped mode" in note for note in result.warnings)


def test_a_small_model_from_a_file_needs_neither_its_model_nor_vectors() -> None:
    """Modes without model and vectors: the comparison with the model at hand is the same."""
    model = chain()
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2, 3)), band=BAND)
    stored = replace(small, modes=replace(modes, model=None, vectors=None, workspace=None), ranking=None, samples=None)
    here, there = (compare(model, [s], omega=small.samples.omega).checks[0] for s in (small, stored))  # type: ignore[union-attr]
    assert there.local_error.value == pytest.approx(here.local_error.value, rel=1e-9)
    assert there.certainty == "measured"


def test_modal_damping_follows_the_highest_counting_point() -> None:
    """Two small models counted differently: the full model is the one that counts further, and the other is named."""
    model = chain(30, base=ModalRatio(ratio=0.03))
    few, many = find_modes(model, count=6), find_modes(model, count=14)
    assert len(few) < len(many)
    smalls = [truncate(m, Keep(numbers=(1, 2)), band=(0.0, 0.2), statics="none") for m in (few, many)]
    result = compare(model, smalls, band=(0.0, 0.2))
    assert result.modes is many
    reference = full_response(model, result.full.omega, modes=many)
    np.testing.assert_allclose(result.full.G, reference.G, atol=1e-9 * np.abs(reference.G).max())
    assert len(result.warnings) == 1
    assert "small model 1 was made for" in result.warnings[0]
    stored = [replace(s, modes=replace(s.modes, model=None, vectors=None, workspace=None)) for s in smalls]
    again = compare(model, stored, band=(0.0, 0.2))
    assert len(again.modes) >= len(many)
    np.testing.assert_allclose(again.checks[1].local_error.value, result.checks[1].local_error.value, rtol=1e-6)


def test_given_frequencies_are_used_and_zero_is_dropped_for_a_free_body() -> None:
    """omega is taken as it is; a free body's 0 goes, with a note."""
    model = chain(free=True)
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2)), band=BAND)
    omega = np.linspace(0.0, 0.5, 11)
    result = compare(model, [small], modes=modes, omega=omega)
    np.testing.assert_array_equal(result.full.omega, omega[1:])
    assert any("frequency 0 left out" in note for note in result.warnings)
    assert result.band == (0.0, 0.5)
    with pytest.raises(ChoiceError, match="make no grid"):
        compare(model, [small], omega=np.array([1.0, 0.5]))


def test_a_given_full_response_is_not_solved_again() -> None:
    """The frequencies of a given response are those of the comparison."""
    model = chain()
    modes = find_modes(model, count=8)
    full = full_response(model, np.linspace(0.01, 0.5, 25), modes=modes)
    result = compare(model, [truncate(modes, Keep(numbers=(1,)), band=BAND, full=full)], full=full)
    assert result.full is full


def test_errors_of_a_poor_full_solution_are_only_estimated() -> None:
    """A full response whose backward error is large proves nothing and says so."""
    model = chain()
    modes = find_modes(model, count=8)
    full = full_response(model, np.linspace(0.01, 0.5, 25), modes=modes)
    poor = replace(full, backward_error=np.full(25, 1e-4))
    result = compare(model, [truncate(modes, Keep(numbers=(1,)), band=BAND)], full=poor)
    assert result.checks[0].certainty == "estimated"
    assert any("backward error reaches 1.0e-04" in note for note in result.warnings)


def test_other_channels_are_refused_and_another_model_is_named() -> None:
    """Channels must agree; a changed model with the same channels is compared, with a warning."""
    model, longer = chain(), chain(17)
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2)), band=BAND)
    with pytest.raises(ChoiceError, match="2 inputs and 2 outputs"):
        compare(Structure(K=model.K, M=model.M, F=model.F, Cq=model.Cq[:2]), [small])
    assert fingerprint(longer) != modes.origin.fingerprint
    result = compare(longer, [small], modes=find_modes(longer, count=8))
    assert any("another full model" in note for note in result.warnings)
    assert compare(longer, [small]).modes.origin.n == 17  # its own modes are found, not the small model's taken
    with pytest.raises(ChoiceError, match="modes of another model"):
        compare(longer, [small], modes=modes)


def test_step_and_impulse_tend_to_the_static_response_and_zero() -> None:
    """Long after a step the full curve is the static response times the amplitude; an impulse has died away."""
    model = ladder()
    modes = find_modes(model, count=8)
    small = truncate(modes, Keep(numbers=(1, 2)), band=(0.0, 0.3))
    result = compare(model, [small], modes=modes)
    static = 2.0 * model.C @ np.linalg.solve(model.K.toarray(), model.F)
    assert result.step is not None
    assert result.impulse is not None
    np.testing.assert_allclose(result.step.full[-1], static, rtol=0.02)
    np.testing.assert_allclose(result.step.small[0][-1], static, rtol=0.02)
    assert np.abs(result.impulse.full[-1]).max() < 0.02 * np.abs(result.impulse.full).max()
    assert result.step.certainty == "estimated"
    assert "static remainder of the rest" in result.step.note


def test_times_and_sweep_can_be_left_out() -> None:
    """Nothing is made that was not asked for."""
    model = chain()
    modes = find_modes(model, count=8)
    result = compare(model, [], modes=modes, band=BAND, times=False, sweep=False)
    assert (result.checks, result.step, result.impulse, result.sweep) == ((), None, None, None)


def test_the_comparison_is_at_least_as_strict_as_the_truncation() -> None:
    """The frequencies on which a tolerance was met are among those of the comparison."""
    model = chain(40)
    modes = find_modes(model, count=14)
    small = truncate(rank(modes, band=(0.0, 0.3)), Tolerance(value=0.2))
    result = compare(model, [small], modes=modes)
    assert small.error is not None
    assert set(small.samples.omega) <= set(result.full.omega)  # type: ignore[union-attr]
    assert result.checks[0].local_error.value >= small.error.value * (1 - 1e-9)


def test_progress_is_told() -> None:
    """A listener hears about the full response."""
    heard: list[str] = []
    model = chain()
    modes = find_modes(model, count=8)
    compare(model, [], modes=modes, band=BAND, progress=lambda p: heard.append(p.message))
    assert "full response" in heard


def test_the_report_of_a_comparison() -> None:
    """One table: states, errors of peak and local, static error, certainty."""
    model = chain(title="test chain")
    modes = find_modes(model, count=8)
    smalls = [truncate(modes, Keep(numbers=(1, 2)), statics=s, band=BAND) for s in ("none", "feedthrough")]  # type: ignore[arg-type]
    result = compare(model, smalls, modes=modes)
    lines = repr(result).splitlines()
    assert lines[0] == "Comparison with test chain"
    assert lines[1] == "  band         0 Hz to 95.5 mHz"
    assert lines[2].startswith(f"  frequencies  {result.frequency_count}, backward error of the full solution at most ")
    assert lines[-3].split() == ["model", "states", "of", "peak", "of", "local", "at", "0", "Hz", "certainty"]
    assert lines[-2].startswith("2 modes                    4 ")
    assert lines[-1].endswith("measured")
    check = repr(result.checks[0]).splitlines()
    assert check[0] == "Check of 2 modes"
    assert check[2].startswith("  error of peak   ")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert len(check) == 9
