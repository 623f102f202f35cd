"""Briefs: all mistakes at once, with place and near names; what a printed brief says can be run."""

import tomllib
from pathlib import Path

import numpy as np
import pytest

from modesieve import examples, io
from modesieve.examples import chain, cold_plate, ladder, mast
from modesieve.io.brief import brief_from, brief_model, brief_settings, read_brief
from modesieve.io.brief_text import brief_text, hertz_text, relocated, time_text
from modesieve.io.settings import Settings
from modesieve.io.suggestion import round_between, suggest, suggested_band
from modesieve.reduce.errors import ChoiceError, FileError, UnitError
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.model import (
    Damping,
    LossFactor,
    ModalRatio,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    Structure,
)
from modesieve.reduce.truncation.records import Above, Band, Count, Keep, Tolerance

HZ = 2 * np.pi
GOOD = {"model": "m.h5", "modes": {"band": ["0 Hz", "4 Hz"]}, "keep": {"tolerance": "2 %"}}


def damped_chain(n=30):
    return chain(n, k=4e3, damping=Damping(base=ModalRatio(ratio=0.01)))


def settings_of(model=None, **keep):
    brief = brief_from({**GOOD, "keep": keep})
    return brief_settings(brief, damped_chain() if model is None else model, Path())


# ---- mistakes --------------------------------------------------------------------------------------------------------


def test_all_mistakes_at_once():
    """Every mistake has its line: path, what is wrong, near names; the whole text is checked."""
    content = {
        "modle": "x.h5",
        "modes": {"band": ["0", "300 Hz"], "rank_by": "peek-share", "cuont": 4},
        "keep": {"tolerance": 2, "statics": "some"},
        "output": {"figures": ["svg", "bmp"]},
        "damping": {"ratio": "120 %"},
    }
    with pytest.raises(FileError) as caught:
        brief_from(content, "job.toml")
    assert str(caught.value).splitlines() == [
        "the brief has 9 mistakes",
        "  model: missing",
        "  damping.ratio: the damping ratio is out of range; expected 0 to below 100 %; got 120 %",
        '  modes.band.1: a frequency needs a unit; expected "200 Hz", "3 rad/s" or "10 min" (a time constant); got 0; '
        'write "0 Hz" or "0 rad/s"',
        "  modes.rank_by: unknown measure 'peek-share'; did you mean peak-share or energy-share? (one of decay, "
        "coupling, peak-share, band-share, static-share, energy-share, balanced-gain, effective-mass-x, "
        "effective-mass-y, effective-mass-z)",
        "  modes.cuont: unknown name; did you mean count?",
        '  keep.tolerance: the tolerance needs a unit; expected for example "2 %"; got 2; write "2 %", or a size with '
        'its unit ("0.5 K")',
        "  keep.statics: input should be 'none', 'feedthrough' or 'vectors' (got 'some')",
        "  output.figures.2: input should be 'svg', 'pdf' or 'png' (got 'bmp')",
        "  modle: unknown name; did you mean modes or model?",
        "  where:    job.toml",
    ]


@pytest.mark.parametrize(
    ("keep", "words"),
    [
        ({}, "exactly one choice of modes"),
        ({"modes": 3, "band": True}, "got modes and band"),
        ({"modes": 3, "of": "peak"}, "no tolerance"),
        ({"modes": 0}, "greater than or equal to 1"),
        ({"band": False}, "keep.band"),
        ({"above": {"peek-share": 0.1}}, "did you mean peak-share"),
        ({"above": {"decay": 3}}, "needs a unit"),
        ({"above": {}}, "keep.above"),
        ({"modes": 3, "levels": 4}, "keep.levels"),
    ],
)
def test_choices_that_are_none(keep, words):
    """One choice of modes, and a sound one."""
    with pytest.raises(FileError, match="the brief has") as caught:
        brief_from({**GOOD, "keep": keep})
    assert words in str(caught.value)


