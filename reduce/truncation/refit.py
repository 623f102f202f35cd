"""Thermal small models of few states: true slow poles, pseudo-poles where the energy is, residues fitted in H2.

For a point source the plain sum of slow modes is nearly useless. With the poles fixed, the residues that minimise the
H2 error interpolate at the mirrored poles, ``sum_j R_j/(x_i + x_j) = G(x_i)`` (pseudo-optimality; Meier and Luenberger,
IEEE TAC 12, 1967), here with the input directions kept and one Lagrange multiplier an input for an exact steady state.
Pseudo-poles come from ``(K + s_j E)^-1 [F, C^T]`` with the shifts moved to the mirrored pseudo-poles until they rest.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.linalg import factorise
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Thermal
from modesieve.reduce.response.small import FirstOrderModal
from modesieve.reduce.truncation.diagonal import diagonal, is_diagonal

_RANK = 1e-13
_ROUNDS = 30
_SETTLED = 1e-3


@dataclass(frozen=True, kw_only=True, eq=False)
class Refit:
    """system: the fitted small model; true_poles: how many of its poles are eigenvalues of the full model; merit:
    ``2 <G, R> - norm(R)^2``, exact, by which the squared H2 error is smaller than that of no model at all;
    factorisations it took."""

    system: FirstOrderModal
    true_poles: int
    merit: float
    factorisations: int

    @property
    def worse_than_zero(self) -> bool:
        """True when keeping nothing would have the smaller H2 error."""
        return self.merit < 0

    @property
    def warnings(self) -> tuple[str, ...]:
        if not self.worse_than_zero:
            return ()
        return ("the H2 error of this small model is larger than that of no model at all",)


def refit(model: Thermal, small: FirstOrderModal, *, true_poles: int = 0, exact_static: bool = True) -> Refit:
    """``small`` with its poles and input directions kept and its output columns fitted in H2 (weighted channels).

    exact_static: ``C K^-1 F`` is met exactly. One factorisation of ``K + x_i E`` a pole, and one of K.

    Raises ChoiceError for coupled blocks and poles that are not negative real numbers; integrating poles are kept as
    they are.
    """
    if not is_diagonal(small):
        raise ChoiceError("poles cannot be refitted", expected="real poles", got="coupled blocks")
    terms = diagonal(small)
    free = terms.x > 0
    if not free.all():
        raise ChoiceError("poles cannot be refitted", expected="decaying poles", got="an integrating pole")
    a, r = model.amplitudes, model.resolutions
    b, x = terms.b * a, terms.x
    G = [weighted_gain(model, s) for s in x]
    static = weighted_gain(model, 0.0) if exact_static else None
    c = _fitted(x, b, G, static)
    system = FirstOrderModal(blocks=small.blocks, B=terms.b, C=c * r[:, None], D=model.D)
    own = _h2_squared(x, b, c)
    inner = float(sum(c[:, i] @ G[i] @ b[i] for i in range(len(x))))
    return Refit(
        system=system,
        true_poles=true_poles,
        merit=2 * inner - own,
        factorisations=len(x) + int(exact_static),
    )


def thermal_fit(modes: Modes, order: int) -> Refit:
    """The best of the refitted models of ``order`` states that have half, three quarters or all true poles.

    Point sources read where they act need pseudo-poles; distant sensors see little but slow modes.

    Raises ChoiceError for models that are not thermal or integrate (see `mixed_poles`).
    """
    shares = sorted({order - order // 2, order - order // 4, order})
    model, fits, failure = modes.model, [], None
    for true in shares:
        try:
            small, number = mixed_poles(modes, order, true=true)
        except ChoiceError as error:
            failure = error
            continue
        assert isinstance(model, Thermal)
        fits.append(refit(model, small, true_poles=number))
    if not fits:
        assert failure is not None
        raise failure
    return max(fits, key=lambda fit: fit.merit)


def merit_of(model: Thermal, small: FirstOrderModal) -> float:
    """``2 <G, R> - norm(R)^2`` of any thermal small model (weighted): negative when it is worse than no model."""
    terms = diagonal(small)
    b, c = terms.b * model.amplitudes, terms.cq / model.resolutions[:, None]
    inner = sum(float(c[:, i] @ weighted_gain(model, x) @ b[i]) for i, x in enumerate(terms.x))
    return 2 * inner - _h2_squared(terms.x, b, c)


def weighted_gain(model: Thermal, s: float) -> Real:
    """``C (K + s E)^-1 F`` at a real s >= 0, weighted channels, without feedthrough, (p, m)."""
    A = model.K + s * model.E if s else model.K
    X = factorise(A, symmetry="definite").solve(np.ascontiguousarray(model.F))
    return np.asarray((model.C @ X) * (model.amplitudes[None, :] / model.resolutions[:, None]))


def _fitted(x: Real, b: Real, G: list[Real], static: Real | None) -> Real:
    """Output columns c (p, r): ``sum_j c_j (b_j . b_i)/(x_i + x_j) = G(x_i) b_i``, subject to the steady state.

    The system is scaled to a unit diagonal and solved on its numerical range: nearby poles make it nearly singular.
    """
    size = np.linalg.norm(b, axis=1)
    scale = np.sqrt(2 * x) / np.where(size > 0, size, 1.0)
    P = (b @ b.T) / (x[:, None] + x[None, :]) * np.outer(scale, scale)
    right = np.array([G[i] @ b[i] for i in range(len(x))]) * scale[:, None]
    value, vector = np.linalg.eigh((P + P.T) / 2)
    good = value > _RANK * value.max()
    inverse = (vector[:, good] / value[good]) @ vector[:, good].T
    y = inverse @ right
    if static is not None:
        V = (b / x[:, None]) * scale[:, None]
        gap = static.T - V.T @ y
        y = y + inverse @ V @ np.linalg.lstsq(V.T @ inverse @ V, gap, rcond=None)[0]
    return np.asarray((y * scale[:, None]).T)


def _h2_squared(x: Real, b: Real, c: Real) -> float:
    return float(np.sum((c.T @ c) * (b @ b.T) / (x[:, None] + x[None, :])))


def mixed_poles(modes: Modes, order: int, *, true: int | None = None) -> tuple[FirstOrderModal, int]:
    """A small model of ``order`` states: ``true`` slow modes that couple, and pseudo-modes at adapted shifts.

    true: half of the order if not given. Returns the Galerkin model, true poles first, and how many those are.

    Raises ChoiceError for models that are not thermal, integrate, or have fewer modes that couple.
    """
    model = modes.model
    if not isinstance(model, Thermal) or modes.vectors is None:
        raise ChoiceError("pseudo-poles need a thermal model", expected="modes with their model", got=modes.origin.kind)
    x = diagonal(modes.system).x
    if np.any(x <= 0) or any(modes.always_kept):
        raise ChoiceError("pseudo-poles need a decaying model", expected="a film or a fixed temperature", got="none")
    keep = slow_coupled(modes, order // 2 + order % 2 if true is None else true)
    phi = np.asarray(modes.vectors, dtype=float)[:, keep]
    count = order - len(keep)
    ports = _ports(model)
    top = float(x[keep].max()) if len(keep) else float(x.min())
    shifts = top * 4.0 ** (1 + np.arange(max(-(-count // ports.shape[1]), 1)))
    pseudo = np.zeros((model.n, 0))
    for _ in range(_ROUNDS if count else 0):
        pseudo, poles = _pseudo(model, ports, phi, shifts, count)
        moved = _spread(poles, len(shifts))
        settled = np.max(np.abs(moved - shifts) / shifts) < _SETTLED
        shifts = moved
        if settled:
            break
    V = np.hstack([phi, pseudo])
    blocks = tuple(np.array([[-v]]) for v in [*x[keep], *_rayleigh(model, pseudo)])
    return FirstOrderModal(blocks=blocks, B=V.T @ model.F, C=model.C @ V, D=model.D), len(keep)


def slow_coupled(modes: Modes, count: int) -> Ints:
    """Indices of the slowest ``count`` modes that inputs reach and outputs see: symmetry hides the others."""
    terms = diagonal(modes.system)
    share = np.linalg.norm(terms.b, axis=1) * np.linalg.norm(terms.cq, axis=0) / np.maximum(terms.x, 1e-300)
    seen = np.flatnonzero(share > 1e-6 * share.max(initial=0.0))
    if len(seen) < count:
        raise ChoiceError("too few modes couple", expected=f"{count} modes", got=str(len(seen)), remedy="compute more")
    return seen[np.argsort(terms.x[seen], kind="stable")[:count]]


def _ports(model: Thermal) -> Real:
    """Loads and output rows, weighted, without repeats (collocated pairs answer with one vector)."""
    every = np.hstack([model.F * model.amplitudes, model.C.T / model.resolutions])
    size = np.linalg.norm(every, axis=0)
    U, s, _ = np.linalg.svd(every[:, size > 0] / size[size > 0], full_matrices=False)
    return np.asarray(U[:, s > 1e-10 * s.max(initial=0.0)])


def _pseudo(model: Thermal, ports: Real, phi: Real, shifts: Real, count: int) -> tuple[Real, Real]:
    """At most ``count`` E-orthonormal pseudo-modes free of phi, slowest first, and their poles."""
    U = np.hstack([factorise(model.K + s * model.E, symmetry="definite").solve(ports) for s in shifts])
    for _ in range(2):
        U = U - phi @ (phi.T @ np.asarray(model.E @ U))
    U = U / np.sqrt(np.einsum("ij,ij->j", U, np.asarray(model.K @ U)))
    value, vector = np.linalg.eigh(U.T @ np.asarray(model.K @ U))
    good = value > 1e-12 * value.max()
    W = U @ (vector[:, good] / np.sqrt(value[good]))  # K-orthonormal
    mu, Y = np.linalg.eigh(W.T @ np.asarray(model.E @ W))
    best = np.argsort(-mu)[:count]
    return W @ (Y[:, best] / np.sqrt(mu[best])), 1 / mu[best]


def _spread(poles: Real, count: int) -> Real:
    """``count`` shifts at the mirrored pseudo-poles: all of them, or the middles of equal groups on the log scale."""
    return np.array([np.exp(np.mean(np.log(part))) for part in np.array_split(np.sort(poles), min(count, len(poles)))])


def _rayleigh(model: Thermal, V: Real) -> Real:
    return np.einsum("ij,ij->j", V, np.asarray(model.K @ V)) / np.einsum("ij,ij->j", V, np.asarray(model.E @ V))
