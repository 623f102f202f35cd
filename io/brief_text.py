"""A brief as commented text: what `modesieve brief` prints and every run keeps beside its results."""

from __future__ import annotations

import json
import math
import os
import re
import tomllib
from collections.abc import Iterable
from pathlib import Path

from modesieve.io.settings import Settings
from modesieve.reduce.fingerprint import describe_damping
from modesieve.reduce.modal.measures import MEASURES
from modesieve.reduce.model import Model, Structure
from modesieve.reduce.truncation.records import Band, Choice, Count, Keep, Tolerance


def brief_text(model: Model, name: str, settings: Settings, notes: Iterable[str] = ()) -> str:
    """The brief that runs ``settings`` on the model file ``name`` (relative to the brief's folder)."""
    parts = [
        _head(model),
        f'model = {_quoted(name)}\n# folder = "results"  # for the results; otherwise named after this file',
        _places(model),
        _damping(model),
        _modes(model, settings),
        _keep(model, settings, notes),
        _output(settings),
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def _quoted(text: str) -> str:
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _one_line(text: str) -> str:
    return "".join(c if c.isprintable() else "?" for c in text)


def _head(model: Model) -> str:
    noun = "states" if model.kind == "state space" else "unknowns"
    title = f"{model.title}: " if model.title else ""
    return _one_line(f"# {title}{model.kind}, {model.n} {noun}, {model.m} inputs, {model.p} outputs.") + (
        "\n# Run it with `modesieve run THIS-FILE.toml`. Paths are relative to this file's folder; every quantity"
        "\n# carries its unit. A line that begins with # is not read."
    )


def _places(model: Model) -> str:
    first = {"structure": "stiffness", "thermal": "conductance"}.get(model.kind, "A")
    load = "B" if model.kind == "state space" else "load"
    return (
        "# For a file of another layout, where its matrices lie:\n"
        "# [places]\n"
        f'# {first} = "/model/K"\n'
        f'# {load} = {{ path = "/model/F", transposed = true, index_base = 1, layout = "COO" }}'
    )


def _damping(model: Model) -> str:
    if not isinstance(model, Structure):
        return ""
    return (
        _one_line(f"# Damping in place of the model file's own ({describe_damping(model)}); exactly one of these:\n")[
            :-1
        ]
        + "\n# [damping]\n"
        '# ratio = "1 %"                                        # every counted mode\n'
        '# by_frequency = [["0 Hz", "2 %"], ["100 Hz", "1 %"]]  # linear between, ends held\n'
        '# by_mode = ["2 %", "1 %"]                             # flexible modes in order, last value held\n'
        '# rayleigh = { alpha = "2 1/s", beta = "1e-6 s" }\n'
        '# loss_factor = "2 %"\n'
        "# none = true"
    )


def _modes(model: Model, settings: Settings) -> str:
    low, high = settings.band
    thermal = model.kind == "thermal"
    if thermal:
        ends = (time_text(high), time_text(low))
        about = (
            "# band of interest: time constants (or frequencies), in either order; computed to 1.5 times its fast end"
        )
    else:
        ends = (hertz_text(low), hertz_text(high))
        about = "# band of interest; modes are computed to 1.5 times its top"
    count = f"count = {settings.count}" if settings.count is not None else "# count = 40"
    solver = "" if settings.solver == "auto" else f'\nsolver = "{settings.solver}"'
    return (
        f"[modes]\n{about}\nband = [{_quoted(ends[0])}, {_quoted(ends[1])}]\n"
        f"{count:<24} # at least so many modes\n"
        f'rank_by = "{settings.by}"\n{_wrapped("one of: " + ", ".join(MEASURES))}{solver}'
    )


def _wrapped(text: str) -> str:
    import textwrap

    return "\n".join(f"# {line}" for line in textwrap.wrap(text, 110, break_on_hyphens=False))


def hertz_text(omega: float) -> str:
    """A frequency that reads back to the last digit that matters.

    >>> hertz_text(2 * math.pi * 0.2)
    '0.2 Hz'
    """
    return f"{omega / (2 * math.pi):.12g} Hz"


def time_text(rate: float) -> str:
    """A time constant for a decay rate in 1/s; steady state as 0 Hz.

    >>> time_text(1 / 3600), time_text(1 / 5), time_text(0.0)
    ('1 h', '5 s', '0 Hz')
    """
    if rate == 0:
        return "0 Hz"
    t = float(f"{1 / rate:.12g}")
    for size, name in ((3600.0, "h"), (60.0, "min")):
        if t >= size and float(f"{t / size:.6g}") * size == t:
            return f"{t / size:.6g} {name}"
    return f"{t:.12g} s"


# ---- what stays ------------------------------------------------------------------------------------------------------

_OTHERS = (
    ('tolerance = "2 %"', 'fewest modes whose error passes; of = "local" or "peak"; or a size such as "0.5 K"'),
    ("modes = 12", "the first of the ranking"),
    ("band = true", "every mode in the band"),
    ("numbers = [1, 2, 5]", "these"),
    ('list_file = "keep.toml"', "those of a keep list"),
    ('above = { peak-share = "1 %" }', "those above a share of the largest (decay: a time)"),
)


def _keep(model: Model, settings: Settings, notes: Iterable[str]) -> str:
    chosen = choice_lines(settings.choice)
    names = {line.split(" =")[0] for line in chosen}
    others = [f"# {line:<32} # {text}" for line, text in _OTHERS if line.split(" =")[0] not in names]
    told = [f"# {_one_line(note)}" for note in notes]
    statics = f'statics = "{settings.statics}"' if settings.statics is not None else '# statics = "vectors"'
    levels = [f"levels = {settings.levels}"] if settings.statics == "vectors" else []
    return "\n".join(
        [
            "[keep]",
            *told,
            *chosen,
            "# instead of it, exactly one of:",
            *others,
            "# what stands for the dropped modes: none, feedthrough, vectors; left out: the best that is legal",
            statics,
            *levels,
        ]
    )


def choice_lines(choice: Choice) -> list[str]:
    """The choice as lines of the section [keep]."""
    match choice:
        case Tolerance(of="absolute"):
            return [f'tolerance = "{choice.value:.12g} {choice.unit}"']
        case Tolerance():
            return [f'tolerance = "{100 * choice.value:.12g} %"', f'of = "{choice.of}"']
        case Count(modes=count):
            return [f"modes = {count}"]
        case Keep(numbers=numbers):
            return [f"numbers = {list(numbers)}"]
        case Band():
            return ["band = true"]
        case tuple():
            shares = ", ".join(f"{one.measure} = {_share(one.measure, one.share)}" for one in choice)
            return [f"above = {{ {shares} }}"]
    raise TypeError(f"no choice: {choice!r}")


def _share(measure: str, value: float) -> str:
    return _quoted(f"{value:.12g} s") if measure == "decay" else f"{value:.12g}"


def _output(settings: Settings) -> str:
    figures = ", ".join(_quoted(one) for one in settings.figures)
    return (
        "[output]\n"
        f"figures = [{figures}]{'':<10} # svg, pdf, png; [] for none\n"
        f"sweep = {str(settings.sweep).lower():<19} # error over the number of kept modes\n"
        f"times = {str(settings.times).lower():<19} # step and impulse responses"
    )


# ---- moving a brief --------------------------------------------------------------------------------------------------

_PATH = re.compile(r"""^(\s*(?:model|list_file)\s*=\s*)("(?:[^"\\]|\\.)*"|'[^']*')""", re.MULTILINE)


def relocated(text: str, base: Path, folder: Path) -> str:
    """The brief ``text`` with its paths, relative to ``base``, made to work from ``folder``; comments stay.

    >>> print(relocated('model = "a.h5"  # mine', Path("/job"), Path("/job/results")))
    model = "../a.h5"  # mine
    """

    def moved(found: re.Match[str]) -> str:
        path = Path(str(tomllib.loads(f"path = {found[2]}")["path"]))
        return found[1] + _quoted(str(path) if path.is_absolute() else os.path.relpath(base / path, folder))

    return _PATH.sub(moved, text)