@pytest.mark.parametrize(
    ("damping", "words"),
    [
        ({}, "exactly one damping"),
        ({"ratio": "1 %", "loss_factor": "2 %"}, "got ratio and loss_factor"),
        ({"ratio": 0.01}, "needs a unit"),
        ({"rayleigh": {"alpha": "2 1/s"}}, "damping.rayleigh.beta: missing"),
        ({"rayleigh": {"alpha": "2 Hz", "beta": "1 s"}}, "alpha is no rate"),
        ({"rayleigh": {"alpha": "2 1/s", "beat": "1 s"}}, "did you mean beta"),
        ({"by_frequency": [["10 Hz"]]}, "damping.by_frequency.1"),
    ],
)
def test_dampings_that_are_none(damping, words):
    """At most one base damping, with units."""
    with pytest.raises(FileError) as caught:
        brief_from({**GOOD, "damping": damping})
    assert words in str(caught.value)


def test_misspelt_matrix_place():
    """A place for a matrix that does not exist names the near one."""
    with pytest.raises(FileError, match=r"places.stifness: no matrix has this name; did you mean stiffness or"):
        brief_from({**GOOD, "places": {"stifness": "/K"}})


def test_toml_mistake_names_the_line(tmp_path):
    """A syntax mistake is refused with its line."""
    path = tmp_path / "job.toml"
    path.write_text("model = \n")
    with pytest.raises(FileError, match="line 1"):
        read_brief(path)


def test_missing_brief(tmp_path):
    """A brief that is not there is named."""
    with pytest.raises(FileError, match=r"job\.toml"):
        read_brief(tmp_path / "job.toml")


# ---- meaning ---------------------------------------------------------------------------------------------------------


def test_every_choice_becomes_its_type():
    """The section [keep] gives the typed choices."""
    assert settings_of(tolerance="2 %").choice == Tolerance(value=0.02, of="local")
    assert settings_of(tolerance="5 %", of="peak").choice == Tolerance(value=0.05, of="peak")
    assert settings_of(tolerance="0.1 mm").choice == Tolerance(value=1e-4, of="absolute", unit="m")
    assert settings_of(modes=7).choice == Count(modes=7)
    assert settings_of(numbers=[5, 1, 5]).choice == Keep(numbers=(1, 5))
    assert settings_of(band=True).choice == Band(low=0.0, high=4 * HZ)
    assert settings_of(above={"peak-share": "1 %", "decay": "2 s"}).choice == (
        Above(measure="peak-share", share=0.01),
        Above(measure="decay", share=2.0),
    )


def test_keep_list_lies_beside_the_brief(tmp_path):
    """list_file is read relative to the brief."""
    (tmp_path / "keep.toml").write_text("keep = [3, 1]")
    brief = brief_from({**GOOD, "keep": {"list_file": "keep.toml"}})
    assert brief_settings(brief, damped_chain(), tmp_path).choice == Keep(numbers=(1, 3))


def test_band_in_time_constants_is_for_thermal_models():
    """A thermal band may be times; a structure's may not."""
    brief = brief_from({**GOOD, "modes": {"band": ["1 min", "5 s"]}})
    assert brief_settings(brief, ladder(20), Path()).band == pytest.approx((1 / 60, 0.2))
    with pytest.raises(UnitError, match="thermal"):
        brief_settings(brief, damped_chain(), Path())


@pytest.mark.parametrize(
    ("section", "expected"),
    [
        ({"ratio": "2 %"}, ModalRatio(ratio=0.02)),
        ({"loss_factor": "3 %"}, LossFactor(eta=0.03)),
        ({"rayleigh": {"alpha": "2 1/s", "beta": "3 us"}}, Rayleigh(alpha=2.0, beta=3e-6)),
        ({"none": True}, None),
    ],
)
def test_damping_of_the_brief_replaces_the_file_s(tmp_path, section, expected):
    """[damping] replaces the base damping of the model file."""
    io.save(tmp_path / "m.h5", damped_chain())
    model = brief_model(brief_from({**GOOD, "damping": section}), tmp_path)
    assert model.damping.base == expected


def test_damping_tables(tmp_path):
    """Tables over frequency (sorted) and by mode arrive in rad/s and as ratios."""
    io.save(tmp_path / "m.h5", damped_chain())
    by_frequency = {"by_frequency": [["10 Hz", "1 %"], ["0 Hz", "2 %"]]}
    base = brief_model(brief_from({**GOOD, "damping": by_frequency}), tmp_path).damping.base
    assert isinstance(base, RatioByFrequency)
    assert base.omega == pytest.approx([0.0, 10 * HZ])
    assert base.ratio == pytest.approx([0.02, 0.01])
    base = brief_model(brief_from({**GOOD, "damping": {"by_mode": ["2 %", "1 %"]}}), tmp_path).damping.base
    assert isinstance(base, RatioByMode)
    assert base.ratio == pytest.approx([0.02, 0.01])


