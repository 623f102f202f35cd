"""Reports on a terminal and in a pipe: alignment, width, plain characters, the words of the verdict."""

import io as streams
import time
from dataclasses import replace

import numpy as np
import pytest
from rich.console import Console

from modesieve.examples import chain, ladder
from modesieve.io.json_output import dumps, held
from modesieve.io.modes_tables import cluster_rows, effective_mass_table, modes_table
from modesieve.io.progress_display import ProgressDisplay
from modesieve.io.report import run_report, run_text
from modesieve.io.run import run
from modesieve.io.settings import Settings
from modesieve.io.tables import sweep_table
from modesieve.io.terminal import bar, clean, on_point, screen, show, table
from modesieve.io.verdict import band_end, cautions, leading, verdict_of
from modesieve.reduce.modal.find import find_modes
from modesieve.reduce.modal.rank import rank
from modesieve.reduce.modal.records import Certificate
from modesieve.reduce.model import Damping, ModalRatio
from modesieve.reduce.progress import Progress
from modesieve.reduce.response.records import ErrorFigure
from modesieve.reduce.truncation.records import Count, Tolerance

HZ = 2 * np.pi


@pytest.fixture(scope="module")
def result():
    """A whole run on a damped chain."""
    model = chain(30, k=4e3, damping=Damping(base=ModalRatio(ratio=0.01)))
    return run(model, Settings(band=(0.0, 4 * HZ), choice=Tolerance(value=0.02)))


@pytest.fixture(scope="module")
def thermal():
    """A whole run on a thermal ladder."""
    model = ladder(40)
    outputs = tuple(replace(one, unit="K") for one in model.outputs)
    return run(replace(model, outputs=outputs), Settings(band=(1e-3, 0.3), choice=Count(modes=4)))


def text_of(*parts, **options):
    stream = streams.StringIO()
    console = Console(file=stream, highlight=False, markup=False, emoji=False, **options)
    show(console, *parts)
    return stream.getvalue()


# ---- cells -----------------------------------------------------------------------------------------------------------


def test_bars_are_never_empty_for_a_share():
    """The smallest share still shows an eighth, nothing shows nothing, and all have one width."""
    assert [bar(v, 4) for v in (0.0, 1e-9, 0.26, 1.0, 2.0)] == ["    ", "▏   ", "█   ", "████", "████"]


def test_numbers_stand_on_their_decimal_point():
    """Numbers of different length share the column of their point, words keep to the right."""
    cells = on_point(["0.277", "100.0", "−12", "2e-4", "none", ""])
    assert len({len(cell) for cell in cells}) == 1
    assert [cell.index(".") for cell in cells[:2]] == [3, 3]


def test_tables_say_what_they_were_given():
    """The whole text of a small table."""
    console = screen(streams.StringIO())
    made = table(console, [("mode", ["1", "2-3"]), ("Hz", ["1.76", "37.4"])], "Modes")
    assert text_of(made, width=100) == "Modes\nmode     Hz\n1      1.76\n2-3   37.4\n"


def test_control_characters_are_shown_as_question_marks():
    """Nothing that steers a terminal comes out; line breaks stay."""
    assert clean("a\x1b[2Jb\nc\u200bd") == "a?[2Jb\nc?d"


def test_ascii_outputs_get_stand_ins():
    """Where the encoding knows no minus sign, hyphens are printed instead of question marks."""

    class Ascii(streams.StringIO):
        encoding = "ascii"

    console = Console(file=Ascii(), width=40, markup=False)
    assert clean("−3 µm █▏", console) == "-3 um ##"


# ---- reports ---------------------------------------------------------------------------------------------------------


def test_reports_fit_100_columns(result, thermal):
    """Piped reports have no escape codes, no trailing blanks and at most 100 columns."""
    for one in (result, thermal):
        lines = run_text(one).splitlines()
        assert max(map(len, lines)) <= 100
        assert not [line for line in lines if line != line.rstrip() or "\x1b" in line]


def test_reports_speak_in_the_agreed_order(result):
    """Verdict, outputs, modes, comparison, kept count, cautions."""
    text = run_text(result)
    marks = ("modes are kept", "Per output", "Modes in rank order", "small model  ", "over kept count", "Cautions")
    at = [text.index(mark) for mark in marks]
    assert at == sorted(at)


def test_notes_say_what_was_decided():
    """A count that would split a cluster is told in the report."""
    from modesieve.examples import mast

    demo = mast()
    found = run(demo.model, Settings(band=demo.band, choice=Count(modes=3), sweep=False, times=False))
    assert "Notes\n· kept 2 modes, not 3" in run_text(found)


