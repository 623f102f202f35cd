"""A hash over what a model means, not over the bytes of its file."""

from __future__ import annotations

import hashlib
from typing import Any

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.model import (
    BaseDamping,
    LossFactor,
    ModalRatio,
    Model,
    Origin,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    Structure,
    Thermal,
)


def fingerprint(model: Model) -> str:
    """SHA-256 (hex) over the canonical matrices (sorted CSR, float64), the damping and the channels."""
    sha = hashlib.sha256(model.kind.encode())
    for name, matrix in _matrices(model):
        sha.update(name.encode())
        _feed(sha, matrix)
    for channel in (*model.inputs, *model.outputs):
        sha.update(repr(channel).encode())
    return sha.hexdigest()


def origin_of(model: Model) -> Origin:
    """What results remember of ``model``."""
    return Origin(
        kind=model.kind,
        n=model.n,
        fingerprint=fingerprint(model),
        damping=describe_damping(model),
        inputs=model.inputs,
        outputs=model.outputs,
        units=model.units,
        title=model.title,
        source=model.source,
    )


def describe_damping(model: Model) -> str:
    """The damping in words, with its numbers.

    >>> from modesieve.reduce.model import Damping, ModalRatio, Structure
    >>> describe_damping(Structure(K=np.eye(2), M=np.eye(2), damping=Damping(base=ModalRatio(ratio=0.01))))
    'damping ratio 1 % on every counted flexible mode'
    """
    if not isinstance(model, Structure):
        return "in the matrices"
    parts = [_describe_base(model.damping.base)]
    if model.damping.viscous is not None:
        parts.append("a local viscous matrix")
    if model.damping.stiffness_loss is not None:
        parts.append("a local imaginary stiffness")
    return ", and ".join(part for part in parts if part != "none" or len(parts) == 1)


def _describe_base(base: BaseDamping) -> str:
    match base:
        case ModalRatio(ratio=ratio):
            return f"damping ratio {100 * ratio:.3g} % on every counted flexible mode"
        case RatioByFrequency(ratio=ratio):
            return f"damping ratio by frequency, {100 * ratio.min():.3g} to {100 * ratio.max():.3g} %, counted modes"
        case RatioByMode(ratio=ratio):
            return f"damping ratio by mode, {100 * ratio.min():.3g} to {100 * ratio.max():.3g} %, counted modes"
        case Rayleigh(alpha=alpha, beta=beta):
            return f"Rayleigh, alpha {alpha:.4g} 1/s, beta {beta:.4g} s"
        case LossFactor(eta=eta):
            return f"loss factor {eta:.3g}"
    return "none"


def _matrices(model: Model) -> list[tuple[str, Any]]:
    if isinstance(model, Structure):
        base = model.damping.base
        table = (
            np.concatenate([base.omega, base.ratio])
            if isinstance(base, RatioByFrequency)
            else base.ratio
            if isinstance(base, RatioByMode)
            else None
        )
        scalars = None if base is None or table is not None else repr(base)
        return [
            *((name, getattr(model, name)) for name in ("K", "M", "F", "Cq", "Cv", "Ca", "Du")),
            ("base " + type(base).__name__ + (scalars or ""), table),
            ("viscous", model.damping.viscous),
            ("stiffness loss", model.damping.stiffness_loss),
        ]
    names = ("K", "E", "F", "C", "D") if isinstance(model, Thermal) else ("A", "E", "B", "C", "D")
    return [(name, getattr(model, name)) for name in names]


def _feed(sha: Any, matrix: Any) -> None:
    if matrix is None:
        sha.update(b"none")
    elif sp.issparse(matrix):
        sha.update(repr(matrix.shape).encode())
        for part, dtype in ((matrix.indptr, "<i8"), (matrix.indices, "<i8"), (matrix.data, "<f8")):
            _feed_array(sha, part, dtype)
    else:
        array = np.ascontiguousarray(matrix)
        sha.update(repr(array.shape).encode())
        _feed_array(sha, array.ravel(), "<f8")


def _feed_array(sha: Any, array: Any, dtype: str) -> None:
    # In pieces: converting an index array whole would double a large model's memory.
    for start in range(0, len(array), 1 << 20):
        piece = np.ascontiguousarray(array[start : start + (1 << 20)], dtype=dtype)
        sha.update((piece + 0.0 if dtype == "<f8" else piece).tobytes())  # -0.0 becomes 0.0
