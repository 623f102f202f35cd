"""The command line as a person or a script meets it: output, files, statuses, messages."""

import json
import os
import re
import signal
import subprocess
import sys
import time

import numpy as np
import pytest

from modesieve import io
from modesieve.examples import chain, ladder
from modesieve.io.commands import COMMANDS, status_of
from modesieve.reduce.model import Damping, ModalRatio, Structure

HZ = 2 * np.pi


@pytest.fixture
def here(tmp_path, monkeypatch):
    """An empty current folder."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def chain_file(here):
    """A chain of 30 masses with frequencies from 0.5 to 20 Hz and 1 % damping."""
    io.save("chain.h5", chain(30, k=4e3, damping=Damping(base=ModalRatio(ratio=0.01))))
    return "chain.h5"


@pytest.fixture
def command(capsys):
    """Run a command line; gives its status, standard output and standard error."""

    def run(*arguments):
        status = status_of([str(a) for a in arguments])
        captured = capsys.readouterr()
        return status, captured.out, captured.err

    return run


@pytest.fixture
def done(command):
    """Run a command line that must succeed; gives its standard output."""

    def run(*arguments):
        status, out, err = command(*arguments)
        assert status == 0, err
        return out

    return run


# ---- each command ----------------------------------------------------------------------------------------------------


def test_help_lists_every_command(done):
    """--help names every command with one line each."""
    text = done("--help")
    assert all(f"\n  {name} " in text for name in COMMANDS)


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_its_help(done, name):
    """Every command in the table exists and explains itself."""
    assert done(name, "--help").startswith(f"Usage: modesieve {name}")


def test_version(done):
    """--version prints name and number."""
    assert re.fullmatch(r"modesieve \d+\.\d+\.\d+\n", done("--version"))


def test_inspect_reports_a_model(done, chain_file):
    """inspect says what the model is, that its matrices are fit, and what would be done."""
    text = done("inspect", chain_file)
    for expected in ("structure, 30 unknowns, 1 inputs, 1 outputs", "positive definite", "Next", "total mass"):
        assert expected in text


def test_inspect_json_of_all_three_kinds_of_file(done, chain_file):
    """inspect --json tells models, modes and reduced models apart."""
    done("modes", chain_file, "--count", 5, "-o", "m.h5")
    done("truncate", chain_file, "--modes", "m.h5", "--keep", 3, "-o", "s.h5")
    found = [json.loads(done("inspect", file, "--json")) for file in (chain_file, "m.h5", "s.h5")]
    assert [one["holds"] for one in found] == ["model", "modes", "reduced model"]
    assert found[0]["total_mass"] == {"x": 30.0, "y": 0.0, "z": 0.0, "unit": "mass unit of the matrices"}
    assert found[2]["kept"] == [1, 2, 3]


def test_inspect_prints_problems_and_still_ends_well(done, here):
    """inspect describes a model that cannot be used instead of refusing it."""
    io.save("bad.h5", Structure(K=np.eye(2), M=np.diag([1.0, -1.0])))
    text = done("inspect", "bad.h5")
    assert "the mass is indefinite" in text
    assert "nothing until the problems above are solved" in text


def test_modes_json_has_the_promised_keys(done, chain_file):
    """modes --json: certificate, and per mode frequency, damping, residual, cluster and every measure."""
    found = json.loads(done("modes", chain_file, "--band", "0Hz", "3 Hz", "--json"))
    assert found["complete"] in ("all", "counted")
    assert found["count"] == len(found["modes"])
    one = next(mode for mode in found["modes"] if mode["number"] == 1)
    exact = 2 * np.sqrt(4e3) * np.sin(np.pi / 122) / HZ  # lattice frequencies of a fixed-free chain
    assert one["frequency_hz"] == pytest.approx(exact, rel=1e-10)
    assert one["damping_ratio"] == pytest.approx(0.01, rel=1e-9)
    assert one["time_constant_s"] == pytest.approx(1 / (0.01 * exact * HZ), rel=1e-9)
    assert one["decay_rate_per_s"] == pytest.approx(-one["eigenvalue_per_s"][0])
    assert {"decay", "coupling", "peak-share", "band-share", "static-share"} <= set(one["measures"])
    assert (one["cluster"], one["always_kept"]) == ([], "")
    assert one["residual"] < 1e-9


def test_null_comes_with_its_reason(done, here):
    """An undamped model's infinite time constants and measures are null with a reason beside them."""
    io.save("u.h5", chain(4))
    one = json.loads(done("modes", "u.h5", "--json"))["modes"][0]
    assert one["time_constant_s"] is None
    assert one["time_constant_s_reason"]
    undefined = [name for name, value in one["measures"].items() if value is None]
    assert undefined
    assert set(one["measures_reason"]) == set(undefined)


