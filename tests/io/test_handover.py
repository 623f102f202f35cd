"""The hand-over: forms and files to the last digit, surrogates that run alone, and input histories."""

from __future__ import annotations

import ctypes
import importlib.util
import shutil
import subprocess
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner
from scipy.linalg import expm

from modesieve import io
from modesieve.examples import chain, ladder
from modesieve.io.handover.command import export, simulate
from modesieve.io.handover.containers import container_of, read_form, write_form
from modesieve.io.handover.forms import discrete_form, second_order_form, state_space_form, to_scipy
from modesieve.io.handover.histories import read_inputs, safe_header
from modesieve.io.handover.surrogate import Surrogate, source
from modesieve.reduce.errors import ChoiceError, FileError
from modesieve.reduce.modal import find_modes, rank
from modesieve.reduce.model import Damping, Input, Interface, LossFactor, ModalRatio, Output, Thermal
from modesieve.reduce.response.discrete import discretise
from modesieve.reduce.response.simulate import simulate as run
from modesieve.reduce.response.small import FirstOrderModal
from modesieve.reduce.truncation.records import Count, ReducedModel
from modesieve.reduce.truncation.truncate import truncate

COMPILER = shutil.which("cc") or shutil.which("gcc")
BAND = (0.01, 0.9)


def structure(damping: Damping | None = None) -> ReducedModel:
    model = chain(30, damping=damping or Damping(base=ModalRatio(ratio=0.02)))
    return truncate(rank(find_modes(model, BAND), band=BAND), Count(modes=6), band=BAND)


def thermal() -> ReducedModel:
    model = ladder(20)
    return truncate(rank(find_modes(model, (0.001, 0.5)), band=(0.001, 0.5)), Count(modes=5), band=(0.001, 0.5))


@pytest.mark.parametrize("ending", [".h5", ".npz", ".json", ""])
def test_every_form_comes_back_to_the_last_digit(tmp_path: Path, ending: str) -> None:
    """State space, second order and discrete forms survive every container bit by bit."""
    small = structure()
    for form in (state_space_form(small), second_order_form(small), discrete_form(small, 0.25, "linear", 0.1)):
        path = tmp_path / f"{form.name}{ending}"
        write_form(path, form, container_of(path, None))
        again = read_form(path)
        assert (again.name, again.about) == (form.name, form.about)
        assert list(again.arrays) == sorted(form.arrays) if ending == ".h5" else list(form.arrays)
        for letter, array in form.arrays.items():
            np.testing.assert_array_equal(again.arrays[letter], array)


def test_about_tells_channels_units_and_certificate() -> None:
    """Whoever receives a form learns what was cut, how wrong it is and how sure that is."""
    about = state_space_form(structure()).about
    assert about["inputs"] == [{"name": "push", "unit": "N", "amplitude": None}]
    assert about["error"]["certainty"] in ("measured", "guaranteed")
    assert about["certificate"]["complete"] == "all"
    assert about["full_model"]["unknowns"] == 30
    assert len(about["full_model"]["sha256"]) == 64


def test_a_loss_factor_becomes_half_of_it_and_says_so() -> None:
    """In a time-domain form a loss factor eta is the damping ratio eta/2."""
    form = second_order_form(structure(Damping(base=LossFactor(eta=0.06))))
    zeta = np.diag(form.arrays["D"]) / 2 / np.sqrt(np.diag(form.arrays["K"]))
    np.testing.assert_allclose(zeta, 0.03)
    assert any("half its size" in note for note in form.about["notes"])


def test_scipy_objects_have_the_small_model_s_response() -> None:
    """`scipy.signal` evaluates the forms to the same response, continuous and discrete."""
    small = structure()
    omega = np.array([0.05, 0.3, 0.8])
    _, H = to_scipy(state_space_form(small)).freqresp(omega)
    np.testing.assert_allclose(H, small.response(omega)[:, 0, 0], rtol=1e-9)
    system = to_scipy(discrete_form(small, 0.5))
    assert system.dt == 0.5
    np.testing.assert_allclose(system.A, expm(state_space_form(small).arrays["A"] * 0.5), atol=1e-12)
    with pytest.raises(ChoiceError, match="second-order"):
        second_order_form(thermal())


