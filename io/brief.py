"""The brief: a run in a TOML file, checked as a whole before anything is read or computed."""

from __future__ import annotations

import difflib
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, model_validator

from modesieve.io.atomic import PathLike
from modesieve.io.choices import above_of, band_of, tolerance_of
from modesieve.io.keep_list import keep_list_for, read_toml
from modesieve.io.matrices import Place
from modesieve.io.model_file import MATRICES, load_model
from modesieve.io.settings import Settings
from modesieve.io.units import parse_frequency, parse_quantity, parse_ratio, parse_time, parse_tolerance, unit
from modesieve.reduce.errors import ChoiceError, FileError, ModesieveError, UnitError
from modesieve.reduce.modal.measures import MEASURES
from modesieve.reduce.model import (
    BaseDamping,
    LossFactor,
    ModalRatio,
    Model,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    Structure,
)
from modesieve.reduce.truncation.records import Band, Choice, Count, Keep

__all__ = ["Brief", "brief_model", "brief_settings", "read_brief"]

FIGURE_FORMATS = ("svg", "pdf", "png")


# ---- texts with units, checked where they stand ----------------------------------------------------------------------


def _checked(parse: Any) -> Any:
    """A text that ``parse`` accepts; bare numbers reach it as texts, so that its message names the missing unit."""

    def check(value: Any) -> Any:
        text = str(value) if isinstance(value, (int, float)) and not isinstance(value, bool) else value
        if not isinstance(text, str):
            raise ValueError("expected a text with a number and a unit")
        parse(text)
        return text

    return BeforeValidator(check)


def _rate(text: str) -> float:
    """A rate in 1/s. Raises UnitError."""
    q = parse_quantity(text, what="alpha", example="2 1/s")
    u = unit(q.unit) if q.unit else None
    if u is None or dict(u.dimension) != {"[time]": -1.0} or u.is_hertz:
        raise UnitError("alpha is no rate", expected='for example "2 1/s"', got=text)
    return q.value * u.factor


def _zeta(text: str) -> float:
    """A damping ratio. Raises UnitError for no ratio or one outside 0 to below 1."""
    value = parse_ratio(text, what="the damping ratio")
    if not 0 <= value < 1:
        raise UnitError("the damping ratio is out of range", expected="0 to below 100 %", got=text)
    return value


def _eta(text: str) -> float:
    """A loss factor. Raises UnitError for no ratio or one outside 0 to below 2."""
    value = parse_ratio(text, what="the loss factor")
    if not 0 <= value < 2:
        raise UnitError("the loss factor is out of range", expected="0 to below 200 %", got=text)
    return value


def _measure(value: Any) -> Any:
    if value not in MEASURES:
        near = difflib.get_close_matches(str(value), MEASURES, n=2)
        hint = f"; did you mean {' or '.join(near)}?" if near else ""
        raise ValueError(f"unknown measure {value!r}{hint} (one of {', '.join(MEASURES)})")
    return value


Frequency = Annotated[str, _checked(parse_frequency)]
Tolerated = Annotated[str, _checked(parse_tolerance)]
Zeta = Annotated[str, _checked(_zeta)]
Measure = Annotated[str, BeforeValidator(_measure)]


# ---- the sections ----------------------------------------------------------------------------------------------------


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class PlaceSection(_Section):
    """Where a matrix lies in a file of another layout, and what that file does not say."""

    path: str
    layout: Literal["", "CSR", "CSC", "COO"] = ""
    index_base: Literal[0, 1] | None = None
    transposed: bool = False
    symmetric: Literal["", "lower", "upper"] = ""


class RayleighSection(_Section):
    """``alpha M + beta K``."""

    alpha: Annotated[str, _checked(_rate)]
    beta: Annotated[str, _checked(parse_time)]


class DampingSection(_Section):
    """A base damping in place of the model file's own; local parts of the file stay."""

    none: Literal[True] | None = None
    ratio: Zeta | None = None
    by_frequency: list[tuple[Frequency, Zeta]] | None = Field(default=None, min_length=1)
    by_mode: list[Zeta] | None = Field(default=None, min_length=1)
    rayleigh: RayleighSection | None = None
    loss_factor: Annotated[str, _checked(_eta)] | None = None

    @model_validator(mode="after")
    def _one(self) -> DampingSection:
        _exactly_one(self, tuple(type(self).model_fields), "damping")
        return self


