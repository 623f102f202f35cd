"""A stand-alone surrogate as one source file: Python with numpy only, or C99."""

from __future__ import annotations

from dataclasses import dataclass
from importlib.resources import files
from typing import Any, Literal

import numpy as np
import scipy.sparse as sp
from jinja2 import Environment, StrictUndefined
from scipy.linalg import expm

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import Interface
from modesieve.reduce.response.discrete import Discrete, real_blocks
from modesieve.reduce.response.small import SmallSystem


@dataclass(frozen=True, kw_only=True, eq=False)
class Surrogate:
    """What a surrogate is written from. uniform (states,): state of one degree everywhere, None where unknown.

    notes: lines for the header (model, band, errors with their certainty, cautions).
    """

    system: SmallSystem
    discrete: Discrete
    interface: Interface
    notes: tuple[str, ...] = ()
    uniform: Real | None = None


def source(surrogate: Surrogate, language: Literal["python", "c"]) -> str:
    """The surrogate's source text.

    Raises ChoiceError for a model without channels: there is nothing to call.
    """
    interface = surrogate.interface
    if interface.m == 0 or interface.p == 0:
        raise ChoiceError(
            "a surrogate needs inputs and outputs",
            expected="at least one of each",
            got=f"{interface.m} inputs, {interface.p} outputs",
        )
    name = {"python": "surrogate.py.jinja", "c": "surrogate.c.jinja"}[language]
    text = files("modesieve.io.handover").joinpath(name).read_text("utf-8")
    # Not HTML: source text, in which every value below is a number or a quoted literal.
    environment = Environment(autoescape=False, keep_trailing_newline=True, undefined=StrictUndefined)
    return environment.from_string(text).render(**_values(surrogate, language))


def _values(surrogate: Surrogate, language: str) -> dict[str, Any]:
    d, interface = surrogate.discrete, surrogate.interface
    n, m = d.B.shape
    N = sp.csr_array(increment(surrogate.system, d))
    shift, uniform = np.zeros((n, m)), None
    shift[: d.states] = d.shift
    if surrogate.uniform is not None:
        uniform = np.zeros(n)
        uniform[: d.states] = surrogate.uniform
    rows = np.repeat(np.arange(n), np.diff(N.indptr))
    ranges = [0.0 if c.amplitude is None else c.amplitude for c in interface.inputs]
    return {
        "header": [_comment(line) for line in _header(surrogate)],
        "n": n,
        "size_n": max(n, 1),  # C99 has no empty arrays
        "m": m,
        "p": len(d.C),
        "nnz": max(N.nnz, 1),
        "dt": repr(float(d.dt)),
        "indptr": ", ".join(map(str, N.indptr)),
        "indices": ", ".join(map(str, N.indices)) or "0",
        "rows": rows.tolist(),
        "columns": N.indices.tolist(),
        "N": _numbers(N.data, language),
        "B": _numbers(d.B, language),
        "C": _numbers(d.C, language),
        "D": _numbers(d.D, language),
        "shift": _numbers(shift, language),
        "uniform": "" if uniform is None else _numbers(uniform, language),
        "ranges": _numbers(np.array(ranges), language),
        "input_names": [c.name for c in interface.inputs],
        "input_units": [c.unit for c in interface.inputs],
        "output_names": [c.name for c in interface.outputs],
        "output_units": [c.unit for c in interface.outputs],
    }


def increment(system: SmallSystem, discrete: Discrete) -> Real:
    """``A - I`` with the digits that ``e^{A dt} - 1`` has and subtracting 1 afterwards would lose."""
    N = discrete.A - np.eye(len(discrete.A))
    at = 0
    for block in real_blocks(system):
        r = len(block)
        N[at : at + r, at : at + r] = _expm1(block * discrete.dt)
        at += r
    return N


def _expm1(Z: Real) -> Real:
    """``e^Z - I = Z phi(Z)``, from one exponential of ``[[Z, I], [0, 0]]``."""
    if len(Z) == 1:
        return np.expm1(Z)
    r = len(Z)
    wide = np.zeros((2 * r, 2 * r))
    wide[:r, :r], wide[:r, r:] = Z, np.eye(r)
    return Z @ expm(wide)[:r, r:]


def _numbers(values: Any, language: str) -> str:
    """Round-trip literals; C takes 0.0 for an empty array's one place."""
    text = ", ".join(repr(float(v)) for v in np.ravel(values))
    return text or ("0.0" if language == "c" else "")


def _header(surrogate: Surrogate) -> list[str]:
    interface, d = surrogate.interface, surrogate.discrete
    lines = [f"Surrogate of {interface.title or 'a reduced model'}, written by modesieve."]
    lines += [f"Sample time {d.dt:g} s, {'held' if d.hold == 'zero' else 'linear'} inputs, delay {d.delay:g} s."]
    lines += [_channel("Input", k, c.name, c.unit) for k, c in enumerate(interface.inputs)]
    lines += [_channel("Output", k, c.name, c.unit) for k, c in enumerate(interface.outputs)]
    return [*lines, *surrogate.notes]


def _channel(noun: str, k: int, name: str, unit: str) -> str:
    return f"{noun} {k}: {name}" + (f", {unit}" if unit else "")


def _comment(line: str) -> str:
    """Names come from files: nothing in them may end a comment or a docstring, or start a new line."""
    flat = " ".join(line.split())
    return flat.replace("\\", "/").replace("*/", "* /").replace("/*", "/ *").replace('"""', "'''").replace('"', "'")