def test_local_damping_of_the_file_stays(tmp_path):
    """[damping] leaves local dampers alone."""
    model = chain(5, damping=Damping(base=ModalRatio(ratio=0.01), viscous=np.diag([0.0, 0, 0, 0, 1.0])))
    io.save(tmp_path / "m.h5", model)
    changed = brief_model(brief_from({**GOOD, "damping": {"ratio": "3 %"}}), tmp_path)
    assert changed.damping.viscous is not None
    assert changed.damping.viscous[4, 4] == 1.0


def test_damping_for_a_thermal_model_is_refused(tmp_path):
    """A thermal model's damping lies in its matrices."""
    io.save(tmp_path / "m.h5", ladder(5))
    with pytest.raises(ChoiceError, match="damping"):
        brief_model(brief_from({**GOOD, "damping": {"ratio": "3 %"}}), tmp_path)


def test_foreign_layout(tmp_path):
    """[places] reads matrices from where another program left them."""
    import h5py

    model = damped_chain(4)
    with h5py.File(tmp_path / "m.h5", "w") as file:
        file["model/K"] = model.K.toarray()
        file["model/M"] = model.M.toarray()
        file["model/F"] = model.F.T
        file["model/C"] = model.Cq
    places = {
        "stiffness": "/model/K",
        "mass": "/model/M",
        "load": {"path": "/model/F", "transposed": True},
        "displacement_output": "/model/C",
    }
    found = brief_model(brief_from({**GOOD, "places": places}), tmp_path)
    assert isinstance(found, Structure)
    assert (found.K != model.K).nnz == 0
    assert pytest.approx(model.F) == found.F


# ---- printing --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "choice",
    [
        Tolerance(value=0.02, of="local"),
        Tolerance(value=0.003, of="peak"),
        Tolerance(value=1e-4, of="absolute", unit="m"),
        Count(modes=9),
        Keep(numbers=(1, 2, 7)),
        Band(low=0.4 * HZ, high=17.25 * HZ),
        (Above(measure="peak-share", share=0.01), Above(measure="decay", share=2.5)),
    ],
)
def test_printed_briefs_mean_what_they_were_made_of(choice):
    """Settings to text and back are equal, for every kind of choice."""
    settings = Settings(
        band=(0.4 * HZ, 17.25 * HZ),
        choice=choice,
        by="coupling",
        count=12,
        solver="superlu",
        statics="vectors",
        levels=1,
        sweep=False,
        times=False,
        figures=("pdf", "png"),
    )
    model = damped_chain()
    text = brief_text(model, "m.h5", settings, ["because"])
    again = brief_settings(brief_from(tomllib.loads(text)), model, Path())
    assert again == settings


def test_every_commented_line_is_sound():
    """Each setting that a printed brief offers in a comment is accepted when its comment mark is removed."""
    text = brief_text(damped_chain(), "m.h5", Settings(band=(0.0, HZ), choice=Band(low=0.0, high=HZ)))
    offered = 0
    section = ""
    for line in text.splitlines():
        bare = line.removeprefix("# ")
        if bare.startswith("["):
            section = bare.strip("[]")
        elif line.startswith("# ") and " = " in bare and not bare.startswith(("it", "For", "Damp")):
            name = bare.split(" = ")[0]
            value = tomllib.loads(bare)[name]
            content = {**GOOD, "damping": {"none": True}, "keep": {"band": True}}
            if section in ("damping", "keep") and name not in ("statics", "levels"):
                content[section] = {name: value}
            elif section:
                content[section] = {**content.get(section, {}), name: value}
            else:
                content[name] = value
            brief_from(content)
            offered += 1
    assert offered >= 14


def test_a_printed_brief_survives_odd_names():
    """Quotes, backslashes and line breaks in titles and paths stay inside their places."""
    from dataclasses import replace

    model = replace(damped_chain(), title='a "b"\n[keep]\nmodes = 1')
    text = brief_text(model, 'C:\\odd "name".h5', Settings(band=(0.0, HZ), choice=Count(modes=2)))
    brief = brief_from(tomllib.loads(text))
    assert brief.model == 'C:\\odd "name".h5'
    assert brief.keep.modes == 2