class ModesSection(_Section):
    """What is computed, and how it is ranked."""

    band: tuple[Frequency, Frequency]
    count: int | None = Field(default=None, ge=1)
    rank_by: Measure = "band-share"
    solver: Literal["auto", "pardiso", "superlu"] = "auto"


class KeepSection(_Section):
    """Which modes stay, and what stands for the rest."""

    tolerance: Tolerated | None = None
    of: Literal["local", "peak"] | None = None
    modes: int | None = Field(default=None, ge=1)
    band: Literal[True] | None = None
    numbers: list[int] | None = None
    list_file: str | None = None
    above: dict[str, str | float] | None = Field(default=None, min_length=1)
    statics: Literal["none", "feedthrough", "vectors"] | None = None
    levels: int = Field(default=2, ge=1, le=3)

    @model_validator(mode="after")
    def _one(self) -> KeepSection:
        _exactly_one(self, ("tolerance", "modes", "band", "numbers", "list_file", "above"), "choice of modes")
        if self.of is not None and self.tolerance is None:
            raise ValueError("`of` says what a tolerance is relative to, and there is no tolerance")
        for name, value in (self.above or {}).items():
            _measure(name)
            above_of(name, value)
        return self


class OutputSection(_Section):
    """What is written."""

    figures: list[Literal["svg", "pdf", "png"]] = ["svg"]
    sweep: bool = True
    times: bool = True


class Brief(_Section):
    """A whole run. Paths are relative to the brief's own folder."""

    model: str
    folder: str = ""
    places: dict[str, str | PlaceSection] = {}
    damping: DampingSection | None = None
    modes: ModesSection
    keep: KeepSection
    output: OutputSection = OutputSection()


def _exactly_one(section: BaseModel, names: tuple[str, ...], what: str) -> None:
    given = [name for name in names if getattr(section, name) is not None]
    if len(given) != 1:
        got = " and ".join(given) if given else "none"
        raise ValueError(f"exactly one {what} is needed: {', '.join(names)} (got {got})")


# ---- reading ---------------------------------------------------------------------------------------------------------


def read_brief(path: PathLike) -> Brief:
    """The brief in a TOML file.

    Raises FileError with every mistake at once: its place in the file, what is wrong, and close matches for misspelt
    names.
    """
    return brief_from(read_toml(path), str(path))


def brief_from(content: dict[str, Any], where: str = "") -> Brief:
    """The brief in a dictionary; see `read_brief`."""
    try:
        brief = Brief.model_validate(content)
    except ValidationError as error:
        mistakes = [_mistake(one) for one in error.errors(include_url=False)]
        raise _refusal(list(dict.fromkeys(mistakes)), where) from error
    unknown = [_unknown_place(name) for name in brief.places if name not in _matrix_names()]
    if unknown:
        raise _refusal(unknown, where)
    return brief


def _refusal(mistakes: list[str], where: str) -> FileError:
    count = "a mistake" if len(mistakes) == 1 else f"{len(mistakes)} mistakes"
    return FileError("\n".join([f"the brief has {count}", *(f"  {text}" for text in mistakes)]), where=where)


def _mistake(error: Any) -> str:
    """One line: the path, what is wrong, what to do."""
    loc = tuple(part for part in error["loc"] if part not in ("str", "float", "PlaceSection"))
    place = ".".join(str(part + 1) if isinstance(part, int) else part for part in loc) or "the brief"
    kind, cause = error["type"], error.get("ctx", {}).get("error")
    if kind == "extra_forbidden":
        return f"{place}: unknown name{_near(loc)}"
    if kind == "missing":
        return f"{place}: missing"
    if isinstance(cause, ModesieveError):
        return f"{place}: {_in_one_line(cause)}"
    return f"{place}: {cause if cause is not None else _plain(error)}"


def _plain(error: Any) -> str:
    text = error["msg"][:1].lower() + error["msg"][1:]
    return text if isinstance(error["input"], dict) else f"{text} (got {error['input']!r})"


def _in_one_line(error: ModesieveError) -> str:
    """A domain error on one line; what was got is quoted, the remedy last."""
    parts = [
        error.what,
        f"expected {error.expected}" if error.expected else "",
        f"got {error.got}" if error.got else "",
    ]
    return "; ".join(part for part in (*parts, error.remedy) if part)