def test_narrow_terminals_drop_columns_not_digits(result):
    """On 60 columns the modes table shows fewer measures, each whole."""
    stream = streams.StringIO()
    console = Console(file=stream, width=60, markup=False, highlight=False)
    show(console, modes_table(console, result.ranking))
    lines = stream.getvalue().splitlines()
    assert max(map(len, lines)) <= 60
    assert "band-share" in lines[1]
    assert "energy" not in lines[1]


def test_terminals_get_bold_heads(result):
    """On a terminal the same report carries styles."""
    text = text_of(*run_report(screen(streams.StringIO()), result), width=100, force_terminal=True)
    assert "\x1b[1m" in text


def test_every_kept_mode_is_marked(result):
    """The modes table marks the kept modes."""
    console = screen(streams.StringIO())
    text = text_of(modes_table(console, result.ranking, kept=result.reduced.kept), width=100)
    assert sum(line.startswith("kept  ") for line in text.splitlines()[2:]) == len(result.reduced.kept)


def test_clusters_are_one_row():
    """Members of a cluster stand in one row, named by their numbers."""
    from modesieve.examples import mast

    demo = mast()
    ranking = rank(find_modes(demo.model, demo.band), band=demo.band)
    rows = cluster_rows(ranking)
    assert sorted(i for row in rows for i in row) == list(range(1, len(ranking.modes) + 1))
    assert (1, 2) in {tuple(sorted(row)) for row in rows}
    assert "\n1-2 " in text_of(modes_table(screen(streams.StringIO()), ranking), width=100)


def test_effective_mass_sums_to_the_total():
    """With all modes the cumulative effective mass ends at 100 %."""
    ranking = rank(find_modes(chain(8, damping=Damping(base=ModalRatio(ratio=0.01)))))
    made = effective_mass_table(screen(streams.StringIO()), ranking)
    last = text_of(made, width=100).splitlines()[-1].split()
    assert last[3] == "100.00"


def test_sweep_table_shows_the_chosen_count(result):
    """The kept count has its row, marked, among at most a handful more than asked for."""
    kept = len(result.reduced.kept)
    made = sweep_table(screen(streams.StringIO()), result.comparison.sweep, kept, limit=8)
    lines = text_of(made, width=100).splitlines()
    assert [line for line in lines if line.split()[:2] == [str(kept), "<"]]
    assert len(lines) <= 2 + 8


def unproved(result):
    """The check of a run as if it carried no guarantee."""
    check = result.comparison.checks[0]
    return replace(check, small=replace(check.small, guarantee=None))


# ---- the verdict -----------------------------------------------------------------------------------------------------


def test_verdict_names_numbers_and_certainty(result):
    """Kept, computed, unknowns, the error with its reference, and how it is known."""
    sentence = result.verdict.sentence
    kept = len(result.reduced.kept)
    assert sentence.startswith(
        f"{kept} of {len(result.modes)} computed modes are kept: {2 * kept} states in place of 30"
    )
    assert "of the response at the same frequency" in sentence
    assert "at every frequency from 0 Hz to 4 Hz, guaranteed" in sentence


def test_only_a_guarantee_says_at_most(result):
    """A measured error is the largest seen; only a guaranteed one is an upper limit; an estimate says so."""
    check = unproved(result)
    words = {}
    for certainty in ("guaranteed", "measured", "estimated"):
        figure = replace(check.local_error, certainty=certainty)
        words[certainty] = verdict_of(result.comparison, replace(check, local_error=figure)).sentence
    assert "at most" in words["guaranteed"]
    assert "at most" not in words["measured"] + words["estimated"]
    assert "only estimated" in words["estimated"]


def test_undefined_errors_have_their_reason(result):
    """No number is printed where a relative error means nothing."""
    figure = ErrorFigure(value=float("nan"), certainty="measured", relative_to="local", note="undamped in the band")
    check = replace(unproved(result), local_error=figure, peak_error=figure)
    assert verdict_of(result.comparison, check).sentence.endswith("is undefined: undamped in the band.")


def test_thermal_verdict_has_a_line_per_sensor(thermal):
    """Errors in kelvin, band ends as time constants."""
    verdict = thermal.verdict
    assert [line.output for line in verdict.outputs] == [c.name for c in thermal.modes.origin.outputs]
    assert all(line.error.endswith("K") for line in verdict.outputs)
    assert band_end(1e-3, "thermal") in verdict.sentence


