"""Thermal small models with refitted residues: exact steady state, optimal residues, true poles, honest warnings."""

import numpy as np
import pytest
import scipy.linalg as sl
import scipy.sparse as sp

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal import find_modes
from modesieve.reduce.model import Input, Output, Thermal
from modesieve.reduce.response.small import FirstOrderModal
from modesieve.reduce.truncation.refit import merit_of, mixed_poles, refit, slow_coupled, thermal_fit


def plate(n, source, sensor, film=1.0):
    """An n by n grid plate, unit conductances and capacities, a film along one edge; points as (column, row)."""
    step = sp.diags_array([-np.ones(n - 1), np.ones(n - 1)], offsets=[0, 1], shape=(n - 1, n))
    line, one = step.T @ step, sp.identity(n)
    edge = np.zeros(n)
    edge[0] = film
    K = sp.csr_array(sp.kron(one, line) + sp.kron(line, one) + sp.kron(one, sp.diags_array(edge)))
    F, C = np.zeros((n * n, 1)), np.zeros((1, n * n))
    F[source[1] * n + source[0], 0] = 1
    C[0, sensor[1] * n + sensor[0]] = 1
    return Thermal(K=K, E=sp.csr_array(sp.identity(n * n)), F=F, C=C)


class Exact:
    """H2 quantities from all modes."""

    def __init__(self, model):
        self.x, phi = sl.eigh(model.K.toarray())
        self.r = (model.C[0] @ phi) * (phi.T @ model.F[:, 0])
        self.squared = np.sum(np.outer(self.r, self.r) / (self.x[:, None] + self.x[None, :]))

    def error(self, small):
        """Relative H2 error."""
        y = -np.array([block[0, 0] for block in small.blocks])
        s = small.C[0] * small.B[:, 0]
        cross = np.sum(np.outer(s, self.r) / (y[:, None] + self.x[None, :]))
        own = np.sum(np.outer(s, s) / (y[:, None] + y[None, :]))
        return np.sqrt(max(self.squared - 2 * cross + own, 0.0) / self.squared)

    def merit(self, small):
        return self.squared * (1 - self.error(small) ** 2)


@pytest.fixture(scope="module")
def collocated():
    model = plate(40, (13, 17), (13, 17))
    exact = Exact(model)
    return model, exact, find_modes(model, (0.0, exact.x[30]))


def test_point_source_on_a_plate(collocated):
    """40 x 40 plate, source and sensor at (13, 17), order 8, half true poles: relative H2 error at most 1e-2."""
    _, exact, modes = collocated
    fit = thermal_fit(modes, 8)
    assert fit.system.states == 8
    assert fit.true_poles >= 4
    poles = -np.array([block[0, 0] for block in fit.system.blocks])
    near = np.min(np.abs(poles[: fit.true_poles, None] - exact.x) / exact.x, axis=1)
    assert np.all(near < 1e-9)
    assert exact.error(fit.system) <= 1e-2
    assert not fit.warnings


def test_raw_sum_is_nearly_useless_there(collocated):
    """The slowest eight modes as they are: relative H2 error above 0.95 where the fit reaches 0.01."""
    _, exact, modes = collocated
    assert exact.error(modes.system.select(np.arange(8))) > 0.95


def test_steady_state_is_exact(collocated):
    """C K^-1 F is met to 1e-11, whatever the poles."""
    model, exact, modes = collocated
    true = np.sum(exact.r / exact.x)
    for system in (thermal_fit(modes, 6).system, refit(model, modes.system.select(np.arange(5))).system):
        assert system.response(np.zeros(1))[0, 0, 0].real == pytest.approx(true, rel=1e-11)


def test_free_fit_is_the_best_of_its_poles(collocated):
    """With the poles fixed no other residues have a smaller H2 error: random changes only make it worse."""
    model, exact, modes = collocated
    small = modes.system.select(np.array([0, 2, 5]))
    best = refit(model, small, exact_static=False).system
    assert exact.error(best) < exact.error(small)
    rng = np.random.default_rng(3)
    for _ in range(20):
        C = best.C * (1 + 1e-2 * rng.normal(size=best.C.shape))
        other = FirstOrderModal(blocks=best.blocks, B=best.B, C=C, D=best.D)
        assert exact.error(other) > exact.error(best)


def test_merit_tells_worse_than_nothing(collocated):
    """2 <G, R> - norm(R)^2 is exact: its sign tells a model that is worse than none, and a warning says so."""
    model, exact, modes = collocated
    small = modes.system.select(np.arange(4))
    assert merit_of(model, small) == pytest.approx(exact.merit(small), rel=1e-8)
    loud = FirstOrderModal(blocks=small.blocks, B=small.B, C=-3 * small.C, D=small.D)
    assert merit_of(model, loud) < 0
    assert exact.error(loud) > 1
    forced = refit(model, modes.system.select(np.array([20])))
    assert forced.worse_than_zero == (exact.error(forced.system) > 1)
    assert bool(forced.warnings) == forced.worse_than_zero


def test_distant_sensor_keeps_more_true_poles():
    """Where the sensor is far from the source slow modes do most: the best fit beats the raw sum by far."""
    model = plate(24, (6, 9), (19, 3))
    exact = Exact(model)
    modes = find_modes(model, (0.0, exact.x[30]))
    fit = thermal_fit(modes, 8)
    assert exact.error(fit.system) < 0.3 * exact.error(modes.system.select(np.arange(8)))


def test_weights_and_several_channels():
    """Amplitudes and resolutions weigh the fit; statics stay exact in physical units for every pair."""
    base = plate(14, (3, 4), (9, 9))
    F, C = np.hstack([base.F, np.roll(base.F, 31, axis=0)]), np.vstack([base.C, np.roll(base.C, 50, axis=1)])
    model = Thermal(
        K=base.K,
        E=base.E,
        F=F,
        C=C,
        inputs=(Input(name="a", amplitude=3.0), Input(name="b", amplitude=0.2)),
        outputs=(Output(name="c", resolution=0.1), Output(name="d", resolution=2.0)),
    )
    modes = find_modes(model, count=20)
    fit = refit(model, modes.system.select(np.arange(6)))
    static = C @ np.linalg.solve(base.K.toarray(), F)
    assert np.allclose(fit.system.response(np.zeros(1))[0].real, static, rtol=1e-10)


def test_hidden_modes_are_not_kept():
    """By symmetry half of the modes of a centred source are invisible: they are no true poles of the small model."""
    model = plate(15, (7, 7), (7, 7))
    modes = find_modes(model, count=24)
    x, phi = sl.eigh(model.K.toarray())
    seen = np.abs(phi.T @ model.F[:, 0]) > 1e-9
    kept = slow_coupled(modes, 4)
    assert np.allclose(np.sort(modes.omega[kept]), x[seen][:4], rtol=1e-8)


def test_refusals():
    """Integrating models and coupled blocks are refused with the reason."""
    model = plate(6, (2, 2), (4, 4), film=0.0)
    modes = find_modes(model, count=6)
    with pytest.raises(ChoiceError, match="decaying model"):
        mixed_poles(modes, 4)
    pair = FirstOrderModal(
        blocks=(np.array([[-1.0, 1], [-1, -1]]),), B=np.ones((2, 1)), C=np.ones((1, 2)), D=np.zeros((1, 1))
    )
    with pytest.raises(ChoiceError, match="coupled blocks"):
        refit(model, pair)
