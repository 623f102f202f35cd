"""Tail levels: exact statics for every output kind, order, stability and the shift's irrelevance."""

from dataclasses import replace

import numpy as np
import pytest
from brute_force import DenseShift, all_modes, modes_record, output_parts, random_case

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import Damping, ModalRatio, Rayleigh, Structure, Thermal
from modesieve.reduce.response.norms import largest_singular_value as largest
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.diagonal import diagonal
from modesieve.reduce.truncation.tails import with_tail_levels


def static_errors(case, system):
    """Elastic DC of every output kind against all modes, relative to sqrt(G_kk G_ll) at 0."""
    t, F = case.truth, case.model.F
    d = diagonal(system)
    e, small = t.x > 0, d.x > 0
    b, out = t.phi.T @ F, []
    for rows, kept, still in zip(output_parts(case.model), (d.cq, d.cv, d.ca), (1, 0, 0), strict=True):
        C, s = rows @ t.phi, rows @ t.still
        exact = C[:, e] / t.x[e] @ b[e] + still * s @ (t.still.T @ F)
        ours = kept[:, small] / d.x[small] @ d.b[small] + still * (d.X + (d.D if d.order == 1 else 0))
        rows_size = (C[:, e] ** 2 / t.x[e]).sum(1) + (s**2).sum(1)
        columns_size = (b[e] ** 2 / t.x[e, None]).sum(0) + ((t.still.T @ F) ** 2).sum(0)
        out.append(np.max(np.abs(exact - ours) / np.maximum(np.sqrt(np.outer(rows_size, columns_size)), 1e-300)))
    return out


def some(case):
    always = [i + 1 for i, reason in enumerate(case.modes.always_kept) if reason]
    return tuple(sorted({*always, *range(1, len(case.modes) + 1, 2)}))


@pytest.mark.parametrize("levels", [1, 2, 3])
def test_statics_are_exact_for_any_kept_set(levels):
    """DC of displacement, velocity and acceleration rows agrees with all modes to 1e-12, modes dropped or not."""
    for seed in range(40):
        case = random_case(seed)
        hub = build_hub(case.modes, 3, shifted=case.shifted)
        for kept in (tuple(range(1, len(case.modes) + 1)), some(case)):
            assert max(static_errors(case, with_tail_levels(hub, kept, levels).system)) <= 1e-12


def test_small_models_stay_stable_and_second_order():
    """Pseudo-modes have positive stiffness, never negative damping, and bring no feedthrough."""
    for seed in range(30):
        case = random_case(seed, "structure")
        hub = build_hub(case.modes, 2, shifted=case.shifted)
        d = diagonal(with_tail_levels(hub, some(case), 2).system)
        assert np.all(d.x >= 0)
        assert np.all(d.d >= 0)
        assert np.all(case.model.Du == d.D)


def test_pseudo_modes_of_all_computed_modes_lie_above_the_counting_point():
    """Orthogonal to a complete list, no pseudo-mode can fall below the first uncomputed eigenvalue."""
    for seed in range(30):
        case = random_case(seed)
        hub = build_hub(case.modes, 3, shifted=case.shifted)
        assert np.all(hub.tail_x >= case.truth.x[len(case.modes)] * (1 - 1e-10))


def free_beam(elements=12, ratio=0.01):
    """A free chain of Euler-Bernoulli elements, force and acceleration at one end; K singular with two rigid modes."""
    L, n = 1.0 / elements, 2 * (elements + 1)
    k = np.array([[12, 6 * L, -12, 6 * L], [6 * L, 4 * L**2, -6 * L, 2 * L**2],
                  [-12, -6 * L, 12, -6 * L], [6 * L, 2 * L**2, -6 * L, 4 * L**2]]) / L**3  # fmt: skip
    m = np.array([[156, 22 * L, 54, -13 * L], [22 * L, 4 * L**2, 13 * L, -3 * L**2],
                  [54, 13 * L, 156, -22 * L], [-13 * L, -3 * L**2, -22 * L, 4 * L**2]]) * L / 420  # fmt: skip
    K, M = np.zeros((n, n)), np.zeros((n, n))
    for e in range(elements):
        span = slice(2 * e, 2 * e + 4)
        K[span, span] += k
        M[span, span] += m
    F = np.zeros((n, 1))
    F[0] = 1
    return Structure(K=K, M=M, F=F, Cq=np.zeros((1, n)), Ca=F.T, damping=Damping(base=ModalRatio(ratio=ratio)))