def test_modes_are_listed_in_the_order_of_the_measure(done, chain_file):
    """--by orders the table."""
    modes = json.loads(done("modes", chain_file, "--by", "static-share", "--json"))["modes"]
    shares = [mode["measures"]["static-share"] for mode in modes]
    assert shares == sorted(shares, reverse=True)


def test_models_without_channels_have_modes(done, here):
    """Neither load nor outputs are needed to compute and list modes."""
    model = chain(6)
    io.save("bare.h5", Structure(K=model.K, M=model.M))
    assert "6 computed" in done("modes", "bare.h5")


def test_band_takes_quantities_quoted_or_not(done, chain_file):
    """0Hz and "0 Hz" mean the same; rad/s too."""
    texts = (("0Hz", "3Hz"), ("0 Hz", "3 Hz"), ("0 rad/s", f"{3 * HZ} rad/s"))
    counts = {json.loads(done("modes", chain_file, "--band", *ends, "--json"))["count"] for ends in texts}
    assert len(counts) == 1


def test_band_takes_time_constants_for_thermal_models(done, here):
    """A thermal band may be two times in either order."""
    io.save("t.h5", ladder(40, R=1.0, C=1.0))
    found = [
        json.loads(done("truncate", "t.h5", "--band", *ends, "-o", "s.h5", "--json"))
        for ends in (("2 s", "30 min"), ("30 min", "2 s"))
    ]
    assert found[0]["band_hz"] == found[1]["band_hz"] == pytest.approx([1 / 1800 / HZ, 0.5 / HZ])


def test_truncate_keeps_a_count(done, chain_file):
    """--keep N keeps the first N of the ranking and writes a small model that loads."""
    found = json.loads(done("truncate", chain_file, "--band", "0Hz", "4Hz", "--keep", 4, "-o", "s.h5", "--json"))
    assert (found["kept_count"], found["states"], found["kept"]) == (4, 8, [1, 2, 3, 4])
    assert found["error"]["certainty"] == "measured"
    assert found["error"]["relative_to"] == "local"
    assert found["error"]["pair"] == ["push", "end"]
    assert 0 <= found["error"]["at_hz"] <= 4 * (1 + 1e-12)
    assert io.load("s.h5").kept == (1, 2, 3, 4)


def test_truncate_meets_a_tolerance(done, chain_file):
    """--tolerance keeps as few modes as pass, of local unless told otherwise."""
    band = ("--band", "0Hz", "4Hz")
    loose = json.loads(done("truncate", chain_file, *band, "--tolerance", "20%", "-o", "a.h5", "--json"))
    tight = json.loads(done("truncate", chain_file, *band, "--tolerance", "2 %", "-o", "b.h5", "--json"))
    peak = json.loads(done("truncate", chain_file, *band, "--tolerance", "2 %", "--of", "peak", "-o", "c.h5", "--json"))
    assert loose["error"]["value"] <= 0.2
    assert tight["error"]["value"] <= 0.02
    assert peak["error"]["value"] <= 0.02
    assert loose["kept_count"] <= tight["kept_count"]
    assert (tight["error"]["relative_to"], peak["error"]["relative_to"]) == ("local", "peak")


def test_truncate_meets_an_absolute_tolerance_in_another_unit(done, chain_file):
    """A tolerance in mm speaks of outputs in m."""
    found = json.loads(
        done("truncate", chain_file, "--band", "0Hz", "4Hz", "--tolerance", "0.01 mm", "-o", "s.h5", "--json")
    )
    assert found["error"]["unit"] == "m"
    assert 0 < found["error"]["value"] <= 1e-5


