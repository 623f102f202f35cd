"""Reduced models' files: what a reviewer needs, so that nothing is trusted unseen.

/model         the small model as a model file of its own
/system        the same to the last digit, in modal coordinates, with its statics
/source, /certificate, /table   the full model and all its computed modes, kept or not
/kept          numbers of the kept modes
/statics       how the statics of the dropped modes are held (attribute kind)
/measures      the ranking, where there was one
/samples       the full model's response that the error was measured on
/result        choice, band, error and notes
"""

from __future__ import annotations

from typing import Any

import h5py
import numpy as np
import scipy.sparse as sp

from modesieve.io import hdf5
from modesieve.io.atomic import PathLike
from modesieve.io.hdf5 import Node, Source
from modesieve.io.hdf5_arrays import write_array
from modesieve.io.model_file import write_model
from modesieve.io.modes_file import check_format, check_system, group, read_modes, write_table
from modesieve.io.record_file import check_shapes, read_numbers, read_record, write_record
from modesieve.io.seal import write_seal
from modesieve.reduce.errors import FileError
from modesieve.reduce.modal.records import Modes, Ranking
from modesieve.reduce.model import Damping, Model, StateSpace, Structure
from modesieve.reduce.response.records import FullResponse
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem
from modesieve.reduce.truncation.records import ReducedModel

FORMAT, VERSION = "modesieve reduced model", 1
_ELSEWHERE = ("modes", "kept", "system", "statics", "samples", "ranking")
_STATICS = ("none", "feedthrough", "vectors")
_HUB = {"load_rest": "rm", "output_rest": "3rp", "tail_rest": "rt", "amplitudes": "m", "resolutions": "p"}
_HUB |= {"direct": "pm", "massless": "pm"}
_GUARANTEE = {"omega": "w", "difference": "w", "hub_error": "w", "reference": "w", "pair_peak": "pm"}
_SAMPLES = {"omega": "w", "G": "wpm", "backward_error": "w", "residual": "w", "method": "w"}


def load_reduced(path: PathLike) -> ReducedModel:
    """Read a reduced model with everything it was made from, equal to the saved one to the last digit.

    The full model and the mode shapes are not part of the file. Raises FileError for a damaged file or another kind.
    """
    with hdf5.opened(path) as source:
        return read_reduced_file(source)


def read_reduced_file(source: Source) -> ReducedModel:
    """Read the reduced model of an opened file."""
    check_format(source, FORMAT, VERSION)
    file = source.file
    modes = read_modes(source, file)
    small = read_record(
        source,
        group(source, file, "result"),
        ReducedModel,
        modes=modes,
        kept=_kept(source, file, modes),
        system=_system(source, file, modes),
        statics=_statics(source, file),
        samples=_samples(source, file, modes),
        ranking=_ranking(source, file, modes),
    )
    _check_grounds(small, source.at("/result"))
    return small


def write_reduced(file: Node, small: ReducedModel) -> None:
    """Write a reduced model's file."""
    file.attrs["format"] = FORMAT
    file.attrs["version"] = VERSION
    write_model(file.create_group("model"), as_model(small))
    write_record(file.create_group("system"), small.system)
    write_table(file, small.modes)
    write_array(file, "kept", np.array(small.kept, dtype=np.int64))
    file.create_group("statics").attrs["kind"] = small.statics
    if small.ranking is not None:
        write_record(file.create_group("measures"), small.ranking, without=("modes",))
    if small.samples is not None:
        write_record(file.create_group("samples"), small.samples)
    write_record(file.create_group("result"), small, without=_ELSEWHERE)
    if small.guarantee is not None and small.guarantee.spot_checks:
        file["spot_checks"] = h5py.SoftLink("/result/guarantee/spot_checks")
    write_seal(file)


def as_model(small: ReducedModel) -> Model:
    """The small model as a model: second order where that says the same, else real state space.

    State space has no loss factor: there it is a damping ratio of half its size.
    """
    origin, system = small.modes.origin, small.system
    common: dict[str, Any] = {"inputs": origin.inputs, "outputs": origin.outputs, "units": origin.units}
    common |= {"title": f"{origin.title}, reduced" if origin.title else "reduced model"}
    if isinstance(system, SecondOrderModal) and system.terms and (system.eta_X == 0 or not np.any(system.X)):
        return _structure(system, common)
    A, B, C, D = _state_space(system)
    return StateSpace(A=A, B=B, C=C, D=D, **common)