def test_rigid_body_acceleration_is_force_over_mass():
    """An accelerometer on a free body reads F/m (and the rotation's share) as the frequency goes to 0."""
    model = free_beam()
    truth = all_modes(model.K, model.M)
    x_c = (truth.x[5] + truth.x[6]) / 2
    modes = modes_record(model, truth, 6, x_c)
    shifted = DenseShift(model.K.toarray(), model.M.toarray(), -1e-3 * truth.x[2])
    hub = build_hub(modes, 2, shifted=shifted)
    small = with_tail_levels(hub, tuple(range(1, 7)), 2).system
    # A uniform free beam of unit mass and length pushed at its end: 1/m + (L/2)^2/J = 1 + 3.
    assert small.response(np.array([1e-4]))[0, 0, 0] == pytest.approx(4.0, abs=1e-6)


def test_elastic_statics_do_not_depend_on_the_shift():
    """Six-digit-different shifts give the elastic DC of a free body to 1e-12."""
    model = replace(free_beam(), Cq=free_beam().Ca, Ca=None)
    truth = all_modes(model.K, model.M)
    modes = modes_record(model, truth, 4, (truth.x[3] + truth.x[4]) / 2)
    values = []
    for share in (1e-6, 1e-3, 1e-1):
        shifted = DenseShift(model.K.toarray(), model.M.toarray(), -share * truth.x[2])
        d = diagonal(build_hub(modes, 1, shifted=shifted).system)
        values.append(d.cq[:, 2:] / d.x[2:] @ d.b[2:])
    # The double-precision floor of K itself: eps times the span of its spectrum.
    floor = 1e-12 + 10 * np.finfo(float).eps * truth.x[-1] / truth.x[2]
    assert np.ptp(np.array(values)) <= floor * abs(values[0][0, 0])


def test_three_levels_reach_a_hundred_thousandth_of_the_peak():
    """In-band error at 0.8 of the first uncomputed frequency, collocated, 1 %: at most 1e-4 of the band's peak."""
    k = np.ones(400)
    K = np.diag(np.append(2 * k[:-1], 1.0)) - np.diag(k[:-1], 1) - np.diag(k[:-1], -1)
    F = np.zeros((400, 1))
    F[137] = 1
    model = Structure(K=K, M=np.eye(400), F=F, Cq=F.T, damping=Damping(base=ModalRatio(ratio=0.01)))
    truth = all_modes(K, np.eye(400))
    modes = modes_record(model, truth, 20, (truth.x[19] + truth.x[20]) / 2)
    hub = build_hub(modes, 3, shifted=DenseShift(K, np.eye(400), 0.0))
    assert hub.solves <= 5  # one port: the static answer and one a level
    w = np.linspace(0, 0.8, 3000) * np.sqrt(truth.x[20])
    true = (truth.phi[137] ** 2 / (truth.x + 0.02j * w[:, None] * np.sqrt(truth.x) - w[:, None] ** 2)).sum(1)
    errors = []
    for levels in range(4):
        small = with_tail_levels(hub, tuple(range(1, 21)), levels).system
        assert diagonal(small).terms <= 20 + levels
        errors.append(np.max(np.abs(true - small.response(w)[:, 0, 0])) / np.max(np.abs(true)))
    assert errors[3] <= 1e-4
    assert errors[3] < errors[1] < errors[0]


