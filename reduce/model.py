"""The model kinds: frozen records of matrices, channels, damping, labels and units.

Inside a model time is in seconds and angular frequency in rad/s; length, mass and temperature are the matrices' own.
Letters follow the literature: K, M stiffness and mass, F load, Cq, Cv, Ca displacement, velocity and acceleration
outputs, Du feedthrough; E, K, F, C, D for thermal models; A, B, C, D, E for state space.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, ClassVar, TypeAlias

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Complex, Real, Sparse, as_csr, frozen
from modesieve.reduce.errors import ModelError

#: Load, outputs and feedthrough may be left out; the record then holds arrays of no columns or zeros, never None.
_ABSENT: Any = None


@dataclass(frozen=True, kw_only=True)
class Input:
    """One input channel. ``amplitude`` is its typical size in ``unit``; None means not given (weight 1)."""

    name: str
    unit: str = ""
    amplitude: float | None = None


@dataclass(frozen=True, kw_only=True)
class Output:
    """One output channel. ``resolution`` is the smallest change that matters, in ``unit``; None: not given (1)."""

    name: str
    unit: str = ""
    resolution: float | None = None


@dataclass(frozen=True, kw_only=True)
class UnitSystem:
    """The units of the matrices as texts that the unit parser knows; empty where not stated."""

    length: str = ""
    mass: str = ""
    force: str = ""
    time: str = ""
    temperature: str = ""


@dataclass(frozen=True, kw_only=True, eq=False)
class Unknowns:
    """Which row is which unknown: node and direction labels, and coordinates in the model's length unit."""

    node: tuple[str, ...] = ()
    direction: tuple[str, ...] = ()
    xyz: Real | None = None


# ---- damping -------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class ModalRatio:
    """One damping ratio zeta for every flexible mode."""

    ratio: float


@dataclass(frozen=True, kw_only=True, eq=False)
class RatioByFrequency:
    """Damping ratio as a table over frequency: linear between the points, ends held."""

    omega: Real  # (k,) rad/s
    ratio: Real  # (k,)


@dataclass(frozen=True, kw_only=True, eq=False)
class RatioByMode:
    """Damping ratio by flexible mode number (rigid-body modes are not counted), last value held."""

    ratio: Real  # (k,)


@dataclass(frozen=True, kw_only=True)
class Rayleigh:
    """Viscous damping matrix ``alpha M + beta K``; alpha in 1/s, beta in s."""

    alpha: float
    beta: float


@dataclass(frozen=True, kw_only=True)
class LossFactor:
    """Hysteretic stiffness ``K (1 + j eta sgn(omega))``; in a time-domain model it becomes zeta = eta/2."""

    eta: float


BaseDamping: TypeAlias = ModalRatio | RatioByFrequency | RatioByMode | Rayleigh | LossFactor | None


@dataclass(frozen=True, kw_only=True, eq=False)
class Damping:
    """Base damping, and local parts on top of it: a viscous matrix and an imaginary stiffness (both n by n)."""

    base: BaseDamping = None
    viscous: Sparse | None = None
    stiffness_loss: Sparse | None = None

    @property
    def is_local(self) -> bool:
        return self.viscous is not None or self.stiffness_loss is not None

    @property
    def is_modal(self) -> bool:
        """True when the full model's damping is defined mode by mode (theory: counted modes carry their ratios)."""
        return isinstance(self.base, (ModalRatio, RatioByFrequency, RatioByMode))


# ---- the kinds -----------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True, eq=False)
class Interface:
    """The channels of a model, their weights, and what else stays the same from the full model to the small one."""

    inputs: tuple[Input, ...] = ()
    outputs: tuple[Output, ...] = ()
    units: UnitSystem = field(default_factory=UnitSystem)
    title: str = ""
    source: str = ""  # where it came from (a path, a generator), for messages only

    @property
    def m(self) -> int:
        """Number of inputs."""
        return len(self.inputs)

    @property
    def p(self) -> int:
        """Number of outputs."""
        return len(self.outputs)

    @property
    def amplitudes(self) -> Real:
        """Input weights (m,): amplitude, 1 where not given."""
        return np.array([1.0 if c.amplitude is None else c.amplitude for c in self.inputs])

    @property
    def resolutions(self) -> Real:
        """Output weights (p,): resolution, 1 where not given. Weighted outputs are ``y / resolution``."""
        return np.array([1.0 if c.resolution is None else c.resolution for c in self.outputs])

    @property
    def has_resolutions(self) -> bool:
        return any(c.resolution is not None for c in self.outputs)

    def weigh(self, G: Any) -> Any:
        """Weighted transfer matrix ``G[..., k, l] * amplitude_l / resolution_k``, shape (..., p, m)."""
        return G * (self.amplitudes[None, :] / self.resolutions[:, None])


@dataclass(frozen=True, kw_only=True, eq=False)
class Origin(Interface):
    """What a result remembers of its full model when the model itself is not at hand (see `fingerprint.origin_of`)."""

    kind: str
    n: int
    fingerprint: str
    damping: str = "none"  # in words, with its numbers


