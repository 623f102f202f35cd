"""Base damping in model files: one attribute or one table."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from modesieve.io import hdf5
from modesieve.io.hdf5 import Node, Source
from modesieve.io.hdf5_arrays import array, read_real, write_array
from modesieve.reduce.errors import FileError, ModelError
from modesieve.reduce.model import BaseDamping, LossFactor, ModalRatio, RatioByFrequency, RatioByMode, Rayleigh

DAMPING_ATTRIBUTES = ("damping_ratio", "rayleigh", "loss_factor")
DAMPING_TABLES = ("damping_by_frequency", "damping_by_mode")


def read_base(source: Source, root: Node, kind: str) -> BaseDamping:
    """The base damping that the group states, None if none. Raises ModelError for more than one, or outside 0..1."""
    held = (*hdf5.attribute_names(root, source.path), *hdf5.names(root, source.path))
    given = [name for name in (*DAMPING_ATTRIBUTES, *DAMPING_TABLES) if name in held]
    where = source.at(root.name)
    if given and kind != "structure":
        got = ", ".join(given)
        raise ModelError(f"a {kind} model with a damping", expected="damping in the matrices", got=got, where=where)
    if len(given) > 1:
        raise ModelError(
            "more than one base damping",
            expected="at most one of " + ", ".join((*DAMPING_ATTRIBUTES, *DAMPING_TABLES)),
            got=" and ".join(given),
            where=where,
            remedy="keep one; local parts go into the matrices damping and stiffness_loss",
        )
    return _READERS[given[0]](source, root) if given else None


def write_base(group: Node, base: BaseDamping) -> None:
    """Write the base damping so that reading gives the same to the last digit."""
    match base:
        case ModalRatio(ratio=ratio):
            group.attrs["damping_ratio"] = ratio
        case Rayleigh(alpha=alpha, beta=beta):
            group.attrs["rayleigh"] = np.array([alpha, beta])
        case LossFactor(eta=eta):
            group.attrs["loss_factor"] = eta
        case RatioByFrequency(omega=omega, ratio=ratio):
            write_array(group, "damping_by_frequency", np.column_stack([omega, ratio]))
            group["damping_by_frequency"].attrs["unit"] = "rad/s"  # hertz would cost the last digit
        case RatioByMode(ratio=ratio):
            write_array(group, "damping_by_mode", np.asarray(ratio))


def _ratio(source: Source, root: Node) -> BaseDamping:
    return ModalRatio(ratio=_number(source, root, "damping_ratio", 1.0))


def _loss(source: Source, root: Node) -> BaseDamping:
    return LossFactor(eta=_number(source, root, "loss_factor", 2.0))


def _number(source: Source, root: Node, name: str, below: float) -> float:
    numbers = hdf5.number_attribute(source, root, name)
    assert numbers is not None
    if not 0 <= numbers[0] < below:
        raise ModelError(
            f"{name} is out of range",
            expected=f"0 to below {below:g} (2 % is 0.02)",
            got=f"{numbers[0]:g}",
            where=source.at(f"attribute {name}"),
            remedy=f"write {numbers[0] / 100:g} if {numbers[0]:g} % is meant" if numbers[0] > 0 else "",
        )
    return numbers[0]


def _rayleigh(source: Source, root: Node) -> BaseDamping:
    numbers = hdf5.number_attribute(source, root, "rayleigh", 2)
    assert numbers is not None
    return Rayleigh(alpha=numbers[0], beta=numbers[1])


def _by_frequency(source: Source, root: Node) -> BaseDamping:
    data = array(source, hdf5.child(source, root, "damping_by_frequency"))
    if len(data.shape) != 2 or data.shape[1] != 2 or data.shape[0] < 1:
        got = f"shape {data.shape}"
        raise FileError("damping_by_frequency has the wrong shape", expected="(k, 2)", got=got, where=data.where)
    unit = hdf5.text_attribute(source, data.node, "unit", "Hz")
    if unit not in ("Hz", "rad/s"):
        raise FileError("unknown unit of frequency", expected='"Hz" or "rad/s"', got=repr(unit), where=data.where)
    table = read_real(data)
    if np.any(np.diff(table[:, 0]) <= 0) or table[0, 0] < 0:
        raise ModelError("frequencies do not ascend", expected="ascending, from 0 on", where=data.where)
    _check_ratios(table[:, 1], data.where)
    return RatioByFrequency(omega=table[:, 0] * (2 * math.pi if unit == "Hz" else 1.0), ratio=table[:, 1].copy())


def _by_mode(source: Source, root: Node) -> BaseDamping:
    data = array(source, hdf5.child(source, root, "damping_by_mode"))
    if len(data.shape) != 1 or data.shape[0] < 1:
        got = f"shape {data.shape}"
        raise FileError("damping_by_mode has the wrong shape", expected="a list", got=got, where=data.where)
    table = read_real(data)
    _check_ratios(table, data.where)
    return RatioByMode(ratio=table)


def _check_ratios(ratio: Any, where: str) -> None:
    if np.any((ratio < 0) | (ratio >= 1)):
        got = f"{ratio.min():g} to {ratio.max():g}"
        raise ModelError("damping ratios out of range", expected="0 to below 1 (2 % is 0.02)", got=got, where=where)


_READERS = {
    "damping_ratio": _ratio,
    "rayleigh": _rayleigh,
    "loss_factor": _loss,
    "damping_by_frequency": _by_frequency,
    "damping_by_mode": _by_mode,
}