def test_thermal_levels():
    """A thermal model's pseudo-modes are real poles and its statics exact, however few modes are kept."""
    for seed in range(20):
        case = random_case(seed, "thermal")
        hub = build_hub(case.modes, 2, shifted=case.shifted)
        always = tuple(i + 1 for i, reason in enumerate(case.modes.always_kept) if reason)
        small = with_tail_levels(hub, always, 1)
        assert max(static_errors(case, small.system)) <= 1e-12
        assert np.all(small.system.poles.real <= 0)


def test_pseudo_modes_inside_a_band_are_told():
    """Dropping strong in-band modes can put a pseudo-mode into the band; `inside` lists it."""
    case = random_case(4, "structure", "rayleigh")
    hub = build_hub(case.modes, 1, shifted=case.shifted)
    low = with_tail_levels(hub, (), 1)
    band = (0.0, float(low.pseudo_omega[0]) * 1.01)
    assert len(low.inside(band)) >= 1
    assert len(low.inside((0.0, float(low.pseudo_omega[0]) * 0.5))) == 0


def test_rigid_body_modes_cannot_be_dropped():
    """Tail levels without a rigid-body mode have no statics to be exact about: refused."""
    case = random_case(3, "structure", "rayleigh")
    hub = build_hub(case.modes, 1, shifted=case.shifted)
    with pytest.raises(ChoiceError, match="mode 1 dropped"):
        with_tail_levels(hub, (2,), 1)


def test_unknown_levels_are_refused():
    """More levels than the hub holds, or fewer than none, are refused with the range."""
    case = random_case(3, "structure")
    hub = build_hub(case.modes, 2, shifted=case.shifted)
    for levels in (-1, 4):
        with pytest.raises(ChoiceError, match="0 to 2"):
            with_tail_levels(hub, (1,), levels)


def test_condensed_massless_unknowns_answer_exactly():
    """Loads and sensors on massless unknowns: response and statics follow all modes and the condensed part."""
    K = np.array([[3.0, -1, 0], [-1, 2, -1], [0, -1, 1.5]])
    M = np.diag([1.0, 0.0, 2.0])
    model = Thermal(K=K, E=M, F=np.array([[0.0], [1], [0]]), C=np.array([[0.0, 1, 0]]))
    truth = all_modes(K, M)
    modes = modes_record(model, truth, 1, (truth.x[0] + truth.x[1]) / 2)
    hub = build_hub(modes, 1, shifted=DenseShift(K, M, 0.0))
    w = np.array([0.0, 0.2, 3.0])
    exact = np.array([np.linalg.solve(K + 1j * wi * M, model.F)[1, 0] for wi in w])
    small = with_tail_levels(hub, (1,), 1).system.response(w)[:, 0, 0]
    assert small[0] == pytest.approx(exact[0], rel=1e-13)
    assert np.all(np.abs(exact - hub.response(w)[:, 0, 0]) <= hub.entry_error(w)[:, 0, 0])


def test_stiffness_proportional_damping_of_a_massless_answer_is_in_the_bound():
    """A constant cannot follow ``X/(1 + j w beta)``: the hub's bound owns up to the difference."""
    K = np.array([[3.0, -1, 0], [-1, 2, -1], [0, -1, 1.5]])
    M = np.diag([1.0, 0.0, 2.0])
    F = np.array([[0.0], [1], [0]])
    model = Structure(K=K, M=M, F=F, Cq=F.T, damping=Damping(base=Rayleigh(alpha=0.0, beta=0.4)))
    truth = all_modes(K, M)
    modes = modes_record(model, truth, 1, (truth.x[0] + truth.x[1]) / 2)
    hub = build_hub(modes, 1, shifted=DenseShift(K, M, 0.0))
    w = np.linspace(0, 1, 30)
    exact = np.array([np.linalg.solve((1 + 0.4j * wi) * K - wi**2 * M, F)[1, 0] for wi in w])[:, None, None]
    error = largest(exact - hub.response(w))
    assert np.max(error) > 1e-2
    assert np.all(error <= hub.error(w))
