"""Words to typed choices: what they mean, and that no text whatever gets past as anything but a value or a refusal."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from modesieve.examples import chain, ladder
from modesieve.io.brief import Brief, brief_from
from modesieve.io.choices import above_of, band_of, tolerance_of
from modesieve.reduce.errors import ChoiceError, FileError, ModesieveError, UnitError
from modesieve.reduce.model import Interface, Output
from modesieve.reduce.truncation.records import Tolerance

HZ = 2 * np.pi
STRUCTURE, THERMAL = chain(3), ladder(3)
NUMBER = r"-?[0-9]{1,4}(\.[0-9]{1,3})?(e-?[0-9]{1,3})?"
TEXTS = st.one_of(
    st.text(max_size=20),
    st.from_regex(
        r"-?[0-9]{1,4}(\.[0-9]{1,3})?(e-?[0-9]{1,3})? ?(Hz|kHz|rad/s|s|min|%|mm|K|degC|N|m/s\^2|)", fullmatch=True
    ),
)
VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), TEXTS),
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=8), inner, max_size=3)),
    max_leaves=6,
)


def channels(*units):
    return Interface(outputs=tuple(Output(name=f"y{i}", unit=unit) for i, unit in enumerate(units)))


def test_bands():
    """Hertz, rad/s and, for thermal models, times in either order."""
    assert band_of("10 Hz", "1 kHz", STRUCTURE) == pytest.approx((10 * HZ, 1000 * HZ))
    assert band_of("5 rad/s", "1 Hz", STRUCTURE) == pytest.approx((5.0, HZ))
    assert band_of("1 h", "10 s", THERMAL) == band_of("10 s", "1 h", THERMAL) == pytest.approx((1 / 3600, 0.1))
    assert band_of("0 Hz", "10 s", THERMAL) == pytest.approx((0.0, 0.1))


@pytest.mark.parametrize(("low", "high"), [("2 Hz", "1 Hz"), ("1 Hz", "1 Hz"), ("1 Hz", "6 rad/s")])
def test_bands_without_width(low, high):
    """The low end lies below the high end, whatever their units."""
    with pytest.raises(ChoiceError, match="not below"):
        band_of(low, high, STRUCTURE)


def test_tolerances_take_the_outputs_unit():
    """A size is converted to the unit of the outputs it speaks of; degrees are differences."""
    assert tolerance_of("0.1 mm", None, channels("m")) == Tolerance(value=1e-4, of="absolute", unit="m")
    assert tolerance_of("0.5 degC", None, channels("K")) == Tolerance(value=0.5, of="absolute", unit="K")
    assert tolerance_of("0.5 K", None, channels("degC")) == Tolerance(value=0.5, of="absolute", unit="degC")
    assert tolerance_of("2 mrad", None, channels("m", "rad")) == Tolerance(value=2e-3, of="absolute", unit="rad")


@pytest.mark.parametrize(
    ("text", "units", "words"),
    [
        ("0.5 K", ("m",), "no output has a unit"),
        ("1 mm", ("m", "mm"), None),
        ("1 um", ("m", "mm"), "several outputs' units"),
        ("1 mm", ("",), "no units"),
        ("1 mm", (), "no output"),
    ],
)
def test_tolerances_of_something_else(text, units, words):
    """A unit that no output has, or that several share, is refused; one that is an output's own is taken."""
    if words is None:
        assert tolerance_of(text, None, channels(*units)).unit == "mm"
        return
    with pytest.raises(UnitError, match=words):
        tolerance_of(text, None, channels(*units))


def test_thresholds():
    """Shares as numbers or per cent, decay as a time."""
    assert above_of("peak-share", "0.02") == above_of("peak-share", "2 %") == above_of("peak-share", 0.02)
    assert above_of("decay", "1 min").share == 60.0
    with pytest.raises(UnitError):
        above_of("decay", 60)


@given(low=TEXTS, high=TEXTS)
@settings(max_examples=150, deadline=None)
def test_any_band_is_a_band_or_refused(low, high):
    """Every pair of texts gives two ascending finite ends or a domain error."""
    try:
        found = band_of(low, high, THERMAL)
    except ModesieveError:
        return
    assert 0 <= found[0] < found[1] < np.inf


@given(text=TEXTS)
@settings(max_examples=150, deadline=None)
def test_any_tolerance_is_positive_or_refused(text):
    """Every text gives a tolerance above 0 or a domain error."""
    try:
        found = tolerance_of(text, None, channels("m"))
    except ModesieveError:
        return
    assert 0 < found.value < np.inf


@given(text=TEXTS)
@settings(max_examples=100, deadline=None)
def test_any_threshold_is_a_number_or_refused(text):
    """Every text gives a number or a domain error."""
    for measure in ("decay", "peak-share"):
        try:
            found = above_of(measure, text)
        except ModesieveError:
            continue
        assert isinstance(found.share, float)


PLACES = [*Brief.model_fields, "keep.tolerance", "keep.above", "modes.band", "damping.ratio", "places.stiffness"]


@given(name=st.sampled_from(PLACES), value=VALUES)
@settings(max_examples=200, deadline=None)
def test_any_brief_is_a_brief_or_refused(name, value):
    """Whatever stands in a place of a brief, it is taken or refused with that place, never anything else."""
    content = {"model": "m.h5", "modes": {"band": ["0 Hz", "4 Hz"]}, "keep": {"tolerance": "2 %"}}
    section, _, field = name.partition(".")
    content[section] = {**content.get(section, {}), field: value} if field else value
    said = section
    try:
        brief_from(content)
    except FileError as error:
        said = str(error)
    assert section in said
