"""Numbers and quantities as printed."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from modesieve.io.wording import format_frequency, format_number, format_quantity, format_ratio, pretty_unit


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (0.0312, "m", "31.2 mm"),
        (2400, "Hz", "2.4 kHz"),
        (31.2, "mm", "31.2 mm"),
        (0.0312, "mm", "31.2 µm"),
        (1234, "mm", "1.23 m"),
        (-1500, "N m", "−1.5 kN m"),
        (1500, "N*mm", "1.5 kN mm"),
        (999.9, "N", "1 kN"),
        (0, "m", "0 m"),
        (12345, "m", "12300 m"),
        (0.02, "K", "20 mK"),
        (0.5, "degC", "0.5 °C"),
        (600, "s", "10 min"),
        (7300, "s", "2.03 h"),
        (90, "s", "90 s"),
        (0.001, "s", "1 ms"),
        (3.14159, "", "3.14"),
        (0.25, "m/s^2", "250 mm/s²"),
        (2.0, "kg", "2 kg"),
        (math.nan, "mm", "undefined mm"),
        (1e-15, "m", "1e−6 nm"),
        (2e12, "Hz", "2000 GHz"),
    ],
)
def test_quantities(value, unit, text):
    """Three significant digits, an engineering prefix where the unit takes one, a true minus sign."""
    assert format_quantity(value, unit) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (100, "100"),
        (0.99999, "1"),
        (-2.5, "−2.5"),
        (1.5e-7, "1.5e−7"),
        (math.inf, "infinite"),
        (-math.inf, "−infinite"),
    ],
)
def test_numbers(value, text):
    """Trailing zeros go, small and large numbers get an exponent, infinity is a word."""
    assert format_number(value) == text


def test_helpers():
    """Frequencies print in hertz, ratios in percent, units with raised powers."""
    assert format_frequency(2 * math.pi * 827) == "827 Hz"
    assert format_ratio(0.0199) == "1.99 %"
    assert format_ratio(math.nan) == "undefined"
    assert pretty_unit("W/(m^2*K)") == "W/(m² K)"


@given(st.floats(1e-9, 1e9), st.sampled_from(["m", "mm", "N", "Hz", "Pa"]))
def test_printed_value_is_within_half_a_digit(value, unit):
    """Reading the printed text back gives the value to three digits."""
    from modesieve.io.units import conversion, parse_quantity

    q = parse_quantity(format_quantity(value, unit))
    assert q.value * conversion(q.unit, unit) == pytest.approx(value, rel=5.1e-3)
