"""From a person's words to the typed choices of a run: bands, tolerances, thresholds."""

from __future__ import annotations

from modesieve.io.units import conversion, parse_band, parse_ratio, parse_time, parse_tolerance, unit
from modesieve.reduce.errors import ChoiceError, UnitError
from modesieve.reduce.model import Interface, Model
from modesieve.reduce.truncation.records import Above, Tolerance


def band_of(low: str, high: str, model: Model, where: str = "") -> tuple[float, float]:
    """The band in rad/s (thermal: decay rates in 1/s; two time constants in either order).

    Raises UnitError, and ChoiceError for a low end that is not below the high one.
    """
    ends = parse_band(low, high, thermal=model.kind == "thermal")
    if not ends[0] < ends[1]:
        raise ChoiceError(
            "the band's low end is not below its high end",
            expected="two different ends, the lower frequency first",
            got=f"{low} to {high}",
            where=where,
            remedy="exchange the two" if ends[0] > ends[1] else "give the band some width",
        )
    return ends


def tolerance_of(text: str, of: str | None, channels: Interface, where: str = "") -> Tolerance:
    """``"2 %"`` relative to ``of`` (local if None), or an absolute size, in the unit of the outputs it is about.

    >>> from modesieve.reduce.model import Output
    >>> tolerance_of("0.5 mm", None, Interface(outputs=(Output(name="tip", unit="m"),)))
    Tolerance(value=0.0005, of='absolute', unit='m')

    Raises UnitError where no output has a unit of that kind, and for a size that is said to be relative.
    """
    q = parse_tolerance(text)
    if not q.unit:
        return Tolerance(value=q.value, of="peak" if of == "peak" else "local")
    if of is not None:
        raise UnitError(
            "a tolerance with a unit is absolute",
            expected='a share such as "2 %", or no word of what it is relative to',
            got=f"{text} of {of}",
            where=where,
        )
    own = _output_unit(q.unit, channels, text, where)
    return Tolerance(value=q.value * conversion(q.unit, own), of="absolute", unit=own)


def _output_unit(given: str, channels: Interface, text: str, where: str) -> str:
    """The unit of the outputs that a tolerance in the unit ``given`` speaks of."""
    units = list(dict.fromkeys(c.unit for c in channels.outputs))
    kind = unit(given).dimension
    fitting = [u for u in units if u and unit(u).dimension == kind]
    if given in fitting or len(fitting) == 1:
        return given if given in fitting else fitting[0]
    raise UnitError(
        "no output has a unit of the tolerance's kind" if not fitting else "several outputs' units fit the tolerance",
        expected="a tolerance in the unit of the outputs that matter: " + ", ".join(u or "no unit" for u in units),
        got=text,
        where=where,
        remedy='give a share such as "2 %"' + ("" if any(units) else "; the outputs of this model have no units"),
    )


def above_of(name: str, value: str | float) -> Above:
    """A threshold: a share of the largest ("1 %" or 0.01); for decay a time ("3 s").

    >>> above_of("peak-share", "1 %"), above_of("decay", "2 min")
    (Above(measure='peak-share', share=0.01), Above(measure='decay', share=120.0))
    """
    if name == "decay":
        return Above(measure=name, share=parse_time(str(value), what="the threshold on decay"))
    try:
        return Above(measure=name, share=float(value))
    except ValueError:
        return Above(measure=name, share=parse_ratio(str(value), what=f"the threshold on {name}"))