def test_cautions_follow_what_is_known(result):
    """Estimates, withdrawn certificates and bands beyond the count each have their caution."""
    comparison, check = result.comparison, unproved(result)
    usual = cautions(comparison, check)
    assert not any("estimated" in text or "not proven" in text for text in usual)
    assert any("hardware" in text for text in usual)
    assert "local codes and licensed practice" in usual[-1]
    guess = replace(check, local_error=replace(check.local_error, certainty="estimated"))
    assert any("only estimated" in text for text in cautions(comparison, guess))
    lost = replace(comparison.modes, certificate=Certificate(complete="no", reason="a pivot was perturbed"))
    refused = replace(
        check.small, guarantee=replace(result.reduced.guarantee, holds=False, reason="a spot check failed")
    )
    assert any("a spot check failed" in text for text in cautions(comparison, replace(check, small=refused)))
    assert any("a pivot was perturbed" in text for text in cautions(replace(comparison, modes=lost), check))
    short = replace(comparison.modes, certificate=Certificate(complete="counted", below_omega=3 * HZ))
    assert any("counted modes only to 3 Hz" in text for text in cautions(replace(comparison, modes=short), check))


def test_the_leading_figure_is_the_one_asked_for(result):
    """A tolerance of peak leads with the peak error, an absolute one with the worst output."""
    comparison, check = result.comparison, unproved(result)
    of_peak = replace(check.small, choice=Tolerance(value=0.1, of="peak"))
    assert leading(comparison, replace(check, small=of_peak)).relative_to == "peak"
    absolute = replace(check.small, choice=Tolerance(value=0.1, of="absolute", unit="m"))
    assert leading(comparison, replace(check, small=absolute)).unit == "m"


def test_a_missed_tolerance_is_told(result):
    """Where the guaranteed error exceeds the tolerance that the measured one met, a caution says so."""
    comparison, check = result.comparison, result.comparison.checks[0]
    assert not any("above the tolerance" in text for text in cautions(comparison, check))
    value = leading(comparison, check).value
    tight = replace(check, small=replace(check.small, choice=Tolerance(value=0.99 * value)))
    assert any("above the tolerance" in text for text in cautions(comparison, tight))


def test_guarantees_speak_only_for_their_own_band_and_model(result):
    """Beyond its band, or for another full model, the measured figure leads and a caution says why."""
    comparison, check = result.comparison, result.comparison.checks[0]
    assert leading(comparison, check).certainty == "guaranteed"
    wide = replace(comparison, band=(0.0, 6 * HZ))
    assert leading(wide, check).certainty == "measured"
    assert any("covers 0 Hz to 4 Hz only" in text for text in cautions(wide, check))
    narrow = replace(comparison, band=(1 * HZ, 2 * HZ))
    assert leading(narrow, check).certainty == "guaranteed"
    origin = replace(comparison.modes.origin, fingerprint="0" * 64)
    other = replace(comparison, modes=replace(comparison.modes, origin=origin))
    assert leading(other, check).certainty == "measured"
    assert any("another full model" in text for text in cautions(other, check))


# ---- JSON ------------------------------------------------------------------------------------------------------------


def test_json_refuses_what_json_does_not_have():
    """nan never reaches a script unnoticed."""
    with pytest.raises(ValueError, match="JSON"):
        dumps({"x": float("nan")})
    assert held("x_hz", None, "none") == {"x_hz": None, "x_hz_reason": "none"}


# ---- progress --------------------------------------------------------------------------------------------------------


def test_short_stages_stay_silent():
    """What takes less than the patience leaves no trace."""
    stream = streams.StringIO()
    with ProgressDisplay(stream, patience=5.0) as listen:
        listen(Progress(stage="modes", done=1, total=3))
        time.sleep(0.25)
    assert stream.getvalue() == ""


def test_long_stages_tell_plain_lines_when_piped():
    """One line a stage, also for a stage that reports once and then works on."""
    stream = streams.StringIO()
    with ProgressDisplay(stream, patience=0.1) as listen:
        listen(Progress(stage="modes", message="counting"))
        time.sleep(0.6)
        listen(Progress(stage="full response", done=3, total=9))
        time.sleep(0.6)
    assert stream.getvalue() == "modes: counting\nfull response: 3 of 9\n"


def test_long_stages_draw_a_bar_on_a_terminal():
    """On a terminal a bar names the stage and is gone afterwards."""

    class Terminal(streams.StringIO):
        def isatty(self):
            return True

    stream = Terminal()
    with ProgressDisplay(stream, patience=0.1) as listen:
        listen(Progress(stage="full response", done=3, total=9))
        time.sleep(0.7)
    assert "full response" in stream.getvalue()
    assert "\x1b[2K" in stream.getvalue()