def _near(loc: tuple[Any, ...]) -> str:
    known = _names_at(loc[:-1])
    close = difflib.get_close_matches(str(loc[-1]), known, n=2)
    if close:
        return f"; did you mean {' or '.join(close)}?"
    return f" (known here: {', '.join(known)})" if known else ""


def _names_at(loc: tuple[Any, ...]) -> list[str]:
    """Names that a section may have."""
    section: type[BaseModel] = Brief
    for part in loc:
        found = _SECTIONS.get(part)
        if found is None:
            return list(PlaceSection.model_fields) if loc[:1] == ("places",) else []
        section = found
    return list(section.model_fields)


_SECTIONS: dict[Any, type[BaseModel]] = {
    "damping": DampingSection,
    "rayleigh": RayleighSection,
    "modes": ModesSection,
    "keep": KeepSection,
    "output": OutputSection,
}


def _matrix_names() -> list[str]:
    return [matrix.name for matrices in MATRICES.values() for matrix in matrices]


def _unknown_place(name: str) -> str:
    close = difflib.get_close_matches(name, _matrix_names(), n=2)
    return f"places.{name}: no matrix has this name" + (f"; did you mean {' or '.join(close)}?" if close else "")


# ---- from the brief to model and settings ----------------------------------------------------------------------------


def brief_model(brief: Brief, base: Path) -> Model:
    """The model that the brief names, with its damping. Raises FileError, ModelError or UnitError."""
    places = {
        name: Place(**place.model_dump()) if isinstance(place, PlaceSection) else place
        for name, place in brief.places.items()
    }
    model = load_model(base / brief.model, places)
    return model if brief.damping is None else _damped(model, brief.damping)


def _damped(model: Model, section: DampingSection) -> Model:
    from dataclasses import replace

    if not isinstance(model, Structure):
        raise ChoiceError(
            f"a {model.kind} model takes no damping from the brief",
            expected="a structure",
            got=f"a {model.kind} model, whose damping is in its matrices",
            where="damping",
            remedy="remove the section [damping]",
        )
    return replace(model, damping=replace(model.damping, base=_base(section)))


def _base(section: DampingSection) -> BaseDamping:
    import numpy as np

    if section.ratio is not None:
        return ModalRatio(ratio=_zeta(section.ratio))
    if section.by_frequency is not None:
        table = sorted((parse_frequency(f, time_constants=False), _zeta(z)) for f, z in section.by_frequency)
        return RatioByFrequency(omega=np.array([w for w, _ in table]), ratio=np.array([z for _, z in table]))
    if section.by_mode is not None:
        return RatioByMode(ratio=np.array([_zeta(z) for z in section.by_mode]))
    if section.rayleigh is not None:
        return Rayleigh(alpha=_rate(section.rayleigh.alpha), beta=parse_time(section.rayleigh.beta))
    return None if section.loss_factor is None else LossFactor(eta=_eta(section.loss_factor))


def brief_settings(brief: Brief, model: Model, base: Path) -> Settings:
    """The settings for ``model``. Raises UnitError or ChoiceError where the brief does not fit this model."""
    band = band_of(*brief.modes.band, model, where="modes.band")
    return Settings(
        band=band,
        choice=_choice(brief.keep, band, model, base),
        by=brief.modes.rank_by,
        count=brief.modes.count,
        solver=brief.modes.solver,
        statics=brief.keep.statics,
        levels=brief.keep.levels,
        sweep=brief.output.sweep,
        times=brief.output.times,
        figures=tuple(brief.output.figures),
    )


def _choice(keep: KeepSection, band: tuple[float, float], model: Model, base: Path) -> Choice:
    if keep.tolerance is not None:
        return tolerance_of(keep.tolerance, keep.of, model, where="keep.tolerance")
    if keep.modes is not None:
        return Count(modes=keep.modes)
    if keep.numbers is not None:
        return Keep(numbers=tuple(sorted(set(keep.numbers))))
    if keep.list_file is not None:
        return keep_list_for(model, base / keep.list_file)
    if keep.above is not None:
        return tuple(above_of(name, value) for name, value in keep.above.items())
    return Band(low=band[0], high=band[1])