def _structure(system: SecondOrderModal, common: dict[str, Any]) -> Structure:
    lossy = np.any(system.eta)
    damping = Damping(
        viscous=sp.diags_array(system.d) if np.any(system.d) else None,
        stiffness_loss=sp.diags_array(system.eta * system.x) if lossy else None,
    )
    rates = {name: getattr(system, low) for name, low in (("Cv", "cv"), ("Ca", "ca")) if np.any(getattr(system, low))}
    return Structure(
        K=sp.diags_array(system.x),
        M=sp.eye_array(system.terms),
        F=system.b,
        Cq=system.cq,
        Du=system.D + system.X,
        damping=damping,
        **rates,
        **common,
    )


def _state_space(system: SmallSystem) -> tuple[Any, Any, Any, Any]:
    A, B, C, D = system.state_space()
    if len(A):
        return A, B, C, D
    # Nothing but feedthrough is left: a model needs a state, so it gets one that nothing moves.
    return -np.eye(1), np.zeros((1, system.m)), np.zeros((system.p, 1)), D


def _check_grounds(small: ReducedModel, where: str) -> None:
    """Hold the hub's and the guarantee's arrays against the channels."""
    p, m = small.modes.origin.p, small.modes.origin.m
    if small.hub is not None:
        check_system(small.hub.system, f"{where}/hub/system", p, m)
        check_shapes(small.hub, _HUB, f"{where}/hub", p=p, m=m, t=small.hub.system.terms - small.hub.computed)
    if small.guarantee is not None:
        check_shapes(small.guarantee, _GUARANTEE, f"{where}/guarantee", p=p, m=m)


def _kept(source: Source, file: Node, modes: Modes) -> tuple[int, ...]:
    node = hdf5.child(source, file, "kept")
    if node is None:
        raise FileError("the list of kept modes is missing", expected="a dataset kept", where=source.path)
    kept = read_numbers(source, node, np.int64, "/kept")
    where = source.at("/kept")
    ascending = kept.ndim == 1 and bool(np.all(np.diff(kept) > 0))
    if not ascending or (kept.size and not (kept[0] >= 1 and kept[-1] <= len(modes))):
        raise FileError("the kept modes are no list of modes", expected=f"1 to {len(modes)}, ascending", where=where)
    return tuple(int(number) for number in kept)


def _system(source: Source, file: Node, modes: Modes) -> SmallSystem:
    node = group(source, file, "system")
    stated = hdf5.text_attribute(source, node, "record")
    kind: Any = SecondOrderModal if stated == SecondOrderModal.__name__ else FirstOrderModal
    system: SmallSystem = read_record(source, node, kind)
    check_system(system, source.at("/system"), modes.origin.p, modes.origin.m)
    return system


def _statics(source: Source, file: Node) -> Any:
    stated = hdf5.text_attribute(source, group(source, file, "statics"), "kind")
    if stated not in _STATICS:
        expected, where = ", ".join(_STATICS), source.at("/statics")
        raise FileError("unknown statics", expected=expected, got=repr(stated), where=where)
    return stated


def _samples(source: Source, file: Node, modes: Modes) -> FullResponse | None:
    node = hdf5.child(source, file, "samples")
    if node is None:
        return None
    samples = read_record(source, group(source, file, "samples"), FullResponse)
    check_shapes(samples, _SAMPLES, source.at("/samples"), p=modes.origin.p, m=modes.origin.m)
    return samples


def _ranking(source: Source, file: Node, modes: Modes) -> Ranking | None:
    if hdf5.child(source, file, "measures") is None:
        return None
    ranking = read_record(source, group(source, file, "measures"), Ranking, modes=modes)
    where = source.at("/measures")
    check_shapes(ranking, {"order": "k"}, where, k=len(modes))
    for name, values in ranking.measures.items():
        if values.shape != (len(modes),):
            got = f"{values.shape}"
            raise FileError(
                "shapes do not agree", expected=f"({len(modes)},)", got=got, where=f"{where}/measures/{name}"
            )
    return ranking
