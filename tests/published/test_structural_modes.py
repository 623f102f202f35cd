"""Structural modes against published values. Where a figure is quoted from memory, the line says so."""

from __future__ import annotations

import numpy as np
import pytest

from modesieve.examples import Section, chain, chain_omega, frame, rod, straight_beam, structure_of
from modesieve.examples.frames import DIRECTIONS
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.model import Damping, Input, ModalRatio, Output, Structure
from modesieve.reduce.truncation.records import Count
from modesieve.reduce.truncation.truncate import truncate

EULER = Section(E=1.0, G=1.0, rho=1.0, area=1.0, Iy=1.0, Iz=1.0, J=1.0)


def without_rotary_inertia(elements: int, supports: str) -> Structure:
    """A beam so slender that rotary inertia is far below the tolerance: EI = rho A = 1, length 1."""
    section = Section(E=1e8, G=1e8, rho=1.0, area=1.0, Iy=1e-8, Iz=1e-8, J=1e-8)
    return straight_beam(elements, 1.0, section, supports=supports)


# R. D. Blevins, Formulas for Natural Frequency and Mode Shape, 1979, Table 8-1 (from memory; roots recomputed with
# mpmath to the digits given). 80 cubic elements leave 3e-7 on the fifth root, falling with the fourth power.
BEAMS = {
    "clamped-free": (0, [1.87510406871, 4.69409113297, 7.85475743824, 10.9955407349, 14.137168391]),
    "clamped-clamped": (0, [4.73004074486, 7.8532046241, 10.995607838, 14.1371654913]),
    "free-free": (2, [4.73004074486, 7.8532046241, 10.995607838, 14.1371654913]),
    "clamped-pinned": (0, [3.92660231205, 7.06858274563, 10.2101761228, 13.3517687778]),
    "pinned-pinned": (0, [np.pi, 2 * np.pi, 3 * np.pi, 4 * np.pi]),
}


@pytest.mark.parametrize("supports", list(BEAMS))
def test_uniform_euler_beams(supports: str) -> None:
    """Roots b L of the five classical beams, and the rigid-body modes of the free one."""
    zeros, roots = BEAMS[supports]
    modes = find_modes(without_rotary_inertia(80, supports), count=zeros + len(roots))
    assert modes.always_kept[:zeros] == ("rigid body",) * zeros
    assert modes.certificate.complete in ("counted", "all")
    found = np.sqrt(modes.omega[zeros : zeros + len(roots)])
    np.testing.assert_allclose(found, roots, rtol=1e-6)


@pytest.mark.parametrize("ends", ["fixed-free", "fixed-fixed", "free-free"])
def test_chains_of_masses(ends: str) -> None:
    """Lattice frequencies (Blevins 1979, Table 6-2, from memory; exact), every one of them."""
    modes = find_modes(chain(10, ends=ends))
    np.testing.assert_allclose(modes.omega, chain_omega(10, ends=ends), rtol=1e-12, atol=1e-12)
    assert modes.certificate.complete == "all"
    assert modes.always_kept[0] == ("rigid body" if ends == "free-free" else "")


def test_chain_vectors_and_tip_compliance() -> None:
    """Vectors of the fixed-free chain, tip compliance 10, its shares and the same numbers as effective masses.

    Own closed form: phi_j(i) = 2/sqrt(2n+1) sin(i (2j-1) pi/(2n+1)), sum phi_j(n)^2/w_j^2 = n/k.
    """
    n = 10
    modes = find_modes(chain(n))
    i, j = np.arange(1, n + 1)[:, None], np.arange(1, n + 1)
    exact = 2 / np.sqrt(2 * n + 1) * np.sin(i * (2 * j - 1) * np.pi / (2 * n + 1))
    np.testing.assert_allclose(np.abs(np.sum(exact * modes.vectors, axis=0)), 1.0, rtol=1e-12)
    assert modes.static is not None
    np.testing.assert_allclose(modes.static, [[10.0]], rtol=1e-12)
    shares = 100 * (modes.vectors[-1] / modes.omega) ** 2 / 10
    np.testing.assert_allclose(shares[:5], [84.793, 9.141, 3.091, 1.429, 0.749], atol=6e-4)
    assert modes.effective_mass is not None
    assert modes.total_mass is not None
    fractions = modes.effective_mass[:, 0] / modes.total_mass[0]
    np.testing.assert_allclose(100 * fractions, shares, rtol=1e-10)


