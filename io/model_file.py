"""Model files: one HDF5 file (or group) per model, read with every check and written whole or not at all.

    root attributes   format, version, kind, title, unit_length, unit_mass or unit_force, unit_time, unit_temperature
    structure         stiffness, mass, load, displacement_output, velocity_output, acceleration_output, feedthrough
    thermal           conductance, capacity, load, output, feedthrough
    state space       A, B, C, D, E
    damping           damping_ratio, damping_by_frequency, damping_by_mode, rayleigh or loss_factor; damping,
                      stiffness_loss (matrices) on top
    inputs, outputs   groups: name, unit, amplitude or resolution
    unknowns          group: node, direction, xyz

Load and outputs are in the unit system's coherent units unless the root attribute ``channel_units = "channels"`` says
that they already are in the units of their channels; files written here say so.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.io import hdf5
from modesieve.io.atomic import PathLike
from modesieve.io.channels import Scale, scale_of
from modesieve.io.conversion import to_channels, to_seconds
from modesieve.io.damping_file import DAMPING_ATTRIBUTES, DAMPING_TABLES, read_base, write_base
from modesieve.io.hdf5 import Node, Source
from modesieve.io.labels_file import MOST_CHANNELS, read_channels, read_unknowns, write_channels, write_unknowns
from modesieve.io.matrices import Place, Stored, locate
from modesieve.io.matrix_values import read_dense, read_sparse, write_matrix
from modesieve.reduce.arrays import DENSE_LIMIT
from modesieve.reduce.errors import FileError, ModelError, ModesieveError
from modesieve.reduce.model import (
    BaseDamping,
    Damping,
    Input,
    Model,
    Output,
    StateSpace,
    Structure,
    Thermal,
    UnitSystem,
    Unknowns,
)

FORMAT, VERSION = "modesieve model", 1


@dataclass(frozen=True, kw_only=True)
class _Matrix:
    """One matrix of a kind of model: its name in files, its letter, its role in sizes."""

    name: str
    letter: str
    role: str  # "square", "load", "output" or "through"
    required: bool = False


_STRUCTURE = (
    _Matrix(name="stiffness", letter="K", role="square", required=True),
    _Matrix(name="mass", letter="M", role="square", required=True),
    _Matrix(name="load", letter="F", role="load"),
    _Matrix(name="displacement_output", letter="Cq", role="output"),
    _Matrix(name="velocity_output", letter="Cv", role="output"),
    _Matrix(name="acceleration_output", letter="Ca", role="output"),
    _Matrix(name="feedthrough", letter="Du", role="through"),
    _Matrix(name="damping", letter="viscous", role="square"),
    _Matrix(name="stiffness_loss", letter="loss", role="square"),
)
_THERMAL = (
    _Matrix(name="conductance", letter="K", role="square", required=True),
    _Matrix(name="capacity", letter="E", role="square", required=True),
    _Matrix(name="load", letter="F", role="load"),
    _Matrix(name="output", letter="C", role="output"),
    _Matrix(name="feedthrough", letter="D", role="through"),
)
_STATE_SPACE = (
    _Matrix(name="A", letter="A", role="square", required=True),
    _Matrix(name="E", letter="E", role="square"),
    _Matrix(name="B", letter="B", role="load"),
    _Matrix(name="C", letter="C", role="output"),
    _Matrix(name="D", letter="D", role="through"),
)
MATRICES = {"structure": _STRUCTURE, "thermal": _THERMAL, "state space": _STATE_SPACE}
_UNITS = {f"unit_{name}": name for name in ("length", "mass", "force", "time", "temperature")}
_ATTRIBUTES = ("format", "version", "kind", "title", "channel_units", *_UNITS, *DAMPING_ATTRIBUTES)
_LIBRARY_ATTRIBUTES = ("TITLE", "VERSION", "CLASS")  # what other HDF5 writers leave on every group
_GROUPS = ("inputs", "outputs", "unknowns")


# ---- reading -------------------------------------------------------------------------------------------------------


def load_model(path: PathLike, places: Mapping[str, str | Place] | None = None) -> Model:
    """Read a model file.

    places: where matrices lie in a file of another layout, e.g. ``{"stiffness": "/model/K"}``; a `Place` also says
    layout, index base, orientation and triangle. Of a reduced model's file, its small model is read.

    Raises FileError for a file that is damaged, incomplete or something else, ModelError for matrices that do not fit
    together, UnitError for units that do not.
    """
    with hdf5.opened(path) as source:
        return read_model_file(source, places)


def read_model_file(source: Source, places: Mapping[str, str | Place] | None = None) -> Model:
    """Read the model of an opened file."""
    root = source.file
    if hdf5.text_attribute(source, root, "format") == "modesieve reduced model":
        root = hdf5.find(source, "/model")
        if root is None:
            raise FileError("the file holds no small model", expected="a group /model", where=source.path)
    return read_model(source, root, _as_places(places or {}))


def read_model(source: Source, root: Node, places: Mapping[str, Place]) -> Model:
    """Read the model that the group ``root`` holds."""
    _check_format(source, root)
    kind = _kind(source, root, places)
    stored = _located(source, root, kind, places)
    _check_misspelt(source, root, kind, bool(places))
    n, m, p = _sizes(stored, kind)
    channels = read_channels(source, root, m, p)
    unknowns = read_unknowns(source, root, n)
    base = read_base(source, root, kind)
    scale = scale_of(_unit_system(source, root), source.path)
    parts = {name: _read(matrix, found, n) for name, (matrix, found) in stored.items()}
    try:
        base = to_seconds(kind, parts, base, scale)
        if _needs_conversion(source, root):
            channels = to_channels(kind, parts, channels, unknowns, n, scale, source.path)
        return _model(kind, parts, channels, unknowns, base, scale, _told(source, root))
    except ModesieveError as error:
        raise _placed(error, source.path) from error


def _as_places(places: Mapping[str, str | Place]) -> dict[str, Place]:
    known = {m.name for matrices in MATRICES.values() for m in matrices}
    for name in places:
        if name not in known:
            close = difflib.get_close_matches(name, sorted(known), 1)
            remedy = f"did you mean {close[0]}?" if close else ""
            got = repr(name)
            raise FileError("there is no matrix of this name", expected="a matrix name", got=got, remedy=remedy)
    return {name: Place(path=place) if isinstance(place, str) else place for name, place in places.items()}


def _check_format(source: Source, root: Node) -> None:
    """A file without a format is taken as a model if its matrices have the right names."""
    given = hdf5.text_attribute(source, root, "format", FORMAT)
    if given != FORMAT:
        raise FileError("this is not a model file", expected=f'format = "{FORMAT}"', got=repr(given), where=source.path)
    version = hdf5.number_attribute(source, root, "version")
    if version is not None and version[0] != VERSION:
        got = f"version {version[0]:g}"
        remedy = "use a newer version of this program" if version[0] > VERSION else ""
        expected = f"version {VERSION}"
        raise FileError(
            "unknown version of the model file", expected=expected, got=got, where=source.path, remedy=remedy
        )


def _kind(source: Source, root: Node, places: Mapping[str, Place]) -> str:
    stated = hdf5.text_attribute(source, root, "kind")
    if stated in MATRICES:
        return stated
    expected = ", ".join(f'"{kind}"' for kind in MATRICES)
    if stated:
        close = difflib.get_close_matches(stated.lower().replace("_", " "), MATRICES, 1)
        remedy = f'did you mean "{close[0]}"?' if close else ""
        where = source.at("attribute kind")
        raise FileError("unknown kind of model", expected=expected, got=repr(stated), where=where, remedy=remedy)
    held = {*hdf5.names(root, source.path), *places}
    fitting = [kind for kind, matrices in MATRICES.items() if any(m.required and m.name in held for m in matrices)]
    if len(fitting) == 1:
        return fitting[0]
    got = ", ".join(sorted(held)[:12]) or "an empty file"
    remedy = 'state the attribute kind, or say where each matrix lies (stiffness = "/model/K")'
    expected = "an attribute kind, or matrices under their names"
    raise FileError("the file does not say what it holds", expected=expected, got=got, where=source.path, remedy=remedy)


def _located(source: Source, root: Node, kind: str, places: Mapping[str, Place]) -> dict[str, tuple[_Matrix, Stored]]:
    """Letter to matrix and its checked place."""
    out = {}
    for matrix in MATRICES[kind]:
        place = places.get(matrix.name)
        found = locate(source, place or Place(path=matrix.name), root)
        if found is not None:
            out[matrix.letter] = (matrix, found)
        elif matrix.required or place:
            raise _missing(source, root, matrix, place)
    return out


def _missing(source: Source, root: Node, matrix: _Matrix, place: Place | None) -> FileError:
    held = hdf5.names(root, source.path)
    close = _close(matrix.name, [name for name in held if name not in _known_names()])
    remedy = f'say where it lies ({matrix.name} = "/model/..."), or rename it'
    if close:
        remedy = f'rename "{close}" to "{matrix.name}", or say {matrix.name} = "/{close}"'
    return FileError(
        f"the matrix {matrix.name} is missing",
        expected=f"a dataset or group {place.path if place else matrix.name}",
        got=", ".join(held[:12]) or "an empty group",
        where=source.at(root.name),
        remedy=remedy if place is None else "correct the place",
    )


def _known_names() -> set[str]:
    return {m.name for matrices in MATRICES.values() for m in matrices} | set(_GROUPS) | set(DAMPING_TABLES)


def _close(name: str, candidates: list[str]) -> str:
    folded = {c.lower().replace("-", "_"): c for c in candidates}
    found = difflib.get_close_matches(name.lower(), folded, 1, 0.8)
    return folded[found[0]] if found else ""


def _check_misspelt(source: Source, root: Node, kind: str, foreign: bool) -> None:
    """Refuse a name that nearly is an optional one: leaving it out silently would change the answer."""
    if foreign:
        return
    extra = DAMPING_TABLES if kind == "structure" else ()
    names = {"dataset": {*(m.name for m in MATRICES[kind]), *_GROUPS, *extra}, "attribute": set(_ATTRIBUTES)}
    held = {"dataset": hdf5.names(root, source.path), "attribute": hdf5.attribute_names(root, source.path)}
    for noun, wanted in names.items():
        absent = [name for name in wanted if name not in held[noun] and len(name) > 2]
        for name in held[noun]:
            close = "" if name in wanted or name in _LIBRARY_ATTRIBUTES else _close(name, sorted(absent))
            if close:
                where = source.at(f"{root.name.rstrip('/')}/{name}" if noun == "dataset" else f"attribute {name}")
                raise FileError(f"unknown {noun}", expected=close, got=name, where=where, remedy="correct the name")


def _sizes(stored: dict[str, tuple[_Matrix, Stored]], kind: str) -> tuple[int, int, int]:
    """(n, m, p), with every matrix held against them before any is read."""
    first, found = next(iter(stored.values()))
    n = found.final_shape[0]
    loads = [s.final_shape[1] for x, s in stored.values() if x.role == "load"]
    outputs = [s.final_shape[0] for x, s in stored.values() if x.role == "output"]
    m, p = (loads or [0])[0], (outputs or [0])[0]
    if max(m, p) > MOST_CHANNELS:
        expected, got = f"at most {MOST_CHANNELS} inputs and outputs", f"{m} and {p}"
        raise ModelError("too many channels", expected=expected, got=got, where=found.source.path)
    wanted = {"square": (n, n), "load": (n, m), "output": (p, n), "through": (p, m)}
    meant = {
        "square": f"n by n as {first.name}",
        "load": f"{n} rows, one per unknown",
        "output": f"{n} columns, one per unknown, and as many rows as the other outputs",
        "through": "outputs by inputs",
    }
    for matrix, part in stored.values():
        shape = part.final_shape
        if shape != wanted[matrix.role] or n == 0:
            turned = shape[::-1] == wanted[matrix.role]
            raise ModelError(
                f"{matrix.name} has the wrong shape",
                expected=f"{wanted[matrix.role]}: {meant[matrix.role]}",
                got=f"{shape}",
                where=part.where,
                remedy="store the transpose" if turned else "",
            )
    return n, m, p


def _read(matrix: _Matrix, found: Stored, n: int) -> Any:
    if matrix.role != "square":
        return read_dense(found)
    state = matrix.letter == "A" or (matrix.letter == "E" and matrix.name == "E")
    return read_dense(found) if state and found.layout == "dense" and n <= DENSE_LIMIT else read_sparse(found)


def _unit_system(source: Source, root: Node) -> UnitSystem:
    return UnitSystem(**{name: hdf5.text_attribute(source, root, key).strip() for key, name in _UNITS.items()})


def _needs_conversion(source: Source, root: Node) -> bool:
    given = hdf5.text_attribute(source, root, "channel_units", "matrices")
    if given not in ("matrices", "channels"):
        where = source.at("attribute channel_units")
        raise FileError("unknown channel_units", expected='"matrices" or "channels"', got=repr(given), where=where)
    return given == "matrices"


def _told(source: Source, root: Node) -> dict[str, str]:
    return {"title": hdf5.text_attribute(source, root, "title"), "source": source.path}


def _model(
    kind: str,
    parts: dict[str, Any],
    channels: tuple[tuple[Input, ...], tuple[Output, ...]],
    unknowns: Unknowns | None,
    base: BaseDamping,
    scale: Scale,
    told: dict[str, str],
) -> Model:
    for part in parts.values():
        if isinstance(part, np.ndarray):
            part.flags.writeable = False  # ours alone: the model need not copy it
    common: dict[str, Any] = {"inputs": channels[0], "outputs": channels[1], "unknowns": unknowns}
    common |= {"units": scale.loaded, **told}
    if kind == "structure":
        damping = Damping(base=base, viscous=parts.pop("viscous", None), stiffness_loss=parts.pop("loss", None))
        return Structure(damping=damping, **parts, **common)
    return Thermal(**parts, **common) if kind == "thermal" else StateSpace(**parts, **common)


def _placed(error: ModesieveError, path: str) -> ModesieveError:
    """The same error with the file's name, if it names no place yet."""
    where = error.where if path in error.where else ", ".join(part for part in (path, error.where) if part)
    return type(error)(error.what, expected=error.expected, got=error.got, where=where, remedy=error.remedy)