def test_units_of_printed_bands():
    """Frequencies and times print short and read back."""
    assert [hertz_text(v * HZ) for v in (0.0, 0.2, 1e4 / 3)] == ["0 Hz", "0.2 Hz", "3333.33333333 Hz"]
    assert [time_text(1 / t) for t in (0.5, 90.0, 120.0, 5400.0, 12345.6)] == [
        "0.5 s",
        "1.5 min",
        "2 min",
        "1.5 h",
        "12345.6 s",
    ]


def test_moved_briefs_find_their_files(tmp_path):
    """Paths of the model and the keep list are rewritten; all else, comments included, stays."""
    text = '# mine\nmodel = \'a.h5\'   # here\n[keep]\nlist_file = "k.toml"\n# model = "not this"\n'
    moved = relocated(text, tmp_path, tmp_path / "results")
    assert moved == '# mine\nmodel = "../a.h5"   # here\n[keep]\nlist_file = "../k.toml"\n# model = "not this"\n'
    assert relocated('model = "/abs/a.h5"', tmp_path, tmp_path / "results") == 'model = "/abs/a.h5"'


# ---- suggestions -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("low", "high"), [(37.2, 52.9), (0.0123, 0.0127), (118.0, 231.0), (99.5, 100.5), (1.0, 1.001)])
def test_round_values_lie_inside(low, high):
    """The rounded value lies well inside its interval."""
    value = round_between(low, high)
    assert low < value < high


def test_suggested_band_ends_in_a_gap():
    """The band holds about ten modes of a chain and ends between two of them."""
    modes = find_modes(damped_chain(40))
    low, high = suggested_band(modes)
    assert low == 0.0
    assert 7 <= np.count_nonzero(modes.omega <= high) <= 10
    assert np.abs(modes.omega / high - 1).min() > 1e-3


def test_suggested_thermal_band_reaches_past_the_slowest_mode():
    """The thermal band starts below the slowest decay rate."""
    modes = find_modes(ladder(40))
    low, high = suggested_band(modes)
    assert 0 < low < modes.omega.min() < high


def test_undamped_models_get_no_relative_tolerance():
    """Where a relative error means nothing the suggestion is the band, with the reason."""
    found = suggest(chain(30, k=4e3))
    assert isinstance(found.settings.choice, Band)
    assert "no tolerance" in found.notes[0]


def test_models_without_channels_get_no_brief():
    """Without inputs and outputs there is nothing to compare, and the refusal says so."""
    model = chain(5)
    with pytest.raises(ChoiceError, match="inputs and outputs"):
        suggest(Structure(K=model.K, M=model.M))


@pytest.mark.parametrize(
    "model",
    [
        damped_chain(30),
        chain(30, k=4e3),
        chain(24, k=4e3, ends="free-free", damping=Damping(base=ModalRatio(ratio=0.01))),
        chain(2, damping=Damping(base=LossFactor(eta=0.02))),
        ladder(40),
        ladder(1),
    ],
    ids=["damped", "undamped", "free", "tiny", "thermal", "one unknown"],
)
def test_suggested_briefs_run(model, tmp_path):
    """What `modesieve brief` prints for a model runs as it is."""
    from modesieve.io.run import run

    found = suggest(model)
    settings = found.settings
    text = brief_text(model, "m.h5", settings, found.notes)
    again = brief_settings(brief_from(tomllib.loads(text)), model, tmp_path)
    result = run(model, again)
    error = result.reduced.error
    if isinstance(again.choice, Tolerance):
        assert error is not None
        assert error.value <= again.choice.value


@pytest.mark.parametrize(("name", "demo"), [("mast", mast()), ("cold_plate", cold_plate())])
def test_ready_briefs_say_what_the_demos_do(name, demo):
    """The briefs in the examples mean the demos' own settings."""
    from modesieve.io.commands.demo import settings_of

    brief = read_brief(Path(examples.__file__).parent / f"{name}.toml")
    found = brief_settings(brief, demo.model, Path())
    wanted = settings_of(demo)
    assert found.band == pytest.approx(wanted.band, rel=1e-11)
    assert found.choice.value == pytest.approx(wanted.choice.value)
    assert (found.choice.of, found.statics, found.levels) == (wanted.choice.of, wanted.statics, wanted.levels)
