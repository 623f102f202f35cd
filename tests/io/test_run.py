"""A run from model and settings to its folder."""

import json
import os
from dataclasses import replace

import numpy as np
import pytest

from modesieve import io
from modesieve.examples import chain, ladder
from modesieve.io.keep_list import read_keep_list
from modesieve.io.report import run_text
from modesieve.io.run import run, write_run
from modesieve.io.settings import Settings
from modesieve.reduce.errors import ChoiceError, FileError
from modesieve.reduce.fingerprint import fingerprint
from modesieve.reduce.model import Damping, ModalRatio, Structure
from modesieve.reduce.truncation.records import Count, Keep, Tolerance

HZ = 2 * np.pi
SETTINGS = Settings(band=(0.0, 4 * HZ), choice=Tolerance(value=0.02), figures=())


def damped_chain():
    return chain(30, k=4e3, damping=Damping(base=ModalRatio(ratio=0.01)))


@pytest.fixture(scope="module")
def result():
    return run(damped_chain(), SETTINGS)


def test_a_run_is_a_plain_function(result):
    """The same model and settings give the same result, and every stage is in it."""
    again = run(damped_chain(), SETTINGS)
    assert again.reduced.kept == result.reduced.kept
    assert again.reduced.error.value == pytest.approx(result.reduced.error.value, rel=1e-9)
    assert result.comparison.checks[0].small is result.reduced
    assert result.comparison.modes.origin is result.modes.origin


def test_settings_reach_their_stages():
    """Measure, count, statics and what the comparison makes follow the settings."""
    settings = replace(
        SETTINGS, choice=Count(modes=4), by="coupling", statics="none", count=20, sweep=False, times=False
    )
    found = run(damped_chain(), settings)
    assert (found.ranking.by, found.reduced.statics, len(found.reduced.kept)) == ("coupling", "none", 4)
    assert len(found.modes) >= 20
    assert found.comparison.sweep is None
    assert found.comparison.step is None


def test_progress_is_told_and_can_interrupt():
    """The listener hears the stages; what it raises ends the run."""
    heard = set()
    run(damped_chain(), SETTINGS, lambda report: heard.add(report.stage))
    assert heard

    def stop(report):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run(damped_chain(), SETTINGS, stop)


def test_models_without_channels_are_refused():
    """A run needs something to compare."""
    model = chain(4)
    with pytest.raises(ChoiceError, match="inputs and outputs"):
        run(Structure(K=model.K, M=model.M), SETTINGS)


def test_the_folder_holds_what_is_listed(result, tmp_path):
    """Every listed file exists, nothing else does, and each can be read back."""
    written = write_run(tmp_path / "out", result, brief="model = 'x'\n", report=run_text(result))
    listed = {str(one.path.relative_to(tmp_path / "out")) for one in written}
    found = {
        os.path.relpath(os.path.join(where, name), tmp_path / "out")
        for where, _, names in os.walk(tmp_path / "out")
        for name in names
    }
    assert listed == found
    assert {"small.h5", "modes.h5", "keep.toml", "summary.json", "report.txt", "brief.toml"} <= found
    small = io.load(tmp_path / "out/small.h5")
    assert small.kept == result.reduced.kept
    w = np.linspace(0, 4 * HZ, 50)
    assert np.array_equal(small.response(w), result.reduced.response(w))
    choice, mark = read_keep_list(tmp_path / "out/keep.toml")
    assert choice == Keep(numbers=result.reduced.kept)
    assert mark == fingerprint(damped_chain())
    summary = json.loads((tmp_path / "out/summary.json").read_text())
    assert summary["verdict"] == result.verdict.sentence
    assert summary["modes"]["count"] == len(result.modes)
    assert (tmp_path / "out/report.txt").read_text() == run_text(result)


def test_figures_in_every_format(tmp_path):
    """Figures come in the formats asked for, none without formats."""
    found = run(ladder(20), Settings(band=(1e-3, 0.3), choice=Count(modes=3), figures=("svg", "png")))
    written = write_run(tmp_path, found)
    suffixes = {one.path.suffix for one in written if one.path.parent.name == "figures"}
    assert suffixes == {".svg", ".png"}


def test_writing_again_replaces_whole_files(result, tmp_path):
    """A second run into the same folder leaves the same set of files, and no temporary ones."""
    first = write_run(tmp_path, result, brief="a = 1\n")
    second = write_run(tmp_path, result, brief="b = 2\n")
    assert [one.path for one in first] == [one.path for one in second]
    assert (tmp_path / "brief.toml").read_text() == "b = 2\n"
    assert not [name for name in os.listdir(tmp_path) if name.endswith(".part")]


def test_a_file_in_the_way_is_refused(result, tmp_path):
    """An output folder that is a file is refused, and the file stays."""
    (tmp_path / "out").write_text("mine")
    with pytest.raises(FileError, match="folder"):
        write_run(tmp_path / "out", result)
    assert (tmp_path / "out").read_text() == "mine"
