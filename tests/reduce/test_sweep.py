"""Error over the number of kept modes."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.sparse as sp

from modesieve.reduce.comparison import compare
from modesieve.reduce.comparison.sweep import sweep_of
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.model import Damping, LossFactor, Rayleigh, StateSpace, Structure, Thermal
from modesieve.reduce.response.full import full_response
from modesieve.reduce.response.grid import frequency_grid
from modesieve.reduce.truncation import Count, truncate
from modesieve.reduce.truncation.choice import sequence
from modesieve.reduce.truncation.gauge import yardstick_for


def second_difference(n: int) -> Any:
    return sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tocsr()


def chain(n: int, base: Any = None) -> Structure:
    F, C = np.zeros((n, 2)), np.zeros((2, n))
    F[1, 0] = F[n // 2, 1] = C[0, n - 2] = C[1, 3] = 1.0
    return Structure(
        K=second_difference(n),
        M=sp.eye_array(n),
        F=F,
        Cq=C,
        damping=Damping(base=base or Rayleigh(alpha=0.01, beta=0.01)),
    )  # fmt: skip


def line(n: int) -> Thermal:
    return Thermal(K=second_difference(n), E=sp.eye_array(n), F=np.eye(n)[:, :1], C=np.eye(n)[[0, 5]])


@pytest.mark.parametrize(
    "model", [chain(20), chain(20, LossFactor(eta=0.05)), line(20)], ids=["rayleigh", "loss factor", "thermal"]
)
def test_each_count_agrees_with_a_model_cut_to_it(model: Any) -> None:
    """The incremental errors equal those of small models made one by one, for both statics and both references."""
    band = (0.02, 0.8)
    modes = find_modes(model, count=12)
    table = rank(modes, band=band)
    cuts = [int(c) for c in sequence(modes, table).cuts if c > 0]
    full = full_response(model, frequency_grid(modes, band, base=30), modes=modes)
    smalls = [
        truncate(table, Count(modes=c), statics=s, full=full)  # type: ignore[arg-type]
        for s in ("none", "feedthrough")
        for c in cuts
    ]
    result = compare(model, smalls, modes=modes, band=band, full=full)
    sweep = result.sweep
    assert sweep is not None
    assert sweep.kept.tolist() == cuts
    assert sweep.states.tolist() == [s.states for s in smalls[: len(cuts)]]
    assert sweep.ranked_by == table.by
    assert sweep.certainty == "measured"
    checks = {"none": result.checks[: len(cuts)], "feedthrough": result.checks[len(cuts) :]}
    for statics, some in checks.items():
        for of, values in (
            ("peak", [c.peak_error.value for c in some]),
            ("local", [c.local_error.value for c in some]),
        ):
            np.testing.assert_allclose(sweep.errors[statics, of], values, rtol=1e-8, atol=1e-11)


def test_the_error_is_not_monotone() -> None:
    """A mode whose contribution another one cancels makes things worse alone, so counts cannot be bisected.

    Poles -0.3, -1, -1.05 with residues 8, 5, -5: the first alone is better than the first two.
    """
    model = StateSpace(A=np.diag([-0.3, -1.0, -1.05]), B=np.array([[8.0], [5.0], [-5.0]]), C=np.ones((1, 3)))
    sweep = compare(model, [], modes=find_modes(model), band=(1e-3, 2.0), times=False).sweep
    assert sweep is not None
    one, two, three = sweep.errors["none", "peak"]
    assert two > 10 * one
    assert three < 1e-12


def test_many_modes_are_thinned_and_the_ends_stay() -> None:
    """Over a hundred counts only every one of the first forty is tried, then evenly spread ones up to all."""
    model = line(400)
    modes = find_modes(model, count=150)
    omega = np.geomspace(1e-4, 0.3, 12)
    yard = yardstick_for(modes, full_response(model, omega, modes=modes), (1e-4, 0.3))
    sweep = sweep_of(modes, rank(modes, band=(1e-4, 0.3)), yard, "measured")
    assert sweep.kept[:40].tolist() == list(range(1, 41))
    assert sweep.kept[-1] == 150
    assert len(sweep.kept) <= 100
