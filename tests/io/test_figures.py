"""Figures: every plate drawn for odd models too, deterministic, labelled with channel and unit; the static report."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from modesieve.examples import chain, flow_plate, grid_plate, random_state_space, straight_beam, tube
from modesieve.io.figures import plates, save_figures, save_report
from modesieve.io.figures.sieve import shares, sieve_chart
from modesieve.reduce.comparison.compare import compare
from modesieve.reduce.comparison.records import Comparison
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.modal.records import Ranking
from modesieve.reduce.model import Damping, ModalRatio, Model
from modesieve.reduce.truncation.promise import with_guarantee
from modesieve.reduce.truncation.records import Count
from modesieve.reduce.truncation.truncate import truncate

ONE_PERCENT = Damping(base=ModalRatio(ratio=0.01))
MODELS: dict[str, tuple[Model, tuple[float, float]]] = {
    "structure": (chain(40, damping=ONE_PERCENT), (0.01, 1.0)),
    "one mode": (chain(1, damping=ONE_PERCENT), (0.1, 2.0)),
    "undamped": (chain(12), (0.01, 0.9)),
    "free": (straight_beam(12, 2.0, tube(0.1, 0.005), supports="free-free", damping=ONE_PERCENT), (0.0, 2000.0)),
    "thermal": (grid_plate(9, 9, sources=[(1, 2)], sensors=[(4, 4), (7, 7)], film=0.5), (0.01, 1.0)),
    "integrating": (grid_plate(7, 7, sources=[(1, 2)], sensors=[(4, 4)]), (0.01, 1.0)),
    "state space": (random_state_space(4), (0.1, 30.0)),
    "flow": (flow_plate(8, 6), (0.01, 1.0)),
}


def compared(name: str) -> tuple[Comparison, Ranking]:
    model, band = MODELS[name]
    table = rank(find_modes(model, band), band=band)
    count = max(1, sum(1 for reason in table.modes.always_kept if reason), len(table.modes) // 3)
    small = with_guarantee(truncate(table, Count(modes=min(count + 1, len(table.modes))), band=band))
    return compare(model, [small], modes=table.modes, band=band), table


@pytest.mark.parametrize("name", list(MODELS))
def test_every_plate_is_drawn(name: str, tmp_path: Path) -> None:
    """No model breaks a plate, and no warning escapes while drawing."""
    written = save_figures(*compared(name), tmp_path)
    assert tmp_path / "sieve.svg" in written
    assert tmp_path / "poles.svg" in written
    assert all(path.stat().st_size > 2000 for path in written)


def test_the_same_run_gives_the_same_bytes(tmp_path: Path) -> None:
    """Figures hold no date and no random identifiers."""
    comparison, table = compared("structure")
    first = save_figures(comparison, table, tmp_path / "a", formats=("svg", "pdf", "png"))
    second = save_figures(comparison, table, tmp_path / "b", formats=("svg", "pdf", "png"))
    assert [p.read_bytes() for p in first] == [p.read_bytes() for p in second]


def test_axes_carry_quantity_channel_and_unit() -> None:
    """A picture cut out of a report still says what it shows."""
    comparison, table = compared("structure")
    drawn = dict(plates(comparison, table))
    response = drawn["response"].axes[0]
    assert response.get_ylabel() == "end from push, m per N"
    assert drawn["response"].axes[1].get_xlabel() == "frequency, Hz"
    caption = drawn["sieve"].get_supxlabel()
    for part in ("fixed-free chain of 40 masses", "modes kept", "statics", "band", "guaranteed"):
        assert part in caption


def test_the_sieve_line_separates_kept_from_dropped() -> None:
    """With a kept set in rank order every kept grain lies above the line and every dropped one below."""
    comparison, table = compared("structure")
    kept = comparison.checks[0].small.kept
    axes = sieve_chart(table, kept, comparison.band, "").axes[0]
    line = next(one for one in axes.lines if len(set(one.get_ydata())) == 1 and one.get_linewidth() == 2.0)
    level, height = float(line.get_ydata()[0]), shares(table)
    assert all(height[n - 1] >= level for n in kept)
    assert all(height[n - 1] <= level for n in table.modes.numbers if n not in kept)


def test_thermal_charts_run_from_slow_to_fast() -> None:
    """The axis of a thermal plate shows times, slow at the left."""
    comparison, table = compared("thermal")
    for _, figure in list(plates(comparison, table))[:2]:
        assert figure.axes[0].xaxis_inverted()
        assert "time constant" in figure.axes[-1].get_xlabel()


def test_unknown_formats_are_refused(tmp_path: Path) -> None:
    """A format that is not known is named before anything is drawn."""
    with pytest.raises(ChoiceError, match="figure format"):
        save_figures(*compared("one mode"), tmp_path, formats=("gif",))


def test_the_static_report_has_words_and_plates(tmp_path: Path) -> None:
    """One PDF with the verdict and every plate; dollars and markup in names are shown as they are."""
    path = tmp_path / "report.pdf"
    comparison, table = compared("structure")
    save_report(path, comparison, table, ["# Verdict", "costs $5$ <b>"] + ["line"] * 80)
    data: Any = path.read_bytes()
    assert data.startswith(b"%PDF")
    assert data.count(b"/Type /Page\n") + data.count(b"/Type /Page ") >= 2 + 6
    assert np.isfinite(len(data))
