"""Quantities with units: what a person writes, what it becomes, what is refused and with which words."""

import contextlib
import math
import subprocess
import sys

import pytest
from hypothesis import given
from hypothesis import strategies as st

from modesieve.io.units import (
    conversion,
    parse_band,
    parse_frequency,
    parse_quantity,
    parse_ratio,
    parse_temperature,
    parse_time,
    parse_tolerance,
    unit,
)
from modesieve.reduce.errors import UnitError


@pytest.mark.parametrize(
    ("text", "omega"),
    [
        ("200 Hz", 1256.6370614359172),  # 2 pi 200
        ("0Hz", 0.0),
        ("300Hz", 1884.9555921538758),
        ("2.4 kHz", 15079.644737231007),
        ("3 rad/s", 3.0),
        ("60 rpm", 2 * math.pi),
        ("1 cycle/s", 2 * math.pi),
        ("10 min", 1 / 600),
        ("0.5 s", 2.0),
        ("1e-3 Hz", 2e-3 * math.pi),
    ],
)
def test_frequencies_are_angular(text, omega):
    """A frequency in hertz gets its 2 pi, a time constant is inverted, rad/s stays."""
    assert parse_frequency(text) == pytest.approx(omega, rel=1e-14)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            "200",
            "a frequency needs a unit\n"
            '  expected: "200 Hz", "3 rad/s" or "10 min" (a time constant)\n'
            "  got:      200\n"
            '  remedy:   write "200 Hz" or "200 rad/s"',
        ),
        (
            "5 1/s",
            "the frequency has no unit of a frequency\n"
            '  expected: "200 Hz", "3 rad/s" or "10 min" (a time constant)\n'
            "  got:      5 1/s\n"
            '  remedy:   say whether it is "Hz" or "rad/s"',
        ),
        (
            "200 hz",
            "unknown unit 'hz'\n"
            '  expected: a unit such as "mm", "N", "Hz", "K"\n'
            "  got:      hz\n"
            '  remedy:   did you mean "Hz"?',
        ),
        (
            "0,5 Hz",
            "the frequency is not a number with a unit\n"
            '  expected: for example "200 Hz"\n'
            "  got:      '0,5 Hz'\n"
            "  remedy:   use a decimal point",
        ),
        (
            "-1 Hz",
            "the frequency is out of range\n  expected: 0 or above; a time constant above 0\n  got:      -1 Hz",
        ),
    ],
)
def test_refused_frequencies_say_why(text, message):
    """What is no frequency is refused with what was expected and the fix."""
    with pytest.raises(UnitError) as caught:
        parse_frequency(text)
    assert str(caught.value) == message


@pytest.mark.parametrize(
    "text", ["", "Hz", "nan Hz", "inf Hz", "1e999 Hz", "9**9**9 Hz", "1 2 Hz", "5 mm", "0 s", "((1))"]
)
def test_nonsense_is_no_frequency(text):
    """Text that is not a finite number with a unit of frequency is refused; nothing is evaluated."""
    with pytest.raises(UnitError):
        parse_frequency(text)


def test_time_constants_belong_to_thermal_models():
    """A structure's band cannot be given as times."""
    with pytest.raises(UnitError, match="time constants describe thermal models"):
        parse_frequency("10 min", time_constants=False)


def test_band_of_times_in_either_order():
    """Band ends that are times may come in either order; frequencies keep theirs."""
    assert parse_band("10 min", "1 s", thermal=True) == parse_band("1 s", "10 min", thermal=True) == (1 / 600, 1.0)
    assert parse_band("3 rad/s", "1 rad/s") == (3.0, 1.0)


@pytest.mark.parametrize(
    ("text", "value", "name"),
    [
        ("2 %", 0.02, ""),
        ("2%", 0.02, ""),
        ("0.5 K", 0.5, "K"),
        ("0.5 degC", 0.5, "K"),  # not 273.65 K
        ("0.5 °C", 0.5, "K"),
        ("0.9 degF", 0.5, "K"),
        ("0.1 mm", 0.1, "mm"),
        ("5 mrad", 5.0, "mrad"),
        ("3 N m", 3.0, "N m"),  # a moment, not 3 J
    ],
)
def test_tolerances(text, value, name):
    """A tolerance is a ratio or a size; temperatures in it are differences."""
    q = parse_tolerance(text)
    assert q.value == pytest.approx(value, rel=1e-14)
    assert q.unit == name


