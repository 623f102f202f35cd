"""The small model at work against published responses: a plane wall that cools, random loads on a deep beam."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.sparse as sp
from click.testing import CliRunner

from modesieve import io
from modesieve.examples.lines import tridiagonal
from modesieve.io.handover.command import simulate as simulate_command
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.model import Output, Thermal
from modesieve.reduce.response.simulate import random_response, simulate
from modesieve.reduce.response.small import SecondOrderModal
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import Count
from modesieve.reduce.truncation.truncate import truncate

HZ = 2 * np.pi


def wall(elements: int, biot: float) -> Thermal:
    """Half of a plane wall, thickness and diffusivity 1, a film of Bi at x = 1; input: the ambient; centre and face."""
    h = 1.0 / elements
    K = sp.csr_array(tridiagonal(elements + 1, 1.0, 1.0) / h).tolil()
    K[elements, elements] += biot
    E = (6 * sp.eye_array(elements + 1) - tridiagonal(elements + 1, 4.0, 4.0)) * (h / 6)
    F, C = np.zeros((elements + 1, 1)), np.zeros((2, elements + 1))
    F[-1], C[0, 0], C[1, -1] = biot, 1.0, 1.0
    outputs = (Output(name="centre", unit="K"), Output(name="face", unit="K"))
    return Thermal(K=sp.csr_array(K), E=sp.csr_array(E), F=F, C=C, outputs=outputs)


# First four roots of zeta tan zeta = Bi and C_n = 4 sin z/(2 z + sin 2 z): Incropera and DeWitt, Fundamentals of Heat
# and Mass Transfer, Table 5.1 and App. B.3 (from memory, recomputed).
WALLS = {
    1.0: ([0.860334, 3.42562, 6.43730, 9.52933], [1.11913, -0.151692, 0.046594, -0.021668]),
    10.0: ([1.42887, 4.30580, 7.22811, 10.2003], None),
    0.1: ([0.311053, 3.17310, 6.29906, 9.43538], None),
}


@pytest.mark.parametrize("biot", list(WALLS))
def test_plane_wall_cools_as_the_series_says(biot: float) -> None:
    """Decay rates are the squared roots; from a uniform start the kept modes follow the one-term and full series."""
    roots, coefficients = WALLS[biot]
    model = wall(200, biot)
    modes = find_modes(model, count=12)
    np.testing.assert_allclose(np.sqrt(modes.decay_rate[:4]), roots, rtol=3e-4)  # 200 linear elements: h^2 zeta^2/24
    assert modes.uniform is not None
    amplitude = modes.system.C[0] * modes.uniform  # type: ignore[union-attr]
    zeta = np.array(roots)
    exact = 4 * np.sin(zeta) / (2 * zeta + np.sin(2 * zeta))
    np.testing.assert_allclose(amplitude[:4], exact, rtol=2e-3)
    if coefficients is not None:
        np.testing.assert_allclose(exact, coefficients, rtol=1e-4)
    band = (0.01, 50.0)
    small = truncate(rank(modes, by="decay", band=band), Count(modes=4), band=band)
    assert small.uniform is not None
    t = np.array([0.0, 0.2, 0.5, 1.0])
    run = simulate(small.system, t, np.zeros((4, 1)), state=small.uniform)
    series = np.exp(-np.outer(t, zeta**2)) @ exact
    np.testing.assert_allclose(run.y[1:, 0], series[1:], rtol=2e-3)


def oscillator(static: float, hz: float, zeta: float) -> SecondOrderModal:
    x = (2 * np.pi * hz) ** 2
    return SecondOrderModal(
        x=[x], d=[2 * zeta * np.sqrt(x)], eta=[0.0], b=[[static * x]],
        cq=[[1.0]], cv=[[0.0]], ca=[[0.0]], D=[[0.0]], X=[[0.0]],
    )  # fmt: skip


def test_5r_peak_density_is_the_squared_harmonic_peak() -> None:
    """NAFEMS R0016 test 5R (seen): white density (1e6 N/m)^2/Hz gives a peak of 180.90 mm^2/Hz at 42.65 Hz.

    The published number is 13.45^2, the squared one-mode peak of 5H (static 0.538 mm times 25).
    """
    one = oscillator(0.538, 42.65, 0.02)
    hz = np.linspace(42, 43, 2001)
    density = np.abs(one.response(HZ * hz)[:, 0, 0]) ** 2
    assert density.max() == pytest.approx(180.90, rel=2e-3)
    assert hz[density.argmax()] == pytest.approx(42.65, abs=0.03)
    wide = np.unique(np.concatenate([np.linspace(0, 5000, 4001), np.linspace(35, 50, 20_001)]))
    rms = random_response(one, wide, np.ones((len(wide), 1))).rms[0]
    # White noise on one oscillator: variance = pi/(4 zeta) f0 static^2 S (textbook, e.g. Clough and Penzien; memory).
    assert rms == pytest.approx(np.sqrt(np.pi / (4 * 0.02) * 42.65) * 0.538, rel=1e-3)


def test_random_loads_through_the_command(tmp_path: Path) -> None:
    """A table over hz gives root mean squares with a guaranteed error that holds against all modes."""
    from modesieve.examples import chain
    from modesieve.reduce.model import Damping, Rayleigh

    model = chain(400, damping=Damping(base=Rayleigh(alpha=0.002, beta=0.002)))
    band = (0.001, 0.05)
    modes = find_modes(model, count=10)
    small = with_guarantee(truncate(rank(modes, band=band), Count(modes=6), band=band))
    assert small.guarantee is not None
    assert small.guarantee.holds, small.guarantee.reason
    io.save(tmp_path / "small.h5", small)
    (tmp_path / "psd.csv").write_text("hz,push\n0.0005,2\n0.007,2\n", encoding="utf-8")
    arguments = [str(tmp_path / "small.h5"), str(tmp_path / "psd.csv"), "-o", str(tmp_path / "rms.csv")]
    result = CliRunner().invoke(simulate_command, arguments, catch_exceptions=False)
    assert result.exit_code == 0, result.output
    head, row = (tmp_path / "rms.csv").read_text("utf-8").splitlines()
    assert head == "output,unit,rms,error at most"
    name, unit, rms, error = row.split(",")
    assert (name, unit) == ("end", "m")
    hz = np.linspace(0.0005, 0.007, 60_001)
    truth = random_response(find_modes(model).system, hz, np.full((len(hz), 1), 2.0)).rms[0]
    assert abs(float(rms) - truth) <= float(error) + 1e-4 * truth  # 1e-4: the two grids of the integral
    assert float(error) < 0.05 * truth
