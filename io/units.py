"""Quantities with units at the edge: read from a person's text, converted, and written for a person.

Unit names and factors come from pint; the rules on top are ours, because pint alone reads 200 Hz as 200 rad/s (the
factor 2 pi is lost), turns a difference of 0.5 degC into 273.65 K and evaluates arithmetic in its input. Frequencies
get their 2 pi, differences of temperature use the size of a degree, only `parse_temperature` knows absolute ones.
"""

from __future__ import annotations

import difflib
import math
import re
from dataclasses import dataclass
from functools import cache, lru_cache
from typing import Any, TypeAlias

from modesieve.io.wording import format_frequency, format_number, format_quantity, format_ratio, pretty_unit
from modesieve.reduce.errors import UnitError

__all__ = [
    "FORCE",
    "LENGTH",
    "MASS",
    "RATE",
    "TEMPERATURE",
    "TIME",
    "Dimension",
    "Quantity",
    "Unit",
    "conversion",
    "format_frequency",
    "format_number",
    "format_quantity",
    "format_ratio",
    "parse_band",
    "parse_frequency",
    "parse_quantity",
    "parse_ratio",
    "parse_temperature",
    "parse_time",
    "parse_tolerance",
    "pretty_unit",
    "unit",
]

#: Exponents of the base dimensions, e.g. (("[length]", 1), ("[time]", -1)); () for a ratio or an angle.
Dimension: TypeAlias = tuple[tuple[str, float], ...]

TIME: Dimension = (("[time]", 1.0),)
RATE: Dimension = (("[time]", -1.0),)
TEMPERATURE: Dimension = (("[temperature]", 1.0),)
LENGTH: Dimension = (("[length]", 1.0),)
MASS: Dimension = (("[mass]", 1.0),)
FORCE: Dimension = (("[length]", 1.0), ("[mass]", 1.0), ("[time]", -2.0))


@dataclass(frozen=True, kw_only=True)
class Unit:
    """A unit as written, its size in SI units (of a difference, for temperatures) and its dimension."""

    text: str
    factor: float
    dimension: Dimension
    names: tuple[str, ...]  # canonical names, e.g. ("kilohertz",)

    @property
    def is_hertz(self) -> bool:
        return self.dimension == RATE and any(name.endswith("hertz") for name in self.names)

    @property
    def is_angle(self) -> bool:
        """True when an angle occurs: rad, deg, rad/s, rpm."""
        return any(name.endswith(_ANGLES) for name in self.names)

    @property
    def is_ratio(self) -> bool:
        return self.dimension == () and not self.is_angle


@dataclass(frozen=True, kw_only=True)
class Quantity:
    """A number and its unit as text ("" for a ratio)."""

    value: float
    unit: str


_ANGLES = ("radian", "degree", "turn", "revolution", "revolutions_per_minute", "arcminute", "arcsecond", "grade")
_NUMBER = re.compile(r"\s*([+\-−]?(?:\d+\.?\d*|\.\d+)(?:[eE][+\-−]?\d+)?)\s*(.*?)\s*", re.DOTALL)
_TOKEN = re.compile(r"\s*(?:(g_?0|[A-Za-zµμ°Ω_%‰][A-Za-zµμ°Ω_]*)|(\*\*|\^)?\s*(-?\d)(?![\d.])|([*·⋅/()]))")
_SUPERSCRIPT = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-")
#: What people write and pint does not know, or knows as something else.
_SPELT = {"Nm": "N m", "kNm": "kN m", "Nmm": "N mm", "MNm": "MN m", "%": "percent", "‰": "permille", "°": "degree"}
_SPELT |= {"g0": "standard_gravity", "g_0": "standard_gravity"}
_KNOWN = "m mm cm km um in ft kg g t lb N mN kN lbf s ms us min h Hz kHz mHz rad mrad deg rpm K degC degF W mW kW MPa"


# ---- reading -------------------------------------------------------------------------------------------------------


def parse_quantity(text: str, *, what: str = "the quantity", example: str = "0.5 mm") -> Quantity:
    """A number with its unit, e.g. "0.5 mm", "3 rad/s", "0Hz".

    Raises UnitError for a missing, unknown or malformed unit, and for anything that is not a finite number.

    >>> parse_quantity("−2.5e-3 N m")
    Quantity(value=-0.0025, unit='N m')
    """
    found = _NUMBER.fullmatch(text) if len(text) < 200 else None
    if found is None or found[2][:1] in (",", "."):
        comma = "," in text
        raise UnitError(
            f"{what} is not a number with a unit",
            expected=f'for example "{example}"',
            got=repr(text[:60]),
            remedy="use a decimal point" if comma else "",
        )
    value = float(found[1].replace("−", "-"))
    if not math.isfinite(value):
        raise UnitError(f"{what} is not finite", expected=f'for example "{example}"', got=text)
    if found[2]:
        unit(found[2])
    return Quantity(value=value, unit=found[2])


