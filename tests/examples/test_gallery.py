"""The gallery: exact answers, sizes, and the two demos from model to verdict."""

from __future__ import annotations

import runpy
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import modesieve.examples
from modesieve.examples import cold_plate, flow_plate, mast, random_state_space, solid, straight_beam, tube
from modesieve.io.run import run
from modesieve.io.settings import Settings
from modesieve.reduce.modal import find_modes


def test_solid_has_the_sizes_it_promises() -> None:
    """24 x 16 x 10 hexahedra clamped at one end: 13,464 unknowns, symmetric, with labels, and its mass is rho V."""
    model = solid(24, 16, 10)
    assert model.n == 13_464
    assert abs(model.K - model.K.T).max() <= 1e-9 * abs(model.K).max()
    free = solid(4, 3, 2, clamped=False)
    r = np.zeros(free.n)
    r[0::3] = 1.0
    assert r @ (free.M @ r) == pytest.approx(7850 * 2.0 * 0.4 * 0.1, rel=1e-12)
    assert np.abs(free.K @ r).max() <= 1e-6 * abs(free.K).max()


def test_free_solid_has_six_rigid_modes() -> None:
    """A free block has six rigid-body modes, all named."""
    modes = find_modes(solid(5, 3, 2, clamped=False), count=10)
    assert modes.always_kept[:7] == ("rigid body",) * 6 + ("",)


def test_bending_of_a_tube_approaches_the_slender_beam() -> None:
    """A slender clamped tube: (1.8751)^2 sqrt(EI/(rho A L^4)), Blevins 1979, Table 8-1 (from memory)."""
    section, length = tube(0.05, 0.003), 5.0
    modes = find_modes(straight_beam(20, length, section), count=1)
    exact = 1.87510406871**2 * np.sqrt(section.E * section.Iz / (section.rho * section.area * length**4))
    assert modes.omega[0] == pytest.approx(exact, rel=2e-3)


def test_flow_plate_is_stable_and_not_symmetric() -> None:
    """Upwind flow makes A non-symmetric; every eigenvalue stays on the left."""
    model = flow_plate(12, 9)
    A = model.A.toarray()
    assert np.abs(A - A.T).max() > 0.1
    assert np.linalg.eigvals(A).real.max() < 0


def test_random_systems_are_stable_and_repeatable() -> None:
    """The same seed gives the same system, and its repeated pole forms one group."""
    one, two = random_state_space(3, repeats=3), random_state_space(3, repeats=3)
    np.testing.assert_array_equal(one.A, two.A)
    assert np.linalg.eigvals(one.A).real.max() < 0
    assert max(len(block) for block in find_modes(one).system.blocks) == 3  # type: ignore[union-attr]


@pytest.mark.parametrize("make", [mast, cold_plate])
def test_demos_meet_their_tolerance(make: Any) -> None:
    """Each demo ends with a guaranteed error within what it asked for."""
    demo = make()
    settings = Settings(band=demo.band, choice=demo.tolerance, statics=demo.statics)
    result = run(demo.model, settings)
    guarantee = result.reduced.guarantee
    assert guarantee is not None
    assert guarantee.holds, guarantee.reason
    assert result.reduced.error is not None
    assert result.reduced.error.value <= demo.tolerance.value
    assert 300 <= demo.model.n <= 3000


def test_the_mast_repeats_its_bending_pairs() -> None:
    """A quarter turn maps the mast onto itself: its first modes come in equal pairs."""
    modes = find_modes(mast().model, mast().band)
    assert modes.cluster[0] == (1, 2)
    assert modes.omega[0] == pytest.approx(modes.omega[1], rel=1e-9)


SCRIPTS = sorted(Path(modesieve.examples.__file__).parent.glob("script_*.py"))


@pytest.mark.parametrize("script", SCRIPTS, ids=lambda p: p.stem)
def test_example_scripts_run(script: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: Any) -> None:
    """Every example script runs from an empty folder and says something."""
    monkeypatch.chdir(tmp_path)
    runpy.run_path(str(script), run_name="__main__")
    assert capsys.readouterr().out.strip()


def test_there_are_example_scripts() -> None:
    """The list above is not empty."""
    assert len(SCRIPTS) >= 2
