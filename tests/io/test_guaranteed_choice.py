"""Choosing by the guaranteed error on the command line."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from modesieve import io
from modesieve.examples import chain
from modesieve.io.commands import status_of
from modesieve.reduce import find_modes, full_response
from modesieve.reduce.model import Damping, Rayleigh
from modesieve.reduce.truncation.records import ReducedModel


def test_two_tolerances_choose_two_models_and_both_hold(tmp_path: Path) -> None:
    """ "2 % up to a frequency" in one command: guaranteed, told what half would cost, and true on a fine grid."""
    model = chain(400, damping=Damping(base=Rayleigh(alpha=0.002, beta=0.01)))
    io.save(tmp_path / "model.h5", model)
    band = ("0.001rad/s", "0.05rad/s")
    states = []
    for share in (5, 0.01):
        out = tmp_path / f"small-{share}.h5"
        arguments = ["truncate", str(tmp_path / "model.h5"), "--band", *band, "--tolerance", f"{share} %"]
        assert status_of([*arguments, "--guaranteed", "-o", str(out)]) == 0
        small = io.load(out)
        assert isinstance(small, ReducedModel)
        assert small.error is not None
        assert small.error.certainty == "guaranteed"
        assert small.error.value <= share / 100
        assert any("half the tolerance" in note for note in small.notes)
        omega = np.linspace(0.001, 0.05, 400)
        G = full_response(model, omega, modes=find_modes(model, count=10)).G
        local = np.abs(G - small.response(omega)) / np.maximum(np.abs(G), 1e-3 * np.abs(G).max())
        assert local.max() <= share / 100 * (1 + 1e-9)
        states.append(small.states)
    assert states[0] < states[1]


def test_a_guaranteed_choice_needs_a_tolerance_and_a_band(tmp_path: Path) -> None:
    """Without them it is wrong usage."""
    io.save(tmp_path / "model.h5", chain(20))
    arguments = ["truncate", str(tmp_path / "model.h5"), "--keep", "3", "--guaranteed", "-o", str(tmp_path / "s.h5")]
    assert status_of(arguments) == 2
