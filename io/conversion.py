"""Bringing what a model file holds to the units of a loaded model: time in seconds, channels in their stated units.

With T seconds to the file's unit of time, ``d/dt_file = T d/dt``: ``M -> T^2 M, D -> T D, Cv -> T Cv, Ca -> T^2 Ca``
for structures (``K, D, F -> K/T^2, D/T, F/T^2`` instead where the file states a mass unit, so that masses stay in it),
``E -> T E`` for first order. A channel whose coherent unit is f times its stated one scales its output row by f, or its
load column by 1/f.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import scipy.sparse as sp

from modesieve.io.channels import Meaning, Scale, factor_and_unit, meaning_of_load, meaning_of_output, rotations
from modesieve.reduce.model import BaseDamping, Input, Output, Rayleigh, UnitSystem, Unknowns

#: Output matrices by kind of model: order of the time derivative to the name of the part.
OUTPUTS = {"structure": {0: "Cq", 1: "Cv", 2: "Ca"}, "thermal": {0: "C"}, "state space": {0: "C"}}
LOAD = {"structure": "F", "thermal": "F", "state space": "B"}
THROUGH = {"structure": "Du", "thermal": "D", "state space": "D"}


def to_seconds(kind: str, parts: dict[str, Any], base: BaseDamping, scale: Scale) -> BaseDamping:
    """Scale the matrices in place so that time is in seconds; returns the base damping likewise."""
    T = scale.time
    if T == 1.0:
        return base
    for name, factor in _time_factors(kind, parts, T, bool(scale.units.mass)).items():
        _multiply(parts.get(name), factor)
    return Rayleigh(alpha=base.alpha / T, beta=base.beta * T) if isinstance(base, Rayleigh) else base


def _time_factors(kind: str, parts: dict[str, Any], T: float, own_mass: bool) -> dict[str, float]:
    if kind == "thermal":
        return {"E": T}
    if kind == "state space":
        return {"E": T} if parts.get("E") is not None else {"A": 1 / T, "B": 1 / T}
    if own_mass:
        return {"K": T**-2, "loss": T**-2, "viscous": 1 / T, "F": T**-2, "Cv": T, "Ca": T**2}
    return {"M": T**2, "viscous": T, "Cv": T, "Ca": T**2}


def to_channels(
    kind: str,
    parts: dict[str, Any],
    channels: tuple[tuple[Input, ...], tuple[Output, ...]],
    unknowns: Unknowns | None,
    n: int,
    scale: Scale,
    where: str,
) -> tuple[tuple[Input, ...], tuple[Output, ...]]:
    """Scale load, outputs and feedthrough in place to the units the channels state; fill in units that are clear.

    Raises UnitError for a unit that does not fit its channel.
    """
    if kind == "state space" and scale.units == UnitSystem():
        return channels  # nothing is known of the states: units are names here
    load, through = parts.get(LOAD[kind]), parts.get(THROUGH[kind])
    rows = {order: parts.get(name) for order, name in OUTPUTS[kind].items()}
    turning = rotations(unknowns, n)
    inputs, outputs = [], []
    for l, given in enumerate(channels[0]):
        meaning = meaning_of_load(load[:, l], turning, kind) if load is not None else Meaning()
        factor, text = factor_and_unit(given, meaning, scale, where)
        inputs.append(replace(given, unit=text))
        _multiply_part(load, (slice(None), l), 1 / factor)
        _multiply_part(through, (slice(None), l), 1 / factor)
    for k, wanted in enumerate(channels[1]):
        meaning = meaning_of_output({o: None if C is None else C[k] for o, C in rows.items()}, turning, kind)
        factor, text = factor_and_unit(wanted, meaning, scale, where)
        outputs.append(replace(wanted, unit=text))
        for matrix in (*rows.values(), through):
            _multiply_part(matrix, (k, slice(None)), factor)
    return tuple(inputs), tuple(outputs)


def _multiply(matrix: Any, factor: float) -> None:
    if matrix is not None:
        values = matrix.data if sp.issparse(matrix) else matrix
        values *= factor


def _multiply_part(matrix: Any, part: Any, factor: float) -> None:
    if matrix is not None and factor != 1.0:
        matrix[part] *= factor