def test_truncate_by_thresholds_and_by_band(done, chain_file):
    """--above may repeat and keeps what passes any; --band alone keeps every mode in it."""
    band = ("--band", "0Hz", "4Hz")
    inside = json.loads(done("truncate", chain_file, *band, "-o", "a.h5", "--json"))["kept"]
    exact = [i + 1 for i in range(30) if 2 * np.sqrt(4e3) * np.sin((2 * i + 1) * np.pi / 122) <= 4 * HZ]
    assert inside == exact
    slow = json.loads(done("truncate", chain_file, *band, "--above", "decay=10s", "-o", "b.h5", "--json"))["kept"]
    big = json.loads(done("truncate", chain_file, *band, "--above", "peak-share=50%", "-o", "b.h5", "--json"))["kept"]
    both = json.loads(
        done("truncate", chain_file, *band, "--above", "decay=10s", "--above", "peak-share=0.5", "-o", "b.h5", "--json")
    )["kept"]
    assert sorted({*slow, *big}) == both


def test_tail_levels_add_states_and_take_error_away(done, chain_file):
    """--statics vectors adds pseudo-modes; the second level brings the error down further."""
    arguments = ("--band", "0Hz", "4Hz", "--keep", 9, "--statics", "vectors", "-o", "s.h5", "--json")
    one, two = (json.loads(done("truncate", chain_file, *arguments, "--levels", levels)) for levels in (1, 2))
    assert 18 < one["states"] < two["states"]
    assert two["error"]["value"] < one["error"]["value"]


def test_keep_list_goes_round(done, chain_file, here):
    """A keep list from the command line's own folder chooses the same modes again."""
    (here / "keep.toml").write_text("keep = [2, 5]\n")
    found = json.loads(done("truncate", chain_file, "--keep-list", "keep.toml", "-o", "s.h5", "--json"))
    assert found["kept"] == [2, 5]


def test_compare_json_has_the_promised_keys(done, chain_file):
    """compare --json: accuracy of the full solution, and per model relative, absolute and static errors."""
    band = ("--band", "0Hz", "4Hz")
    done("truncate", chain_file, *band, "--keep", 3, "-o", "a.h5")
    done("truncate", chain_file, *band, "--keep", 6, "--statics", "none", "-o", "b.h5")
    found = json.loads(done("compare", chain_file, "a.h5", "b.h5", "--json"))
    assert found["frequency_count"] > 20
    assert found["worst_backward_error"] < 1e-12
    assert found["worst_residual_of_full"] < 1e-8
    assert [one["file"] for one in found["models"]] == ["a.h5", "b.h5"]
    for one in found["models"]:
        assert set(one["max_relative_error"]) == {"peak", "local"}
        assert one["absolute_error"][0]["unit"] == "m"
        assert one["certainty"] == "measured"
    assert found["models"][0]["dc_error"] < 1e-10
    assert found["models"][1]["dc_error"] > 1e-6


def test_compare_takes_modes_from_a_file(done, chain_file):
    """With --modes the same errors come out."""
    done("modes", chain_file, "--band", "0Hz", "6Hz", "-o", "m.h5")
    done("truncate", chain_file, "--modes", "m.h5", "--band", "0Hz", "4Hz", "--keep", 4, "-o", "a.h5")
    plain = json.loads(done("compare", chain_file, "a.h5", "--json"))["models"][0]
    given = json.loads(done("compare", chain_file, "a.h5", "--modes", "m.h5", "--json"))["models"][0]
    assert given["max_relative_error"]["peak"] == pytest.approx(plain["max_relative_error"]["peak"], rel=1e-6)


def test_free_bodies_have_no_static_error_and_say_why(done, here):
    """A free-free model's errors are finite and its error at 0 Hz is null with a reason."""
    io.save("free.h5", chain(20, k=4e3, ends="free-free", damping=Damping(base=ModalRatio(ratio=0.01))))
    done("truncate", "free.h5", "--band", "0Hz", "5Hz", "--keep", 6, "-o", "s.h5")
    one = json.loads(done("compare", "free.h5", "s.h5", "--json"))["models"][0]
    assert one["dc_error"] is None
    assert "rigid body" in one["dc_reason"]
    assert np.isfinite(list(one["max_relative_error"].values())).all()


def test_compare_writes_numbers_and_figures(done, chain_file, here):
    """--out gets the JSON and the figures."""
    done("truncate", chain_file, "--band", "0Hz", "4Hz", "--keep", 3, "-o", "a.h5")
    text = done("compare", chain_file, "a.h5", "--out", "held")
    assert json.loads((here / "held/comparison.json").read_text())["models"][0]["file"] == "a.h5"
    assert list((here / "held/figures").glob("*.svg"))
    assert "comparison.json" in text