@dataclass(frozen=True, kw_only=True, eq=False)
class _Common(Interface):
    """What every kind carries beside its matrices."""

    unknowns: Unknowns | None = None

    kind: ClassVar[str] = ""

    def _set(self, **values: Any) -> None:
        for name, value in values.items():
            object.__setattr__(self, name, value)


@dataclass(frozen=True, kw_only=True, eq=False)
class Structure(_Common):
    """``M q'' + D q' + K q = F u``, ``y = Cq q + Cv q' + Ca q'' + Du u``; D from ``damping``.

    K, M (n, n) sparse symmetric; F (n, m); Cq, Cv, Ca (p, n), None for a kind of output that does not occur;
    Du (p, m). Load and outputs may be absent (m = 0 or p = 0).
    """

    K: Sparse
    M: Sparse
    F: Real = _ABSENT
    Cq: Real | None = None
    Cv: Real | None = None
    Ca: Real | None = None
    Du: Real = _ABSENT
    damping: Damping = field(default_factory=Damping)

    kind: ClassVar[str] = "structure"

    def __post_init__(self) -> None:
        K, M = _square(self.K, "stiffness"), _square(self.M, "mass")
        n = K.shape[0]
        _same_size(M, n, "mass", "stiffness")
        for name, label in (("viscous", "damping"), ("stiffness_loss", "stiffness_loss")):
            if (part := getattr(self.damping, name)) is not None:
                local = _same_size(_square(part, label), n, label, "stiffness")
                self._set(damping=replace(self.damping, **{name: local}))
        F = _load(self.F, n, "load")
        given = {"displacement_output": self.Cq, "velocity_output": self.Cv, "acceleration_output": self.Ca}
        rows = {np.asarray(C).shape[0] for C in given.values() if C is not None}
        if len(rows) > 1:
            raise ModelError(
                "output matrices have different numbers of rows",
                expected="one common number of outputs; the three kinds are summed row by row",
                got=", ".join(f"{k} {np.asarray(v).shape}" for k, v in given.items() if v is not None),
                where=self.source,
                remedy="fill the rows that do not occur with zeros",
            )
        p = rows.pop() if rows else 0
        Cq, Cv, Ca = (_output(C, p, n, name) if C is not None else None for name, C in given.items())
        self._set(K=K, M=M, F=F, Cq=Cq, Cv=Cv, Ca=Ca, Du=_through(self.Du, p, F.shape[1]))
        self._set(
            inputs=_channels(self.inputs, F.shape[1], Input, "u"),
            outputs=_channels(self.outputs, p, Output, "y"),
        )
        _labels(self.unknowns, n)

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return int(self.K.shape[0])

    @property
    def has_rates(self) -> bool:
        """True when any output is a velocity or an acceleration (a static remainder is then improper)."""
        return any(C is not None and np.any(C) for C in (self.Cv, self.Ca))

    def output_at(self, omega: float) -> Complex:
        """``C(w) = Cq + j w Cv - w^2 Ca``, shape (p, n)."""
        out = np.zeros((self.p, self.n), dtype=complex)
        for C, factor in ((self.Cq, 1.0), (self.Cv, 1j * omega), (self.Ca, -(omega**2))):
            if C is not None:
                out += factor * C
        return out


@dataclass(frozen=True, kw_only=True, eq=False)
class Thermal(_Common):
    """``E T' + K T = F u``, ``y = C T + D u``: capacity E, conductance K (positive), both sparse symmetric (n, n)."""

    K: Sparse
    E: Sparse
    F: Real = _ABSENT
    C: Real = _ABSENT
    D: Real = _ABSENT

    kind: ClassVar[str] = "thermal"

    def __post_init__(self) -> None:
        K, E = _square(self.K, "conductance"), _square(self.E, "capacity")
        n = K.shape[0]
        _same_size(E, n, "capacity", "conductance")
        F = _load(self.F, n, "load")
        p = 0 if self.C is None else np.asarray(self.C).shape[0]
        C = _output(np.zeros((0, n)) if self.C is None else self.C, p, n, "output")
        self._set(K=K, E=E, F=F, C=C, D=_through(self.D, p, F.shape[1]))
        self._set(
            inputs=_channels(self.inputs, F.shape[1], Input, "u"),
            outputs=_channels(self.outputs, p, Output, "y"),
        )
        _labels(self.unknowns, n)

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return int(self.K.shape[0])


