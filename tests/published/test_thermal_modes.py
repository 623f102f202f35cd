"""Thermal modes against published and closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from modesieve.examples import grid_plate, grid_plate_rates, ladder, ladder_rates
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.truncation.records import Count
from modesieve.reduce.truncation.truncate import truncate


def test_uniform_ladder_rates_and_elmore_delay() -> None:
    """RC ladder: -(4/RC) sin^2((2k-1) pi/(2(2N+1))); sum of 1/|lambda| is N (N+1)/2 RC (Elmore, J. Appl. Phys. 1948).

    Closed form from memory, recomputed to 9e-16; slowest 0.0223384/RC.
    """
    modes = find_modes(ladder(10))
    np.testing.assert_allclose(modes.decay_rate, ladder_rates(10), rtol=1e-12)
    assert np.sum(modes.time_constant) == pytest.approx(55.0, rel=1e-12)
    assert modes.decay_rate[0] == pytest.approx(0.0223384, rel=1e-5)


def test_signed_shares_of_the_far_end() -> None:
    """Shares of the DC gain alternate in sign and sum to one (own closed form): ranking by size must not lose signs."""
    modes = find_modes(ladder(10))
    shares = (modes.system.C[0] * modes.system.B[:, 0]) / modes.decay_rate  # type: ignore[union-attr]
    expected = [1.267310, -0.406804, 0.225888, -0.142857, 0.093370, -0.060106, 0.036578, -0.019900, 0.008659, -0.002139]
    np.testing.assert_allclose(shares, expected, atol=6e-7)
    assert shares.sum() == pytest.approx(1.0, abs=1e-12)
    table = rank(modes, by="static-share")
    assert table.order.tolist() == list(range(1, 11))
    np.testing.assert_allclose(table.measures["static-share"], np.abs(expected), atol=6e-7)


def test_truncation_of_the_driven_node_reaches_its_bound() -> None:
    """Ladder driven and read at the driven node: error keeping 1, 2, 3, 5 modes (own closed form).

    0.81058754, 0.62954289, 0.46449033, 0.20520262 at rest: all terms have one sign, so the sum bound is attained.
    """
    model = ladder(10, at="driven")
    modes = find_modes(model)
    band = (1e-6, 10.0)
    expected = {1: 0.81058754, 2: 0.62954289, 3: 0.46449033, 5: 0.20520262}
    for count, error in expected.items():
        small = truncate(rank(modes, by="decay", band=band), Count(modes=count), statics="none", band=band)
        check = compare(model, [small], modes=modes, omega=np.array([1e-6, 1e-3, 1.0]), band=band)
        assert check.checks[0].sigma.max() == pytest.approx(error, rel=1e-6)


def test_insulated_plate() -> None:
    """Grid plate without a film: closed-form rates with their repeats, and one integrating mode, always kept."""
    model = grid_plate(8, 8, sources=[(1, 2)], sensors=[(5, 5)])
    modes = find_modes(model)
    np.testing.assert_allclose(modes.decay_rate, grid_plate_rates(8, 8), atol=1e-12)
    assert modes.always_kept[0] == "integrating"
    assert modes.cluster[1] == (2, 3)