def test_demo_leaves_a_folder_that_can_be_run_again(done, here):
    """The demo ends with a verdict and a folder whose brief repeats the job to the same numbers."""
    text = done("demo", "--out", "first")
    assert "computed modes are kept" in text
    assert "local codes and licensed practice decide" in text
    done("run", "first/brief.toml", "--out", "second")
    first, second = (json.loads((here / name / "summary.json").read_text()) for name in ("first", "second"))
    assert first["reduced"]["kept"] == second["reduced"]["kept"]
    assert second["reduced"]["error"]["value"] == pytest.approx(first["reduced"]["error"]["value"], rel=1e-6)


def test_thermal_demo_speaks_in_kelvin(done, here):
    """Every sensor of the cold plate has its error in kelvin, with all sources at their power."""
    text = done("demo", "thermal")
    lines = [line for line in text.splitlines() if re.match(r"T \w+.* m?K +(guaranteed|measured)", line)]
    assert len(lines) == 6
    assert (here / "modesieve-demo/thermal/small.h5").is_file()


# ---- refusals: status 1, one message, no traceback, nothing half-written ---------------------------------------------


def refused(command, *arguments):
    """Standard error of a command line that must be refused."""
    status, out, err = command(*arguments)
    assert status == 1, (out, err)
    assert "Traceback" not in err
    return err


def test_missing_file(command, here):
    """A file that is not there is named."""
    assert "nowhere.h5" in refused(command, "inspect", "nowhere.h5")


def test_not_hdf5(command, here):
    """A text file is no model, and the message says so."""
    (here / "notes.h5").write_text("not a model")
    assert "HDF5" in refused(command, "modes", "notes.h5")


def test_unknown_measure(command, chain_file):
    """A misspelt measure is refused with the names that come close, before anything is computed."""
    err = refused(command, "modes", chain_file, "--by", "peek-share")
    assert "did you mean peak-share" in err


def test_band_upside_down(command, chain_file):
    """A low end above the high end is refused with both."""
    err = refused(command, "modes", chain_file, "--band", "300Hz", "10Hz")
    assert err.splitlines() == [
        "the band's low end is not below its high end",
        "  expected: two different ends, the lower frequency first",
        "  got:      300Hz to 10Hz",
        "  where:    --band",
        "  remedy:   exchange the two",
    ]


def test_band_without_units(command, chain_file):
    """Bare numbers are refused with the fix."""
    err = refused(command, "modes", chain_file, "--band", "0", "300")
    assert "needs a unit" in err
    assert '"0 Hz"' in err


def test_times_for_a_structure(command, chain_file):
    """Time constants are for thermal models only."""
    assert "thermal" in refused(command, "modes", chain_file, "--band", "1s", "1min")


def test_more_modes_than_exist(command, chain_file):
    """A count above the number of unknowns names that number."""
    assert "30" in refused(command, "modes", chain_file, "--count", 31)


def test_statics_that_the_outputs_forbid(command, here):
    """Feedthrough for an acceleration output is refused with the reason; nothing is written."""
    model = chain(12, k=4e3, damping=Damping(base=ModalRatio(ratio=0.01)))
    io.save("acc.h5", Structure(K=model.K, M=model.M, F=model.F, Ca=model.Cq, damping=model.damping))
    err = refused(command, "truncate", "acc.h5", "--keep", 3, "--statics", "feedthrough", "-o", "s.h5")
    assert "acceleration" in err
    assert sorted(os.listdir(here)) == ["acc.h5"]


def test_tolerance_in_the_wrong_unit(command, chain_file):
    """A tolerance in kelvin on displacement outputs names the outputs' units."""
    err = refused(command, "truncate", chain_file, "--band", "0Hz", "4Hz", "--tolerance", "0.5 K", "-o", "s.h5")
    assert "unit of the tolerance's kind" in err
    assert "m" in err


def test_tolerance_with_unit_and_reference(command, chain_file):
    """A size with a unit cannot be relative to the peak."""
    arguments = ("--band", "0Hz", "4Hz", "--tolerance", "1 mm", "--of", "peak", "-o", "s.h5")
    assert "absolute" in refused(command, "truncate", chain_file, *arguments)


