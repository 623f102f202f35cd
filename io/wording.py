"""Numbers and quantities as a person reads them: three digits, engineering prefixes, a true minus sign."""

from __future__ import annotations

import math
import re

_PREFIXES = {"n": -9, "µ": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9}
_SYMBOL = {exponent: prefix for prefix, exponent in _PREFIXES.items()}
#: Units that take prefixes, with the largest that people use with them.
_LARGEST = {"m": 0, "N": 9, "Pa": 9, "W": 9, "Hz": 9, "J": 9, "V": 6, "A": 3, "K": 0, "rad": 0, "s": 0}
_FIRST = re.compile(r"(n|u|µ|μ|m|k|M|G)?(m|N|Pa|W|Hz|J|V|A|K|rad|s)(?!\*\*|[A-Za-z0-9^²³])(.*)", re.DOTALL)
_SUPERSCRIPT = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")


def format_number(value: float, digits: int = 3) -> str:
    """``value`` with ``digits`` significant digits; no trailing zeros; "undefined" for nan, "infinite" for inf.

    >>> format_number(-0.03125), format_number(1234567.0), format_number(2.50), format_number(float("nan"))
    ('−0.0312', '1.23e6', '2.5', 'undefined')
    """
    if not math.isfinite(value):
        return "undefined" if math.isnan(value) else ("−" if value < 0 else "") + "infinite"
    if value == 0:
        return "0"
    rounded = f"{value:.{digits - 1}e}"
    exponent = int(rounded.split("e")[1])
    if -4 <= exponent < 6:
        text = f"{float(rounded):.{max(digits - 1 - exponent, 0)}f}"
        text = text.rstrip("0").rstrip(".") if "." in text else text
    else:
        mantissa = rounded.split("e")[0]
        text = f"{mantissa.rstrip('0').rstrip('.') if '.' in mantissa else mantissa}e{exponent}"
    return text.replace("-", "−")


def format_quantity(value: float, unit: str, digits: int = 3) -> str:
    """``value`` in ``unit`` with an engineering prefix where the unit takes one.

    >>> format_quantity(0.0312, "m"), format_quantity(2400, "Hz"), format_quantity(-1500, "N m")
    ('31.2 mm', '2.4 kHz', '−1.5 kN m')
    >>> format_quantity(0.02, "K"), format_quantity(0.5, "degC"), format_quantity(7200, "s"), format_quantity(3, "")
    ('20 mK', '0.5 °C', '120 min', '3')
    """
    found = _FIRST.fullmatch(unit.strip())
    if found is None or not math.isfinite(value) or value == 0:
        return f"{format_number(value, digits)} {pretty_unit(unit)}".strip()
    prefix, base, rest = found[1] or "", found[2], found[3]
    value = value * 10.0 ** _PREFIXES[prefix.replace("u", "µ").replace("μ", "µ")]
    if base == "s" and not rest and abs(value) >= 120:
        return _long_time(value, digits)
    exponent = int(f"{value:.{digits - 1}e}".split("e")[1]) // 3 * 3
    exponent = min(max(exponent, -9), _LARGEST[base])
    symbol = pretty_unit(_SYMBOL[exponent] + base + rest)
    return f"{format_number(value / 10.0**exponent, digits)} {symbol}"


def format_frequency(omega: float, digits: int = 3) -> str:
    """An angular frequency in rad/s as hertz.

    >>> format_frequency(1256.637)
    '200 Hz'
    """
    return format_quantity(omega / (2 * math.pi), "Hz", digits)


def format_ratio(value: float, digits: int = 3) -> str:
    """A ratio in percent.

    >>> format_ratio(0.0199)
    '1.99 %'
    """
    return f"{format_number(100 * value, digits)} %" if math.isfinite(value) else format_number(value)


def pretty_unit(unit: str) -> str:
    """A unit as printed: raised powers, a thin product, the degree sign.

    >>> pretty_unit("m/s^2"), pretty_unit("N*mm"), pretty_unit("degC"), pretty_unit("W/(m**2*K)")
    ('m/s²', 'N mm', '°C', 'W/(m² K)')
    """
    text = re.sub(r"(?:\^|\*\*)\(?(-?\d+)\)?", lambda found: found[1].translate(_SUPERSCRIPT), unit.strip())
    text = re.sub(r"\s*[*·⋅]\s*", " ", text)
    text = re.sub(r"\bdeg([CF])\b", r"°\1", text)
    return re.sub(r"\bu(?=(?:m|s|N|rad|Pa|V|W|K)\b)", "µ", text)


def _long_time(seconds: float, digits: int) -> str:
    for size, limit, name in ((60.0, 7200.0, "min"), (3600.0, 172800.0, "h")):
        if abs(seconds) <= limit:
            return f"{format_number(seconds / size, digits)} {name}"
    return f"{format_number(seconds / 86400.0, digits)} days"