# ---- surrogates ------------------------------------------------------------------------------------------------------


def made(small: ReducedModel, dt: float, hold: str = "zero", delay: float = 0.0) -> Surrogate:
    discrete = discretise(small.system, dt, hold=hold, delay=delay)  # type: ignore[arg-type]
    return Surrogate(system=small.system, discrete=discrete, interface=small.modes.origin, uniform=small.uniform)


def python_surrogate(tmp_path: Path, surrogate: Surrogate) -> Any:
    path = tmp_path / "surrogate.py"
    path.write_text(source(surrogate, "python"), encoding="utf-8")
    spec = importlib.util.spec_from_file_location("surrogate_under_test", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def compiled(tmp_path: Path, surrogate: Surrogate, *flags: str) -> ctypes.CDLL:
    if COMPILER is None:
        pytest.skip("no C compiler on this machine")
    code, library = tmp_path / "surrogate.c", tmp_path / f"surrogate{len(flags)}.so"
    code.write_text(source(surrogate, "c"), encoding="utf-8")
    command = [COMPILER, "-std=c99", "-Wall", "-Wextra", "-Werror", "-pedantic", "-O2", *flags]
    subprocess.run([*command, "-shared", "-fPIC", "-o", library, code], check=True, capture_output=True)
    return ctypes.CDLL(str(library))


def walk(library: ctypes.CDLL, surrogate: Surrogate, u: np.ndarray, kind: Any = np.float64) -> np.ndarray:
    room = (ctypes.c_double * (4 * surrogate.discrete.A.shape[0] + 64))()
    library.surrogate_init(room)
    u = np.ascontiguousarray(u, dtype=kind)
    y = np.zeros((len(u), len(surrogate.discrete.C)), dtype=kind)
    for k in range(len(u)):
        library.surrogate_step(room, u[k].ctypes.data_as(ctypes.c_void_p), y[k].ctypes.data_as(ctypes.c_void_p))
    return y


@pytest.mark.parametrize("hold", ["zero", "linear"])
@pytest.mark.parametrize("make", [structure, thermal])
def test_surrogates_equal_the_simulation(tmp_path: Path, make: Any, hold: str) -> None:
    """Python and double-precision C follow a random input to 1e-12 of the output's size."""
    small = make()
    surrogate = made(small, 0.2, hold)
    u = np.random.default_rng(1).normal(size=(400, small.system.m))
    expected = run(small.system, np.arange(400) * 0.2, u, hold=hold).y  # type: ignore[arg-type]
    scale = 1e-12 * np.abs(expected).max()
    np.testing.assert_allclose(python_surrogate(tmp_path, surrogate).Surrogate().run(u), expected, atol=scale)
    np.testing.assert_allclose(walk(compiled(tmp_path, surrogate), surrogate, u), expected, atol=scale)


def test_a_saved_surrogate_goes_on_where_it_stopped(tmp_path: Path) -> None:
    """Saving and restoring in the middle changes nothing."""
    surrogate = made(structure(), 0.2, "linear", 0.13)
    module = python_surrogate(tmp_path, surrogate)
    u = np.random.default_rng(2).normal(size=(60, 1))
    whole = module.Surrogate().run(u)
    first = module.Surrogate()
    head = first.run(u[:25])
    tail = module.Surrogate.restore(first.save()).run(u[25:])
    np.testing.assert_array_equal(np.vstack([head, tail]), whole)


def test_bad_and_large_inputs_raise_flags(tmp_path: Path) -> None:
    """A NaN is not applied but flagged; an input beyond its stated amplitude is applied and flagged."""
    small = structure()
    interface = Interface(inputs=(Input(name="push", amplitude=2.0),), outputs=(Output(name="end"),))
    surrogate = Surrogate(system=small.system, discrete=discretise(small.system, 0.1), interface=interface)
    module = python_surrogate(tmp_path, surrogate)
    one, other = module.Surrogate(), module.Surrogate()
    np.testing.assert_array_equal(one.run([[1.0], [np.nan], [1.0]]), other.run([[1.0], [1.0], [1.0]]))
    assert one.bad_input
    assert not other.bad_input
    assert not one.over_range
    one.step([2.5])
    assert one.over_range


def test_names_cannot_break_out_of_the_source(tmp_path: Path) -> None:
    """Quotes, comment ends and line breaks in a channel's name stay inside comments and literals."""
    small = structure()
    name = '*/ int x; /* """ \n import os # \\'
    interface = Interface(inputs=(Input(name=name),), outputs=(Output(name="'end"),), title=name)
    surrogate = Surrogate(system=small.system, discrete=discretise(small.system, 0.1), interface=interface)
    assert [name] == python_surrogate(tmp_path, surrogate).INPUTS
    compiled(tmp_path, surrogate)


@pytest.mark.slow
def test_single_precision_does_not_freeze(tmp_path: Path) -> None:
    """A 10,000 s time constant at 1 ms over a simulated day in floats stays within 0.1 % of the closed form."""
    system = FirstOrderModal(blocks=(np.array([[-1e-4]]),), B=[[1e-4]], C=[[1.0]], D=[[0.0]])
    interface = Interface(inputs=(Input(name="u"),), outputs=(Output(name="y"),))
    surrogate = Surrogate(system=system, discrete=discretise(system, 1e-3), interface=interface)
    main = """
    #include <stdio.h>
    int main(void) {
        static surrogate s; surrogate_real u[1] = {1}, y[1]; long k;
        surrogate_init(&s);
        for (k = 0; k <= 86400000L; k++) {
            surrogate_step(&s, u, y);
            if (k % 3600000L == 0) printf("%.9g\\n", (double)y[0]);
        }
        return 0;
    }
    """
    if COMPILER is None:
        pytest.skip("no C compiler on this machine")
    code, program = tmp_path / "day.c", tmp_path / "day"
    code.write_text(source(surrogate, "c") + main, encoding="utf-8")
    subprocess.run([COMPILER, "-std=c99", "-O2", "-DSURROGATE_FLOAT", "-o", program, code], check=True)
    got = np.array(
        [float(v) for v in subprocess.run([program], capture_output=True, text=True, check=True).stdout.split()]
    )
    expected = 1 - np.exp(-3600.0 * np.arange(25) / 1e4)
    np.testing.assert_allclose(got[1:], expected[1:], rtol=1e-3)


# ---- commands and histories ------------------------------------------------------------------------------------------


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "small.h5"
    io.save(path, thermal())
    return path


def call(command: Any, *arguments: object) -> str:
    result = CliRunner().invoke(command, [str(a) for a in arguments], catch_exceptions=False)
    assert result.exit_code == 0, result.output
    return str(result.output)


def test_simulate_runs_a_file_and_can_be_split(tmp_path: Path, file: Path) -> None:
    """The command's output is the exact propagation; a run in two parts equals the run in one."""
    t = np.round(np.cumsum(np.random.default_rng(4).uniform(0.1, 3.0, 40)), 6)
    u = np.sin(t / 7)
    rows = [f"{a!r},{b!r}" for a, b in zip(t.tolist(), u.tolist(), strict=True)]
    (tmp_path / "in.csv").write_text("time,source\n" + "\n".join(rows), encoding="utf-8")
    (tmp_path / "a.csv").write_text("time,source\r\n" + "\r\n".join(rows[:21]), encoding="utf-8")
    (tmp_path / "b.csv").write_text("time,source\n" + "\n".join(rows[20:]), encoding="utf-8")
    said = call(simulate, file, tmp_path / "in.csv", "-o", tmp_path / "out.csv")
    assert "times real time" in said
    out = np.loadtxt(tmp_path / "out.csv", delimiter=",", skiprows=1)
    np.testing.assert_array_equal(out[:, 1:], run(thermal().system, t, u[:, None]).y)
    call(simulate, file, tmp_path / "a.csv", "--save-state", tmp_path / "state.json", "-o", tmp_path / "a-out.csv")
    call(simulate, file, tmp_path / "b.csv", "--start", tmp_path / "state.json", "-o", tmp_path / "b-out.csv")
    b = np.loadtxt(tmp_path / "b-out.csv", delimiter=",", skiprows=1)
    np.testing.assert_allclose(b[:, 1], out[20:, 1], atol=1e-12 * np.abs(out[:, 1]).max())


def test_a_uniform_start_in_uniform_surroundings_stays(tmp_path: Path) -> None:
    """Everything at 25 degrees, surroundings too: no sensor moves (all modes kept)."""
    model = ladder(8)
    small = truncate(find_modes(model), Count(modes=8), band=(0.01, 1.0))
    io.save(tmp_path / "all.h5", small)
    (tmp_path / "in.csv").write_text("time,source\n0,25\n1,25\n9,25\n200,25\n", encoding="utf-8")
    call(simulate, tmp_path / "all.h5", tmp_path / "in.csv", "--start", "uniform:25degC", "-o", tmp_path / "out.csv")
    out = np.loadtxt(tmp_path / "out.csv", delimiter=",", skiprows=1)
    np.testing.assert_allclose(out[:, 1], 25.0, rtol=1e-10)


def test_export_writes_every_form(tmp_path: Path, file: Path) -> None:
    """The command writes arrays and sources and suggests a sample time."""
    assert "wrote" in call(export, file, "--as", "state-space", "-o", tmp_path / "s.npz")
    assert "suggested" in call(export, file, "--as", "discrete", "-o", tmp_path / "d.json")
    call(export, file, "--as", "c", "--sample-time", "100 ms", "-o", tmp_path / "s.c")
    call(export, file, "--as", "python", "--sample-time", "0.1 s", "--hold", "linear", "-o", tmp_path / "s.py")
    text = (tmp_path / "s.c").read_text("utf-8")
    for part in ("Sample time 0.1 s", "Valid in the band", "SHA-256", "local codes", "Output 0: far, K"):
        assert part in text


@pytest.mark.parametrize(
    ("text", "got"),
    [
        ("time,source\n0,1\n1,\n", "a blank"),
        ("time,source\n0,1\n1,nan\n", "'nan'"),
        ("time,source\n0,1\n1,x\n", "'x'"),
        ("time,source\n0,1\n0,1\n", "0 s"),
        ("time,source\n0,1,2\n", "3"),
        ("time,wind\n0,1\n", "time, wind"),
        ("time;source\n0;1\n", "time;source"),
    ],
)
def test_bad_histories_are_refused_with_the_row(tmp_path: Path, text: str, got: str) -> None:
    """Blanks, NaN, text, times that do not ascend, wrong columns: refused, saying where."""
    path = tmp_path / "in.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(FileError) as caught:
        read_inputs(path, ("source",))
    assert caught.value.got == got
    assert str(path) in caught.value.where


@pytest.mark.parametrize(
    "content", ["", "{}", '{"format": "modesieve state", "model": "x", "kept": [1], "state": [1]}', "\x00"]
)
def test_a_foreign_state_is_refused(tmp_path: Path, file: Path, content: str) -> None:
    """A start that is no saved state of this very small model is an error, not a guess."""
    from modesieve.io.handover.command import load_small, start_state

    (tmp_path / "state.json").write_text(content, encoding="utf-8")
    with pytest.raises(FileError, match="state"):
        start_state(load_small(file), str(tmp_path / "state.json"), np.zeros(1))


def test_names_that_a_spreadsheet_would_run_are_defused() -> None:
    """A header that starts like a formula gets an apostrophe; commas and quotes are quoted."""
    assert safe_header("=HYPERLINK(1)") == "'=HYPERLINK(1)"
    assert safe_header('a, "b"') == '"a, ""b"""'


def test_thermal_models_keep_their_uniform_state_in_the_file(tmp_path: Path, file: Path) -> None:
    """The state of one degree everywhere survives the file."""
    loaded = io.load(file)
    assert isinstance(loaded, ReducedModel)
    assert loaded.uniform is not None
    np.testing.assert_array_equal(loaded.uniform, thermal().uniform)
    assert isinstance(thermal().modes.model, Thermal)


# ---- the bundle ------------------------------------------------------------------------------------------------------


@pytest.fixture
def bundle(tmp_path: Path) -> Path:
    from modesieve.io.handover.bundle import write_bundle

    folder = tmp_path / "run"
    folder.mkdir()
    io.save(folder / "small.h5", thermal())
    (folder / "page.html").write_text("<html></html>", encoding="utf-8")
    write_bundle(folder, tmp_path / "out.zip")
    return tmp_path / "out.zip"


def test_a_bundle_carries_the_model_in_open_forms_with_hashes(tmp_path: Path, bundle: Path) -> None:
    """Manifest, README, state space; unpacking gives the small model back."""
    import zipfile

    from modesieve.io.handover.bundle import open_bundle

    with zipfile.ZipFile(bundle) as archive:
        names = set(archive.namelist())
        archive.extract("state-space.npz", tmp_path)
    assert {"manifest.json", "README.txt", "small.h5", "state-space.npz", "state-space.json", "page.html"} <= names
    np.testing.assert_array_equal(read_form(tmp_path / "state-space.npz").arrays["B"], thermal().system.B)
    (tmp_path / "in").mkdir()
    small, page = open_bundle(bundle, tmp_path / "in")
    assert isinstance(io.load(small), ReducedModel)
    assert page is not None


def test_an_altered_bundle_is_refused(tmp_path: Path, bundle: Path) -> None:
    """A member that was changed, added or leads out of the folder does not match the manifest."""
    import zipfile

    from modesieve.io.handover.bundle import open_bundle

    for name in ("small.h5", "../evil.txt"):
        altered = tmp_path / "altered.zip"
        with zipfile.ZipFile(bundle) as old, zipfile.ZipFile(altered, "w") as new:
            for member in old.namelist():
                data = old.read(member)
                new.writestr(member, data + b" " if member == name else data)
            if name not in old.namelist():
                new.writestr(name, b"x")
        with pytest.raises(FileError, match="manifest"):
            open_bundle(altered, tmp_path)
    assert not (tmp_path.parent / "evil.txt").exists()
    (tmp_path / "no.zip").write_bytes(b"PK\x03\x04 nothing")
    with pytest.raises(FileError, match="bundle"):
        open_bundle(tmp_path / "no.zip", tmp_path)


def test_pseudo_modes_are_not_sampled(tmp_path: Path) -> None:
    """A structure's tail levels become feedthrough in the discrete form, its statics stay exact, and it says so."""
    from modesieve.io.handover.forms import sampled

    model = chain(30, damping=Damping(base=ModalRatio(ratio=0.02)))
    ranking = rank(find_modes(model, BAND), band=BAND)
    small = truncate(ranking, Count(modes=6), statics="vectors", band=BAND)
    assert small.system.terms > 6
    assert sampled(small).terms == 6
    rest = np.zeros(1)
    np.testing.assert_allclose(sampled(small).response(rest), small.response(rest), rtol=1e-10)
    form = discrete_form(small, 0.5)
    assert any("pseudo-modes became feedthrough" in note for note in form.about["notes"])


def test_thermal_histories_carry_their_guaranteed_error(tmp_path: Path) -> None:
    """From rest, within the stated amplitudes, every output has its worst error beside it, and it holds."""
    from modesieve.reduce.truncation.promise import with_guarantee

    model = ladder(200)
    band = (1e-5, 0.02)
    small = with_guarantee(truncate(rank(find_modes(model, count=12), band=band), Count(modes=4), band=band))
    assert small.guarantee is not None
    assert small.guarantee.holds, small.guarantee.reason
    io.save(tmp_path / "small.h5", small)
    t = np.linspace(0.0, 20_000.0, 41)
    (tmp_path / "in.csv").write_text("time,source\n" + "\n".join(f"{v},1" for v in t), encoding="utf-8")
    call(simulate, tmp_path / "small.h5", tmp_path / "in.csv", "-o", tmp_path / "out.csv")
    header = (tmp_path / "out.csv").read_text("utf-8").splitlines()[0]
    assert header == "time,far,far error at most"
    out = np.loadtxt(tmp_path / "out.csv", delimiter=",", skiprows=1)
    exact = run(find_modes(model).system, t, np.ones((41, 1))).y[:, 0]
    assert np.all(np.abs(out[:, 1] - exact) <= out[:, 2] * (1 + 1e-9))


def test_a_uniform_start_with_tail_levels_stays(tmp_path: Path) -> None:
    """With pseudo-modes too, everything at one temperature and its surroundings with it does not move."""
    model = ladder(40)
    band = (0.001, 0.05)
    small = truncate(rank(find_modes(model, count=8), band=band), Count(modes=3), statics="vectors", band=band)
    assert small.uniform is not None
    t = np.linspace(0.0, 3000.0, 20)
    result = run(small.system, t, np.full((20, 1), 25.0), state=25.0 * small.uniform)
    np.testing.assert_allclose(result.y, 25.0, rtol=1e-9)


def test_a_reference_temperature_shifts_outputs_and_start(tmp_path: Path) -> None:
    """Rises above 20 degrees come out in degrees; a uniform start at 20 is the model's zero."""
    model = ladder(8)
    io.save(tmp_path / "all.h5", truncate(find_modes(model), Count(modes=8), band=(0.01, 1.0)))
    (tmp_path / "in.csv").write_text("time,source\n0,0\n50,0\n", encoding="utf-8")
    arguments = ["--start", "uniform:20degC", "--reference", "20 degC", "-o", tmp_path / "out.csv"]
    call(simulate, tmp_path / "all.h5", tmp_path / "in.csv", *arguments)
    out = np.loadtxt(tmp_path / "out.csv", delimiter=",", skiprows=1)
    np.testing.assert_allclose(out[:, 1], 20.0, rtol=1e-12)


def test_a_brief_becomes_a_bundle_with_page_and_report(tmp_path: Path) -> None:
    """`handover BRIEF.toml` runs the brief and bundles page, PDF, brief and forms; review accepts the zip."""
    import zipfile

    from modesieve.io.commands import status_of

    model = chain(40, damping=Damping(base=ModalRatio(ratio=0.02)))
    io.save(tmp_path / "model.h5", model)
    brief = 'model = "model.h5"\n[modes]\nband = ["0.001 Hz", "0.1 Hz"]\n[keep]\ntolerance = "5 %"\n'
    (tmp_path / "job.toml").write_text(brief, encoding="utf-8")
    assert status_of(["handover", str(tmp_path / "job.toml"), "-o", str(tmp_path / "out.zip")]) == 0
    with zipfile.ZipFile(tmp_path / "out.zip") as archive:
        names = set(archive.namelist())
    assert {"page.html", "report.pdf", "brief.toml", "keep.toml", "second-order.npz", "state-space.json"} <= names
    assert status_of(["review", str(tmp_path / "out.zip"), "--full", str(tmp_path / "model.h5")]) == 0