def test_bare_tolerance(command, chain_file):
    """2 is no tolerance; 2 % is."""
    err = refused(command, "truncate", chain_file, "--band", "0Hz", "4Hz", "--tolerance", "2", "-o", "s.h5")
    assert "2 %" in err


def test_tolerance_needs_a_band(command, chain_file):
    """A tolerance without a band has nowhere to hold."""
    assert "band" in refused(command, "truncate", chain_file, "--tolerance", "2 %", "-o", "s.h5")


def test_keep_list_of_another_model(command, chain_file, here):
    """Mode numbers of another model are refused by the hash."""
    (here / "keep.toml").write_text(f'keep = [1]\nmodel = "{"0" * 64}"\n')
    assert "another model" in refused(command, "truncate", chain_file, "--keep-list", "keep.toml", "-o", "s.h5")


@pytest.mark.parametrize("text", ["keep = [1.5]", "keep = 3", "kept = [1]", "keep = [1", "keep = [true]"])
def test_malformed_keep_list(command, chain_file, here, text):
    """Whatever is no list of numbers is refused with what a keep list looks like."""
    (here / "keep.toml").write_text(text)
    assert "keep.toml" in refused(command, "truncate", chain_file, "--keep-list", "keep.toml", "-o", "s.h5")


def test_modes_of_another_model(command, done, chain_file):
    """A modes file is refused with any other model."""
    io.save("other.h5", chain(31, k=4e3))
    done("modes", "other.h5", "-o", "m.h5")
    err = refused(command, "truncate", chain_file, "--modes", "m.h5", "--keep", 3, "-o", "s.h5")
    assert "another model" in err


def test_output_folder_is_checked_before_the_work(command, chain_file, monkeypatch):
    """A missing output folder is refused before any mode is computed."""
    import modesieve.reduce.modal.find as find

    def never(*args, **more):
        raise AssertionError("computed before the output was checked")

    monkeypatch.setattr(find, "request", never)
    err = refused(command, "truncate", chain_file, "--keep", 3, "-o", "no/such/folder/s.h5")
    assert "no/such/folder/s.h5" in err
    assert "does not exist" in err


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_read_only_output_folder(command, chain_file, here):
    """A folder without write permission is refused."""
    (here / "locked").mkdir(mode=0o500)
    assert "cannot be written to" in refused(command, "demo", "--out", "locked")


@pytest.mark.skipif(not os.path.isdir("/proc/self"), reason="no file system that refuses even root")
def test_output_folder_where_nothing_can_be_made(command, here):
    """A place where no folder can be made is refused before the work, for root as well."""
    assert "/proc/results" in refused(command, "demo", "--out", "/proc/results")


def test_output_folder_that_is_a_file(command, chain_file):
    """A file in the place of the output folder is refused."""
    assert "chain.h5" in refused(command, "demo", "--out", chain_file)


def test_a_modes_file_is_no_model(command, done, chain_file):
    """The wrong kind of file is named as such."""
    done("modes", chain_file, "-o", "m.h5")
    assert "modesieve modes" in refused(command, "modes", "m.h5")
    assert "m.h5" in refused(command, "compare", chain_file, "m.h5")


def test_names_cannot_steer_the_terminal(done, here):
    """Escape sequences in channel names and titles come out harmless."""
    from dataclasses import replace

    model = chain(8, k=4e3, damping=Damping(base=ModalRatio(ratio=0.01)))
    evil = "tip\x1b]0;owned\x07[bold]x[/bold]"
    model = replace(model, outputs=(replace(model.outputs[0], name=evil),), title=evil)
    io.save("evil.h5", model)
    done("truncate", "evil.h5", "--band", "0Hz", "5Hz", "--keep", 3, "-o", "s.h5")
    for text in (done("inspect", "evil.h5"), done("compare", "evil.h5", "s.h5"), done("brief", "evil.h5")):
        assert "\x1b" not in text
        assert "\x07" not in text
        assert "[bold]x[/bold]" in text


