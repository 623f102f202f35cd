"""Units of a model: time to seconds, channels into the units they state.

The matrices are taken to be coherent in the file's unit system: lengths in its length unit, forces in its force unit or
in mass times length over time squared, and so on. A number of any dimension then has one coherent unit, and a channel
that states another one of the same dimension is converted through load, output and feedthrough. Where the system does
not say enough, the channel must be in plain SI units; everything else is refused, never silently a thousand times off.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.io.units import FORCE, LENGTH, MASS, TEMPERATURE, TIME, Dimension, Unit, unit
from modesieve.reduce.errors import UnitError
from modesieve.reduce.model import Input, Output, UnitSystem, Unknowns

POWER: Dimension = (("[length]", 2.0), ("[mass]", 1.0), ("[time]", -3.0))
MOMENT: Dimension = (("[length]", 2.0), ("[mass]", 1.0), ("[time]", -2.0))
_BASES = {"length": LENGTH, "mass": MASS, "force": FORCE, "time": TIME, "temperature": TEMPERATURE}
_EXAMPLES = {"length": "mm", "mass": "t", "force": "N", "time": "s", "temperature": "K"}
_NATURE = {
    MASS: "a mass",
    TIME: "a time",
    FORCE: "a force",
    MOMENT: "a moment",
    POWER: "a heat flow",
    TEMPERATURE: "a temperature",
    LENGTH: "a length",
}


@dataclass(frozen=True, kw_only=True)
class Scale:
    """What is known of a unit system: sizes of its units in SI, None where not stated. time: in s, 1 if not stated."""

    units: UnitSystem
    time: float = 1.0
    length: float | None = None
    mass: float | None = None
    temperature: float | None = None

    @property
    def loaded(self) -> UnitSystem:
        """The unit system of the model as loaded: time is in seconds."""
        return replace(self.units, time="s") if self.units != UnitSystem() else self.units

    def coherent(self, dimension: Dimension, time: float) -> float | None:
        """SI size of the coherent unit of ``dimension``, with ``time`` as unit of time; None if the system is silent.

        A stated force unit stays what it is; a stated mass unit makes the force unit depend on the time unit.
        """
        sizes = {"[length]": self.length, "[mass]": self._mass(time), "[temperature]": self.temperature, "[time]": time}
        out = 1.0
        for base, exponent in dimension:
            size = sizes.get(base)
            if size is None:
                return None
            out *= size**exponent
        return out

    def _mass(self, time: float) -> float | None:
        if self.units.mass or not self.units.force:
            return self.mass
        return None if self.length is None else unit(self.units.force).factor * time**2 / self.length


def scale_of(units: UnitSystem, where: str) -> Scale:
    """The sizes behind the unit texts. Raises UnitError for unknown units and for units of something else."""
    sizes = {name: _base(name, text, where) for name in _BASES if (text := getattr(units, name))}
    scale = Scale(
        units=units,
        time=sizes.get("time", 1.0),
        length=sizes.get("length"),
        mass=sizes.get("mass"),
        temperature=sizes.get("temperature"),
    )
    force = sizes.get("force")
    if force and scale.mass and scale.length:
        implied = scale.mass * scale.length / scale.time**2
        if not math.isclose(force, implied, rel_tol=1e-6):
            raise UnitError(
                "mass and force units contradict each other",
                expected=f"force = mass * length / time^2 = {implied:.6g} N",
                got=f"unit_force {units.force} = {force:.6g} N",
                where=where,
                remedy="leave one of the two out",
            )
    return scale


def _base(name: str, text: str, where: str) -> float:
    expected = f'a unit of {name} such as "{_EXAMPLES[name]}"'
    try:
        u = unit(text)
    except UnitError as error:
        raise UnitError(error.what, expected=expected, got=text, where=where, remedy=error.remedy) from error
    if u.dimension != _BASES[name]:
        raise UnitError(f"unit_{name} is a unit of something else", expected=expected, got=text, where=where)
    return u.factor


# ---- one channel ---------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Meaning:
    """What a channel can be by its column of the load or its row of the outputs.

    dimensions: what it is where the matrix only picks unknowns; usual: the one taken when no unit is stated, None if
    unclear. picks: whether it only picks (all entries 1 or -1). noun: for messages.
    """

    dimensions: tuple[Dimension, ...] = ()
    usual: Dimension | None = None
    picks: bool = False
    noun: str = ""


def factor_and_unit(channel: Input | Output, meaning: Meaning, scale: Scale, where: str) -> tuple[float, str]:
    """(physical value in the channel's unit per value in the file's matrices, the channel's unit).

    Raises UnitError for a unit that cannot be what the channel is, or that cannot be converted.
    """
    if not channel.unit:
        return _default(meaning, scale)
    u = _stated(channel, where)
    _check_nature(channel, u, meaning, where)
    _check_power(channel, u, scale, where)
    coherent = scale.coherent(u.dimension, scale.time)
    if coherent is None:
        if u.factor != 1.0:
            raise _not_convertible(channel, u, where)
        return 1.0, channel.unit
    return _tidy(coherent / u.factor), channel.unit


def _default(meaning: Meaning, scale: Scale) -> tuple[float, str]:
    if meaning.usual is None or scale.units == UnitSystem():
        return 1.0, ""
    before, after = scale.coherent(meaning.usual, scale.time), scale.coherent(meaning.usual, 1.0)
    if before is None or after is None or (meaning.usual == POWER and scale.time != 1.0):
        return 1.0, ""
    return _tidy(before / after), _text_of(meaning.usual, scale, after)


def _stated(channel: Input | Output, where: str) -> Unit:
    try:
        return unit(channel.unit)
    except UnitError as error:
        remedy = error.remedy or "correct the unit, or leave it out"
        raise UnitError(
            f"channel {channel.name}: {error.what}", expected=error.expected, got=error.got, where=where, remedy=remedy
        ) from error


def _check_nature(channel: Input | Output, u: Unit, meaning: Meaning, where: str) -> None:
    # Sums weighted by other numbers may be anything (stress, strain, reactions, base motion through -M r).
    fits = u.dimension in meaning.dimensions and not (u.is_ratio and channel.unit != "1")
    if not meaning.picks or fits:
        return
    wanted = " or ".join(dict.fromkeys(_name_of(d) for d in meaning.dimensions))
    raise UnitError(
        f"channel {channel.name} has a unit of something else",
        expected=f"{wanted}: {meaning.noun}",
        got=f"{channel.unit}, {'a ratio' if u.is_ratio else _name_of(u.dimension)}",
        where=where,
        remedy=_NATURE_REMEDY if channel.unit != "g" else 'write "g0" for standard gravity',
    )


def _check_power(channel: Input | Output, u: Unit, scale: Scale, where: str) -> None:
    # Who writes "kg, m, h" beside watts does not mean kg m^2/h^3, and a factor of 5e10 is no guess to make.
    if u.dimension == POWER and scale.time != 1.0 and scale.coherent(POWER, scale.time) is not None:
        raise UnitError(
            f"channel {channel.name}: the unit of power is not clear",
            expected="time in seconds, or a system without mass and force",
            got=f"unit_time {scale.units.time} beside unit_{'mass' if scale.units.mass else 'force'}",
            where=where,
            remedy="leave unit_mass and unit_force out if the matrices hold watts",
        )


_NATURE_REMEDY = 'correct the unit; if the matrix itself holds this unit, say channel_units = "channels"'


def _not_convertible(channel: Input | Output, u: Unit, where: str) -> UnitError:
    named = [_ATTRIBUTES[base] for base, _ in u.dimension if base in _ATTRIBUTES] or ["unit_length"]
    return UnitError(
        f"channel {channel.name} is in {channel.unit}, but the units of the matrices are not known",
        expected="the model's unit system, or plain SI units (m, N, s, K, W)",
        got=channel.unit,
        where=where,
        remedy=f"state {', '.join(dict.fromkeys(named))} of the matrices in the file",
    )


_ATTRIBUTES = {"[length]": "unit_length", "[mass]": "unit_mass or unit_force", "[temperature]": "unit_temperature"}


def _name_of(dimension: Dimension) -> str:
    if dimension in _NATURE:
        return _NATURE[dimension]
    if dimension == ():
        return "an angle"
    powers = dict(dimension)
    per = {-1.0: " per time", -2.0: " per time squared"}.get(powers.pop("[time]", 0.0), "")
    rest = tuple(sorted(powers.items()))
    if per and rest in ((), LENGTH):
        return ("an angle" if rest == () else "a length") + per
    return "something of dimension " + " ".join(f"{base}^{exponent:g}" for base, exponent in dimension)


def _text_of(dimension: Dimension, scale: Scale, size: float) -> str:
    """A readable unit text of the coherent unit of ``dimension`` whose SI size is ``size``, time in seconds."""
    if dimension in (FORCE, POWER):
        return _prefixed(size, "N" if dimension == FORCE else "W") or _composed(dimension, scale)
    if dimension == MOMENT:
        force = scale.coherent(FORCE, 1.0)
        return f"{_text_of(FORCE, scale, force or 1.0)} {scale.units.length}"
    return _composed(dimension, scale)


def _prefixed(size: float, base: str) -> str:
    for prefix, factor in (("", 1.0), ("m", 1e-3), ("k", 1e3), ("u", 1e-6), ("M", 1e6), ("n", 1e-9), ("G", 1e9)):
        if math.isclose(size, factor, rel_tol=1e-9):
            return prefix + base
    return ""


def _composed(dimension: Dimension, scale: Scale) -> str:
    units = scale.units
    if dimension in (FORCE, POWER) and units.force:
        return units.force if dimension == FORCE else f"{units.force} {units.length}/s"
    words = {"[length]": units.length, "[mass]": units.mass, "[temperature]": units.temperature, "[time]": "s"}
    order = sorted(dimension, key=lambda item: ("[mass]", "[length]", "[temperature]", "[time]").index(item[0]))
    over = [words[b] + (f"^{e:g}" if e != 1 else "") for b, e in order if e > 0]
    under = [words[b] + (f"^{-e:g}" if e != -1 else "") for b, e in order if e < 0]
    top = " ".join(over) or "rad"
    return f"{top}/{under[0]}" if under else top


def _tidy(factor: float) -> float:
    # Exactly 1 where nothing is to be converted, and 0.001 rather than a neighbour of it.
    return float(f"{factor:.14g}")


# ---- what the matrices say about a channel -------------------------------------------------------------------------


def rotations(unknowns: Unknowns | None, n: int) -> Any:
    """Mask (n,) of unknowns that are rotations by their direction labels, None without labels.

    Labels such as rx, ry, rz, rotx, theta_z; 4, 5, 6.
    """
    if unknowns is None or len(unknowns.direction) != n:
        return None
    return np.array([_is_rotation(label) for label in unknowns.direction])


def _is_rotation(label: str) -> bool:
    word = label.strip().lower().replace("_", "").replace("-", "")
    return word in ("4", "5", "6") or word.startswith(("r", "theta", "θ", "φ", "phi"))


def meaning_of_load(column: Any, turning: Any, kind: str) -> Meaning:
    """What an input can be by its load column (n,)."""
    if kind == "state space":
        return Meaning()
    picks = _picks(column)
    if kind == "thermal":
        return Meaning(dimensions=(POWER,), usual=POWER, picks=picks, noun="its load column only picks unknowns")
    kinds = _kinds(column, turning, FORCE, MOMENT)
    usual = kinds[0] if turning is None or len(kinds) == 1 else None
    return Meaning(dimensions=kinds, usual=usual, picks=picks, noun="its load column only picks unknowns")


def meaning_of_output(rows: dict[int, Any], turning: Any, kind: str) -> Meaning:
    """What an output can be by its rows {order of the time derivative: row (n,)}."""
    used = {order: row for order, row in rows.items() if row is not None and np.any(row)}
    if kind == "state space" or len(used) != 1:
        return Meaning()
    order, row = next(iter(used.items()))
    noun = "its output row only picks unknowns"
    if kind == "thermal":
        return Meaning(dimensions=(TEMPERATURE,), usual=TEMPERATURE, picks=_picks(row), noun=noun)
    rate: Dimension = (("[time]", -float(order)),) if order else ()
    kinds = _kinds(row, turning, (*LENGTH, *rate), rate)
    usual = kinds[0] if turning is None or len(kinds) == 1 else None
    return Meaning(dimensions=kinds, usual=usual, picks=_picks(row), noun=noun)


def _kinds(entries: Any, turning: Any, moving: Dimension, rotating: Dimension) -> tuple[Dimension, ...]:
    if turning is None:
        return (moving, rotating)
    hit = turning[np.flatnonzero(entries)]
    return ((moving,) if not hit.all() else ()) + ((rotating,) if hit.any() else ())


def _picks(entries: Any) -> bool:
    hit = entries[np.flatnonzero(entries)]
    return bool(hit.size) and bool(np.all(np.abs(hit) == 1.0))