def test_effective_masses_of_a_cantilever() -> None:
    """Base-excited cantilever (Clough and Penzien; from memory, recomputed with mpmath): fractions and sums."""
    modes = find_modes(without_rotary_inertia(60, "clamped-free"), count=6)
    assert modes.effective_mass is not None
    fractions = modes.effective_mass[:5, 1]  # of rho A L = 1: the support's own half element is not in r^T M r
    np.testing.assert_allclose(fractions, [0.61307609, 0.18830036, 0.064732232, 0.03308689, 0.020013999], atol=2e-5)
    np.testing.assert_allclose(np.cumsum(fractions)[3:5], [0.89920, 0.91921], atol=5e-5)


def test_effective_masses_of_a_rod() -> None:
    """Fixed-free rod: 8/((2n-1) pi)^2 of the mass (closed form); two modes pass 90 %."""
    modes = find_modes(rod(2000), count=4)
    assert modes.effective_mass is not None
    exact = 8 / ((2 * np.arange(1, 5) - 1) * np.pi) ** 2
    np.testing.assert_allclose(modes.effective_mass[:4, 0], exact, rtol=3e-5)


def deep_beam() -> Structure:
    """NAFEMS R0015 test 5 (FV5): 10 m, 2 x 2 m, E 200e9, nu 0.3, rho 8000; x = y = z = rx = 0 at A, y = z = 0 at B.

    Timoshenko elements with Cowper's shear factor 10 (1 + nu)/(12 + 11 nu).
    """
    nu, side, elements = 0.3, 2.0, 100
    inertia = side**4 / 12
    section = Section(E=200e9, G=200e9 / 2.6, rho=8000.0, area=side**2, Iy=inertia, Iz=inertia,
                      J=0.140577 * side**4, shear=10 * (1 + nu) / (12 + 11 * nu))  # fmt: skip
    nodes = np.column_stack([np.linspace(0, 10, elements + 1), np.zeros((elements + 1, 2))])
    body = frame(nodes, np.column_stack([np.arange(elements), np.arange(1, elements + 1)]), [section] * elements)
    fixed = [body.row(0, d) for d in DIRECTIONS[:4]] + [body.row(elements, d) for d in ("y", "z")]
    middle = body.row(elements // 2, "y")
    return structure_of(body, fixed=fixed, loads=[(middle, Input(name="push", unit="N"))],
                        sensors=[(middle, Output(name="middle", unit="m"))],
                        damping=Damping(base=ModalRatio(ratio=0.02)), title="deep beam")  # fmt: skip


def test_deep_simply_supported_beam() -> None:
    """FV5 through the whole job: flexural pairs 42.65, 148.15, 283.47; torsion 71.20, 213.61; axial 125.00 Hz.

    Published values (seen). Torsion: the published constant belongs to polar inertia rho (Iy + Iz) and St Venant J.
    """
    model = deep_beam()
    band = (0.0, 2 * np.pi * 290)
    modes = find_modes(model, band)
    published = [42.650, 42.650, 71.20, 125.00, 148.15, 148.15, 213.61, 283.47, 283.47]
    np.testing.assert_allclose(modes.frequency_hz[:9], published, rtol=5e-4)
    assert modes.cluster[0] == (1, 2)
    assert modes.certificate.complete == "counted" or modes.certificate.complete == "all"
    table = rank(modes, band=band)
    small = truncate(table, Count(modes=3), band=band)
    assert len(small.kept) == 3
    # A push in y at the middle reaches one mode of every flexural pair, no torsion and no axial mode.
    assert {1, 2} & set(small.kept)
    assert not {3, 4, 7} & set(small.kept)
    check = compare(model, [small], modes=modes, band=band)
    assert check.checks[0].peak_error.value < 1e-3