# ---- writing -------------------------------------------------------------------------------------------------------


def write_model(group: Node, model: Model) -> None:
    """Write ``model`` into an HDF5 file or group so that `read_model` gives the same model to the last digit."""
    group.attrs["format"] = FORMAT
    group.attrs["version"] = VERSION
    group.attrs["kind"] = model.kind
    group.attrs["title"] = model.title
    group.attrs["channel_units"] = "channels"
    units = model.units if model.units == UnitSystem() else replace(model.units, time="s")
    for key, name in _UNITS.items():
        if text := getattr(units, name):
            group.attrs[key] = text
    for matrix in MATRICES[model.kind]:
        part = _part(model, matrix.letter)
        if part is not None and 0 not in part.shape:
            write_matrix(group, matrix.name, _thinned(part) if matrix.role != "square" else part)
    write_channels(group, model)
    if model.unknowns is not None:
        write_unknowns(group, model.unknowns)
    if isinstance(model, Structure):
        write_base(group, model.damping.base)


def _part(model: Model, letter: str) -> Any:
    if isinstance(model, Structure) and letter in ("viscous", "loss"):
        return model.damping.viscous if letter == "viscous" else model.damping.stiffness_loss
    return getattr(model, letter)


def _thinned(matrix: Any) -> Any:
    """Large load and output matrices are mostly zeros: stored sparse they take a thousandth."""
    thin = matrix.size > 1 << 16 and np.count_nonzero(matrix) < matrix.size // 8
    return sp.csr_array(matrix) if thin else matrix