def parse_frequency(text: str, *, time_constants: bool = True) -> float:
    """Angular frequency in rad/s from "200 Hz", "3 rad/s", "1500 rpm" or, as a time constant tau, 1/tau from "10 min".

    time_constants: whether a time is accepted (thermal models).

    >>> round(parse_frequency("200 Hz"), 3), parse_frequency("3 rad/s"), parse_frequency("0Hz")
    (1256.637, 3.0, 0.0)
    >>> parse_frequency("10 min") == 1 / 600
    True
    """
    wanted = '"200 Hz", "3 rad/s"' + (' or "10 min" (a time constant)' if time_constants else "")
    q = parse_quantity(text, what="the frequency", example="200 Hz")
    if not q.unit:
        remedy = f'write "{text.strip()} Hz" or "{text.strip()} rad/s"'
        raise UnitError("a frequency needs a unit", expected=wanted, got=text, remedy=remedy)
    u = unit(q.unit)
    if q.value < 0 or (u.dimension == TIME and q.value == 0):
        raise UnitError("the frequency is out of range", expected="0 or above; a time constant above 0", got=text)
    if u.dimension == TIME and time_constants:
        return 1 / (q.value * u.factor)
    if u.dimension == RATE and (u.is_hertz or u.is_angle):
        return q.value * u.factor * (2 * math.pi if u.is_hertz else 1.0)
    remedy = 'say whether it is "Hz" or "rad/s"' if u.dimension == RATE else ""
    if u.dimension == TIME:
        remedy = "time constants describe thermal models; give a frequency here"
    raise UnitError("the frequency has no unit of a frequency", expected=wanted, got=text, remedy=remedy)


def parse_band(low: str, high: str, *, thermal: bool = False) -> tuple[float, float]:
    """Band ends in rad/s; two time constants (thermal) may come in either order.

    >>> parse_band("10 s", "200 s", thermal=True)
    (0.005, 0.1)
    """
    ends = (parse_frequency(low, time_constants=thermal), parse_frequency(high, time_constants=thermal))
    both_times = all(unit(parse_quantity(t).unit).dimension == TIME for t in (low, high))
    return (min(ends), max(ends)) if both_times else ends


def parse_time(text: str, *, what: str = "the time") -> float:
    """A duration in seconds.

    >>> parse_time("1 ms"), parse_time("2 h")
    (0.001, 7200.0)
    """
    q = parse_quantity(text, what=what, example="1 ms")
    return q.value * _required(q, TIME, what, '"1 ms"').factor


def parse_ratio(text: str, *, what: str = "the ratio") -> float:
    """A ratio from "2 %" or "0.5 permille".

    >>> parse_ratio("2 %")
    0.02
    """
    q = parse_quantity(text, what=what, example="2 %")
    if not q.unit:
        raise _bare(text, what, "2 %", f'write "{100 * q.value:.12g} %" if a part of one is meant')
    u = unit(q.unit)
    if not u.is_ratio:
        raise UnitError(f"{what} is not a ratio", expected='for example "2 %"', got=text)
    return q.value * u.factor


def parse_tolerance(text: str) -> Quantity:
    """A tolerance: a ratio (unit "") from "2 %", else a size with its unit; temperatures are differences in K.

    >>> parse_tolerance("2 %"), parse_tolerance("0.5 degC"), parse_tolerance("0.1 mm")
    (Quantity(value=0.02, unit=''), Quantity(value=0.5, unit='K'), Quantity(value=0.1, unit='mm'))
    """
    q = parse_quantity(text, what="the tolerance", example="2 %")
    if not q.unit:
        percent = q.value if q.value >= 1 else 100 * q.value
        raise _bare(text, "the tolerance", "2 %", f'write "{percent:.12g} %", or a size with its unit ("0.5 K")')
    if q.value <= 0:
        raise UnitError("the tolerance is not above 0", expected='for example "2 %" or "0.5 K"', got=text)
    u = unit(q.unit)
    if u.is_ratio:
        return Quantity(value=q.value * u.factor, unit="")
    if u.dimension == TEMPERATURE:
        return Quantity(value=q.value * u.factor, unit="K")
    return q


def parse_temperature(text: str) -> float:
    """An absolute temperature in kelvin, for start and reference values only.

    >>> round(parse_temperature("25 degC"), 6), parse_temperature("300 K")
    (298.15, 300.0)
    """
    q = parse_quantity(text, what="the temperature", example="25 degC")
    u = _required(q, TEMPERATURE, "the temperature", '"25 degC"')
    value = float(_registry().Quantity(q.value, u.names[0]).to("kelvin").magnitude)
    if value < 0:
        raise UnitError("the temperature lies below absolute zero", expected="0 K or above", got=text)
    return value


def _required(q: Quantity, dimension: Dimension, what: str, example: str) -> Unit:
    if not q.unit:
        raise _bare(f"{q.value:.12g}", what, example.strip('"'), "add the unit")
    u = unit(q.unit)
    if u.dimension != dimension:
        raise UnitError(f"{what} has a unit of something else", expected=f"for example {example}", got=q.unit)
    return u


def _bare(text: str, what: str, example: str, remedy: str) -> UnitError:
    return UnitError(f"{what} needs a unit", expected=f'for example "{example}"', got=text.strip(), remedy=remedy)


# ---- units ---------------------------------------------------------------------------------------------------------