@pytest.mark.parametrize(
    ("text", "remedy"),
    [
        ("2", 'write "2 %", or a size with its unit ("0.5 K")'),
        ("0.02", 'write "2 %", or a size with its unit ("0.5 K")'),
    ],
)
def test_bare_tolerances_are_refused(text, remedy):
    """A bare number is refused with the two things it may have meant."""
    with pytest.raises(UnitError) as caught:
        parse_tolerance(text)
    assert caught.value.remedy == remedy


def test_tolerance_must_be_above_zero():
    """Zero and negative tolerances are refused."""
    for text in ("0 %", "-1 mm"):
        with pytest.raises(UnitError, match="not above 0"):
            parse_tolerance(text)


def test_absolute_temperatures():
    """Only start and reference values know where zero lies."""
    assert parse_temperature("25 degC") == pytest.approx(298.15)
    assert parse_temperature("77 degF") == pytest.approx(298.15)
    assert parse_temperature("300 K") == 300
    with pytest.raises(UnitError, match="absolute zero"):
        parse_temperature("-300 degC")


def test_times_and_ratios():
    """Times become seconds, ratios plain numbers; bare numbers and other units are refused."""
    assert parse_time("1 ms") == 1e-3
    assert parse_ratio("2 %") == 0.02
    for bad in ("1", "1 mm"):
        with pytest.raises(UnitError):
            parse_time(bad)
    for bad in ("0.02", "5 deg"):
        with pytest.raises(UnitError):
            parse_ratio(bad)


@pytest.mark.parametrize(
    ("text", "same"),
    [
        ("m/s²", "m/s^2"),
        ("m/s**2", "m/s2"),
        ("Nm", "N*m"),
        ("kNm", "kN m"),
        ("W/(m^2 K)", "W/m^2/K"),
        ("µm", "μm"),
        ("N·mm", "N mm"),
    ],
)
def test_spellings_of_units(text, same):
    """Different spellings of one unit have the same size and dimension."""
    a, b = unit(text), unit(same)
    assert (a.factor, a.dimension) == (b.factor, b.dimension)


@pytest.mark.parametrize("text", ["m^", "(m", "m)", "5", "m2.5", "m^99", "N^m", "x" * 101, "__import__", "m;m"])
def test_malformed_units_are_refused(text):
    """What is not a unit raises the unit error and nothing else."""
    with pytest.raises(UnitError):
        unit(text)


def test_gravity_is_not_gram():
    """Standard gravity has its own spelling; g alone is the gram."""
    assert unit("g0").factor == pytest.approx(9.80665)
    assert unit("g").factor == 1e-3


def test_conversion_between_units():
    """Factors are clean, temperatures convert as differences, other dimensions and lost 2 pi are refused."""
    assert conversion("mm", "m") == 1e-3
    assert conversion("degC", "K") == 1.0
    assert conversion("degF", "K") == pytest.approx(5 / 9)
    for pair in (("N", "m"), ("Hz", "rad/s"), ("%", "rad")):
        with pytest.raises(UnitError):
            conversion(*pair)


@given(st.text(max_size=40))
def test_any_text_parses_or_is_refused(text):
    """No text makes anything but a quantity or a unit error."""
    with contextlib.suppress(UnitError):
        parse_quantity(text)


@given(st.floats(1e-6, 1e6), st.sampled_from(["Hz", "kHz", "rad/s", "s", "min"]))
def test_frequency_is_the_number_times_its_unit(value, name):
    """The angular frequency is proportional to the number (inversely for times)."""
    one, omega = parse_frequency(f"1 {name}"), parse_frequency(f"{value!r} {name}")
    assert omega == pytest.approx(one / value if name in ("s", "min") else one * value, rel=1e-12)


def test_pint_is_imported_only_when_needed():
    """Importing the file readers does not pay for the unit registry."""
    code = "import sys, modesieve.io, modesieve.io.units; sys.exit('pint' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
