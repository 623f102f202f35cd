"""Frequency grids: dense around resonances, never on a singular point."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.grid import densified, frequency_grid, undamped_omega


@dataclass
class Poles:
    eigenvalue: np.ndarray
    always_kept: tuple[str, ...]


def structure(omega: list[float], zeta: float = 0.01, rigid: int = 0) -> Poles:
    w = np.array(omega)
    lam = np.concatenate([np.zeros(rigid), -zeta * w + 1j * w * np.sqrt(1 - zeta**2)])
    return Poles(lam, ("rigid body",) * rigid + ("",) * len(w))


@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    omega=st.lists(st.floats(1e-2, 1e4), min_size=0, max_size=30),
    zeta=st.sampled_from([0.0, 1e-4, 0.02, 0.5]),
    low=st.floats(0, 50),
    width=st.floats(1e-1, 1e4),
)
def test_ascending_within_the_band(omega: list[float], zeta: float, low: float, width: float) -> None:
    """Whatever the modes, the grid is strictly ascending, inside the band and holds its upper end."""
    grid = frequency_grid(structure(omega, zeta), (low, low + width))
    assert np.all(np.diff(grid) > 0)
    assert grid[0] >= low
    assert grid[-1] <= low + width
    bare = undamped_omega(structure(omega, zeta))
    assert all(np.abs(grid - w).min() > 0.9e-4 * w for w in bare)
    if zeta:
        assert grid[0] == low
        assert grid[-1] == low + width


def test_half_power_points_of_every_mode_in_the_band() -> None:
    """Each lightly damped mode in the band has its peak and both half-power points on the grid."""
    modes = structure([10.0, 11.0, 57.0], 0.002)
    grid = frequency_grid(modes, (1.0, 30.0))
    for lam in modes.eigenvalue[:2]:
        for point in (lam.imag, lam.imag + lam.real, lam.imag - lam.real):
            assert np.abs(grid - point).min() < 1e-12 * point


def test_the_peak_of_a_narrow_resonance_is_not_missed() -> None:
    """zeta = 1e-5: the largest value on the grid is the true peak 1/(2 zeta) to 0.1 %."""
    zeta = 1e-5
    grid = frequency_grid(structure([123.4], zeta), (0.0, 1000.0))
    gain = 123.4**2 / np.abs(123.4**2 + 2j * zeta * 123.4 * grid - grid**2)
    assert gain.max() == pytest.approx(1 / (2 * zeta), rel=1e-3)


def test_middles_between_neighbours() -> None:
    """The middle between two resonances is a grid point: antiresonances lie there."""
    grid = frequency_grid(structure([10.0, 20.0]), (1.0, 40.0))
    assert np.abs(grid - 15.0).min() < 1e-9


def test_zero_only_without_rigid_body_modes() -> None:
    """Frequency 0 belongs to a band from 0, except where rigid-body or integrating modes make it infinite."""
    assert frequency_grid(structure([10.0]), (0.0, 40.0))[0] == 0.0
    free = frequency_grid(structure([10.0], rigid=6), (0.0, 40.0))
    assert free[0] > 0
    assert free[0] < 1.0


def test_real_poles_get_their_corner_frequencies() -> None:
    """For thermal models each 1/tau in the band is a point, the rest is logarithmic."""
    lam = -np.array([0.003, 0.2, 5.0]) + 0j
    grid = frequency_grid(Poles(lam, ("", "", "")), (0.0, 1.0))
    assert all(np.abs(grid - w).min() == 0 for w in (0.003, 0.2))
    assert np.sum(grid < 0.003) > 10


def test_many_modes_do_not_pass_the_cap() -> None:
    """500 modes in the band: every one keeps its peak and the grid stays below the cap."""
    modes = structure(list(np.linspace(10, 5000, 500)))
    grid = frequency_grid(modes, (0.0, 6000.0), cap=2000)
    assert len(grid) <= 2000
    assert all(np.abs(grid - lam.imag).min() < 1e-9 * lam.imag for lam in modes.eigenvalue)


@pytest.mark.parametrize("band", [(5.0, 5.0), (9.0, 1.0), (-1.0, 4.0), (0.0, np.inf), (np.nan, 1.0)])
def test_a_band_that_is_none_is_refused(band: tuple[float, float]) -> None:
    """Low above high, negative or infinite ends are named in hertz."""
    with pytest.raises(ChoiceError, match="band is not one"):
        frequency_grid(structure([3.0]), band)


def test_densified_keeps_the_samples() -> None:
    """Every sample stays, bit for bit, when points are put between."""
    omega = np.geomspace(0.1, 77.0, 23)
    dense = densified(omega, 6)
    np.testing.assert_array_equal(dense[::6], omega)
    assert len(dense) == 22 * 6 + 1