@lru_cache(maxsize=1024)
def unit(text: str) -> Unit:
    """The unit that ``text`` names: products, quotients and whole powers of unit names, e.g. "W/(m^2 K)".

    Raises UnitError for an unknown name, with close matches, and for anything that is not a unit.

    >>> unit("m/s²").dimension, unit("N m").text
    ((('[length]', 1.0), ('[time]', -2.0)), 'N m')
    """
    factor, dimension, names = 1.0, {}, []  # type: float, dict[str, float], list[str]
    for name, power in _factors(text):
        size, exponents, canonical = _named(name, text)
        factor *= min(max(size, 1e-30), 1e30) ** power  # within floating point whatever the name
        names.append(canonical)
        for base, exponent in exponents:
            dimension[base] = dimension.get(base, 0.0) + power * exponent
    if not (math.isfinite(factor) and factor > 0):
        raise UnitError("the unit is out of range", got=text)
    kept = tuple(sorted((base, exponent) for base, exponent in dimension.items() if exponent))
    return Unit(text=text, factor=_clean(factor), dimension=kept, names=tuple(names))


def conversion(source: str, target: str) -> float:
    """What a number in ``source`` is multiplied by to be in ``target``; temperatures as differences.

    >>> conversion("mm", "m"), conversion("degC", "K")
    (0.001, 1.0)

    Raises UnitError when the dimensions differ.
    """
    a, b = unit(source), unit(target)
    if a.dimension != b.dimension or a.is_ratio != b.is_ratio or a.is_hertz != b.is_hertz:
        raise UnitError("the units do not fit", expected=f"a unit of the same kind as {target!r}", got=source)
    return _clean(a.factor / b.factor)


def _clean(factor: float) -> float:
    # 1e-3 rather than 0.0010000000000000002: products of factors carry rounding that the definitions do not have.
    return float(f"{factor:.15g}")


@cache
def _registry() -> Any:
    import pint  # costs half a second with its registry, so only when a unit is read

    return pint.UnitRegistry()


@cache
def _named(name: str, text: str) -> tuple[float, Dimension, str]:
    """Size in SI units, dimension and canonical name of one unit name."""
    import pint

    registry = _registry()
    try:
        known = registry.parse_units(name)
        size, base = registry.get_base_units(_difference(str(known)))
    except (pint.PintError, AttributeError, TypeError, ValueError, KeyError) as error:
        raise _unknown(name, text) from error
    exponents = tuple((str(k), float(v)) for k, v in base.dimensionality.items())
    return float(size), exponents, str(known)


def _difference(name: str) -> str:
    """The unit of a difference where zero lies elsewhere (degree Celsius and Fahrenheit)."""
    return {"degree_Celsius": "kelvin", "degree_Fahrenheit": "degree_Rankine"}.get(name, name)


def _unknown(name: str, text: str) -> UnitError:
    known = _KNOWN.split()
    close = [k for k in known if k.lower() == name.lower()] or difflib.get_close_matches(name, known, 3)
    remedy = "did you mean " + " or ".join(f'"{k}"' for k in close) + "?" if close else ""
    return UnitError(f"unknown unit {name!r}", expected='a unit such as "mm", "N", "Hz", "K"', got=text, remedy=remedy)


def _factors(text: str) -> list[tuple[str, int]]:
    """Unit names with their powers; division and brackets resolved."""
    if len(text) > 100:
        raise UnitError("the unit is too long", expected='a unit such as "mm" or "W/(m^2 K)"', got=text[:40] + "...")
    tokens = _tokens(text)
    out, rest = _product(tokens, text)
    if rest:
        raise _malformed(text)
    return out


def _tokens(text: str) -> list[str]:
    source, at, out = text.translate(_SUPERSCRIPT).strip(), 0, list[str]()
    while at < len(source):
        found = _TOKEN.match(source, at)
        if found is None:
            raise _malformed(text)
        name, _, power, sign = found.groups()
        out += _SPELT[name].split() if name in _SPELT else [name or power or sign]
        at = found.end()
    return out


def _product(tokens: list[str], text: str) -> tuple[list[tuple[str, int]], list[str]]:
    """Read factors until the tokens end or a bracket closes."""
    out: list[tuple[str, int]] = []
    sign = 1
    while tokens and tokens[0] != ")":
        head, tokens = tokens[0], tokens[1:]
        if head in "*·⋅/":
            sign = -1 if head == "/" else 1
            continue
        if head == "(":
            part, tokens = _product(tokens, text)
            if not tokens:
                raise _malformed(text)
            tokens = tokens[1:]
        elif head == "1":
            part = []
        elif head.lstrip("-").isdigit():
            raise _malformed(text)
        else:
            part = [(head, 1)]
        power = 1
        if tokens and tokens[0].lstrip("-").isdigit():
            power, tokens = int(tokens[0]), tokens[1:]
        out += [(name, exponent * sign * power) for name, exponent in part]
        sign = 1
    return out, tokens


def _malformed(text: str) -> UnitError:
    return UnitError("this is not a unit", expected='a unit such as "mm", "m/s^2" or "W/(m^2 K)"', got=repr(text))