# ---- usage: status 2 -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["frobnicate"], "no command"),
        (["trancate", "x.h5"], "did you mean truncate"),
        (["modes"], "Missing argument"),
        (["modes", "x.h5", "--band", "0Hz"], "requires 2 arguments"),
        (["modes", "x.h5", "--count", "0"], "--count"),
        (["modes", "x.h5", "--count", "3", "--band", "0Hz", "1Hz"], "not both"),
        (["truncate", "x.h5", "-o", "s.h5"], "say which modes stay"),
        (["truncate", "x.h5", "--keep", "3"], "Missing option"),
        (["truncate", "x.h5", "--keep", "3", "--tolerance", "2%", "-o", "s.h5"], "give one of"),
        (["truncate", "x.h5", "--keep", "3", "--of", "peak", "-o", "s.h5"], "--of"),
        (["truncate", "x.h5", "--keep", "3", "--statics", "some", "-o", "s.h5"], "--statics"),
        (["compare", "x.h5"], "Missing argument"),
        (["demo", "bridge"], "bridge"),
        (["--loud"], "--loud"),
    ],
)
def test_wrong_usage(command, here, arguments, words):
    """Wrong usage ends with status 2 and a hint."""
    status, out, err = command(*arguments)
    assert status == 2
    assert words in err
    assert out == ""


# ---- the process -----------------------------------------------------------------------------------------------------


def test_interruption_is_clean(command, chain_file, monkeypatch):
    """Ctrl-C ends with one line and status 130."""
    import modesieve.io.commands.modes as module

    def interrupt(*args, **more):
        raise KeyboardInterrupt

    monkeypatch.setattr(module, "find_modes", interrupt)
    status, _, err = command("modes", chain_file)
    assert (status, err.strip()) == (130, "interrupted; no file was left half-written")


def test_a_real_interruption_leaves_nothing_half_written(tmp_path):
    """A process that gets the signal in the middle of its work ends with status 130 and no temporary files."""
    code = "from modesieve.io.commands import main; main(['demo', '--out', 'out'])"
    with subprocess.Popen(
        [sys.executable, "-c", code], cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        deadline = time.monotonic() + 60
        while not (tmp_path / "out/model.h5").exists():
            assert time.monotonic() < deadline, "the demo did not start"
            time.sleep(0.01)
        process.send_signal(signal.SIGINT)
        _, err = process.communicate(timeout=60)
    assert process.returncode == 130
    assert "interrupted" in err
    assert "Traceback" not in err
    assert not list(tmp_path.rglob("*.part"))


def test_a_fault_of_the_program_is_owned_up_to(command, chain_file, monkeypatch, tmp_path):
    """An unforeseen error says so, ends with status 70, and keeps its traceback in a file."""
    import tempfile

    import modesieve.io.commands.modes as module

    def fail(*args, **more):
        raise RuntimeError("boom")

    monkeypatch.setattr(module, "find_modes", fail)
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    status, _, err = command("modes", chain_file)
    assert status == 70
    assert "RuntimeError: boom" in err
    assert "Traceback" not in err
    kept = next(tmp_path.glob("modesieve-fault-*.txt")).read_text()
    assert "Traceback" in kept


def test_lack_of_memory_is_a_refusal(command, chain_file, monkeypatch):
    """Running out of memory is stated, not thrown."""
    import modesieve.io.commands.modes as module

    def fail(*args, **more):
        raise MemoryError

    monkeypatch.setattr(module, "find_modes", fail)
    assert "not enough memory" in refused(command, "modes", chain_file)


def test_help_does_not_load_the_numerical_libraries():
    """--help and --version answer at once: neither SciPy nor h5py, pint or matplotlib is imported."""
    code = (
        "import sys; from modesieve.io.commands import status_of; status_of(['--help']); status_of(['--version']); "
        "print(sorted({'numpy', 'scipy', 'h5py', 'pint', 'matplotlib', 'pydantic'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


def test_the_installed_command_sets_the_status():
    """The entry point ends the process with the status of the command line."""
    code = "from modesieve.io.commands import main; main(['inspect', '/nowhere.h5'])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert "Traceback" not in done.stderr


def test_piped_output_is_plain(done, chain_file):
    """Without a terminal no line is longer than 100 columns, none ends in blanks, no escape codes."""
    text = done("modes", chain_file)
    assert max(len(line) for line in text.splitlines()) <= 100
    assert not [line for line in text.splitlines() if line != line.rstrip()]
    assert "\x1b" not in text