@dataclass(frozen=True, kw_only=True, eq=False)
class StateSpace(_Common):
    """``E x' = A x + B u``, ``y = C x + D u``. A, E (n, n) dense or sparse (E None: identity); B (n, m); C (p, n)."""

    A: Any
    E: Any = None
    B: Real = _ABSENT
    C: Real = _ABSENT
    D: Real = _ABSENT

    kind: ClassVar[str] = "state space"

    def __post_init__(self) -> None:
        A = _square(self.A, "A")
        n = A.shape[0]
        E = None if self.E is None else _same_size(_square(self.E, "E"), n, "E", "A")
        B = _load(self.B, n, "B")
        p = 0 if self.C is None else np.asarray(self.C).shape[0]
        C = _output(np.zeros((0, n)) if self.C is None else self.C, p, n, "C")
        self._set(A=A, E=E, B=B, C=C, D=_through(self.D, p, B.shape[1]))
        self._set(
            inputs=_channels(self.inputs, B.shape[1], Input, "u"),
            outputs=_channels(self.outputs, p, Output, "y"),
        )
        _labels(self.unknowns, n)

    @property
    def n(self) -> int:
        """Number of states."""
        return int(self.A.shape[0])


Model: TypeAlias = Structure | Thermal | StateSpace


# ---- the checks at the door: shapes and finite values; symmetry and definiteness belong to `inspection` ------------


def _square(matrix: Any, name: str) -> Any:
    """The matrix as a canonical CSR array, or as a read-only dense array if it came dense and is a state matrix."""
    if not sp.issparse(matrix):
        dense = np.asarray(matrix, dtype=np.float64)
        if dense.ndim != 2:
            raise ModelError(f"{name} is not a matrix", expected="two dimensions", got=f"shape {dense.shape}")
        matrix = frozen(dense) if name in ("A", "E") else as_csr(dense)
    else:
        matrix = as_csr(matrix)
    if matrix.shape[0] != matrix.shape[1] or matrix.shape[0] == 0:
        raise ModelError(f"{name} is not square", expected="n by n, n at least 1", got=f"shape {matrix.shape}")
    _finite(matrix.data if sp.issparse(matrix) else matrix, name)
    return matrix


def _same_size(matrix: Any, n: int, name: str, other: str) -> Any:
    if matrix.shape != (n, n):
        raise ModelError(
            f"{name} does not fit {other}", expected=f"shape ({n}, {n}) as {other}", got=f"shape {matrix.shape}"
        )
    return matrix


def _dense(matrix: Any, name: str) -> Real:
    array = matrix.toarray() if sp.issparse(matrix) else np.asarray(matrix)
    out = np.asarray(array, dtype=np.float64)
    if out.ndim != 2:
        raise ModelError(f"{name} is not a matrix", expected="two dimensions", got=f"shape {out.shape}")
    _finite(out, name)
    return frozen(out)


def _load(F: Any, n: int, name: str) -> Real:
    F = _dense(np.zeros((n, 0)) if F is None else F, name)
    if F.shape[0] != n:
        raise ModelError(
            f"{name} does not fit the model",
            expected=f"{n} rows, one per unknown",
            got=f"shape {F.shape}",
            remedy="store the transpose" if F.shape[1] == n else "",
        )
    return F


def _output(C: Any, p: int, n: int, name: str) -> Real:
    C = _dense(C, name)
    if C.shape != (p, n):
        raise ModelError(
            f"{name} does not fit the model",
            expected=f"{n} columns, one per unknown",
            got=f"shape {C.shape}",
            remedy="store the transpose" if C.shape[0] == n else "",
        )
    return C


def _through(D: Any, p: int, m: int) -> Real:
    D = _dense(np.zeros((p, m)) if D is None else D, "feedthrough")
    if D.shape != (p, m):
        raise ModelError("feedthrough does not fit the channels", expected=f"shape ({p}, {m})", got=f"shape {D.shape}")
    return D


def _finite(values: Any, name: str) -> None:
    # The sum is finite unless an entry is not (or overflows): one pass, no n by n temporary.
    with np.errstate(over="ignore", invalid="ignore"):
        total = np.sum(values)
    if not np.isfinite(total):
        bad = int(np.count_nonzero(~np.isfinite(values)))
        if bad:
            raise ModelError(
                f"{name} holds values that are not numbers", expected="finite values", got=f"{bad} NaN or Inf"
            )


def _channels(given: tuple[Any, ...], count: int, kind: Any, letter: str) -> tuple[Any, ...]:
    if not given:
        return tuple(kind(name=f"{letter}{i + 1}") for i in range(count))
    if len(given) != count:
        noun = "inputs" if letter == "u" else "outputs"
        raise ModelError(f"number of {noun} and their names differ", expected=f"{count} names", got=f"{len(given)}")
    repeated = sorted({c.name for c in given if [d.name for d in given].count(c.name) > 1})
    if repeated:
        raise ModelError("channel names are not unique", expected="one name per channel", got=", ".join(repeated))
    return tuple(given)


def _labels(unknowns: Unknowns | None, n: int) -> None:
    if unknowns is None:
        return
    sizes = {
        "unknowns/node": len(unknowns.node) or n,
        "unknowns/direction": len(unknowns.direction) or n,
        "unknowns/xyz": n if unknowns.xyz is None else len(unknowns.xyz),
    }
    for name, size in sizes.items():
        if size != n:
            raise ModelError("unknown labels do not fit the model", expected=f"{n} entries", got=str(size), where=name)
