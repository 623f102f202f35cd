"""Tail levels of a small model: pseudo-modes that make its statics exact for every kind of output.

Everything that a small model does not keep, dropped modes and the hub's tail alike, is known in the hub's own
coordinates, where K and M are diagonal. Level 1 spans the static answers of that rest to all loads and all outputs,
each next level is ``K^-1 M`` times the last (residual vectors; Dickens, Nakagawa and Wittbrodt, J. Sound Vib. 1997).
The small model stays second order (or first, thermal), symmetric and stable, without feedthrough.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.diagonal import Diagonal
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.rest import pseudo_damping

#: A direction counts as new when it is at least this much of the vector it came from; the statics lose its square.
_NEW = 1e-7
_NOISE = 1e-12


@dataclass(frozen=True, kw_only=True, eq=False)
class Tailed:
    """A small system with tail levels. system: kept modes' terms first, pseudo-modes after; pseudo_omega (t,): their
    frequencies in rad/s (decay rates in 1/s for thermal models), ascending."""

    system: SmallSystem
    pseudo_omega: Real

    def inside(self, band: tuple[float, float]) -> Real:
        """The pseudo-modes that fall in a band (rad/s): resonances that the full model need not have."""
        low, high = band
        return self.pseudo_omega[(self.pseudo_omega >= low) & (self.pseudo_omega <= high)]


def with_tail_levels(hub: Hub, kept: tuple[int, ...], levels: int, *, damped: bool = True) -> Tailed:
    """The small model that keeps the modes numbered ``kept`` (1-based) and has ``levels`` tail levels (0 to hub's).

    Level 0 is the plain sum of the kept modes. damped: the pseudo-modes carry the base damping by its own rule, so that
    nothing rings for ever; otherwise what the full model has there: with modal damping, none, which is nearer to it.
    Raises ChoiceError for more levels than the hub holds.
    """
    most = hub.levels if hub.terms.terms > hub.computed else 3
    if not 0 <= levels <= most:
        raise ChoiceError("no such tail level", expected=f"0 to {most}", got=str(levels))
    terms = hub.terms
    keep = np.asarray(sorted(kept), dtype=int) - 1
    rest = terms.select(np.setdiff1d(np.arange(terms.terms), keep))
    if levels == 0 or rest.terms == 0:
        return Tailed(system=terms.select(keep).system(), pseudo_omega=np.zeros(0))
    if np.any(rest.x <= 0):
        raise ChoiceError(
            "tail levels need every rigid-body, integrating and unstable mode kept",
            expected="dropped modes that answer statically",
            got=f"mode {int(np.setdiff1d(np.arange(terms.terms), keep)[np.argmin(rest.x)]) + 1} dropped",
        )
    pseudo = pseudo_modes(rest, levels, _port_sizes(terms))
    if terms.order == 2:
        law = (hub.rest.viscous(pseudo.x), np.full(pseudo.terms, hub.rest.eta))
        d, eta = pseudo_damping(hub.damping, pseudo.x) if damped else law
        pseudo = replace(pseudo, d=d, eta=eta)
    size = pseudo.x if terms.order == 1 else np.sqrt(np.maximum(pseudo.x, 0.0))
    return Tailed(system=terms.select(keep).join(pseudo).system(), pseudo_omega=size)


def with_static_remainder(hub: Hub, kept: tuple[int, ...]) -> SmallSystem:
    """The kept modes and the exact static remainder of everything else as feedthrough (mode acceleration).

    Raises ChoiceError for velocity and acceleration outputs, whose remainder would grow with the frequency.
    """
    terms = hub.terms
    if hub.levels == 0 and np.isfinite(hub.x_c):
        raise ChoiceError("the hub does not know the statics", expected="at least one tail level", got="none")
    if np.any(terms.cv) or np.any(terms.ca):
        raise ChoiceError(
            "statics feedthrough is not possible here",
            expected="displacement (or only) outputs",
            got="velocity or acceleration outputs: their static remainder is improper",
            remedy="use tail vectors",
        )
    keep = np.asarray(sorted(kept), dtype=int) - 1
    rest = terms.select(np.setdiff1d(np.arange(terms.terms), keep))
    elastic = rest.x > 0
    X = rest.cq[:, elastic] / rest.x[elastic] @ rest.b[elastic]
    return replace(terms.select(keep), X=terms.X + X, eta_X=hub.rest.eta).system()


def _port_sizes(terms: Diagonal) -> Real:
    """Static size ``sqrt(sum b_i^2/x_i)`` of every port over the whole elastic model."""
    elastic = terms.x > 0
    ports = np.hstack([terms.b, terms.outputs.T])[elastic]
    return np.asarray(np.sqrt(np.sum(ports**2 / terms.x[elastic, None], axis=0)))


def pseudo_modes(rest: Diagonal, levels: int, sizes: Real) -> Diagonal:
    """Galerkin model of ``rest`` (all x > 0) on its static answers and ``levels - 1`` successors, re-diagonalised.

    sizes: what counts as no answer at all is rounding of these (every input, then every output of each kind).
    Ascending x; D and X of the result are zero.
    """
    ports = np.hstack([rest.b, rest.outputs.T])
    root = np.sqrt(rest.x)[:, None]
    basis = np.zeros((rest.terms, 0))
    block = ports / root  # K-orthonormal coordinates of K^-1 F
    block = block[:, np.linalg.norm(block, axis=0) > _NOISE * sizes]
    for _ in range(levels):
        new = _new_directions(block, basis)
        basis = np.hstack([basis, new])
        block = new / rest.x[:, None]
    mu, Y = np.linalg.eigh(-basis.T @ (basis / rest.x[:, None]))
    mu = -mu  # eigh of the negative: largest mu, smallest x first
    V = (basis @ Y) / root / np.sqrt(mu)  # M-orthonormal coordinates
    zero = np.zeros_like(rest.D)
    return Diagonal(
        order=rest.order,
        x=1 / mu,
        b=V.T @ rest.b,
        cq=rest.cq @ V,
        cv=rest.cv @ V,
        ca=rest.ca @ V,
        d=np.zeros(len(mu)),
        eta=np.zeros(len(mu)),
        D=zero,
        X=zero,
    )


def _new_directions(block: Real, basis: Real) -> Real:
    """Orthonormal directions of ``block`` beside ``basis`` (orthonormal), by scaled singular vectors."""
    size = np.linalg.norm(block, axis=0)
    Y = block[:, size > 0] / size[size > 0]
    for threshold in (_NEW, 1e-2):
        for _ in range(2):
            Y = Y - basis @ (basis.T @ Y)
        U, s, _ = np.linalg.svd(Y, full_matrices=False)
        Y = U[:, s > threshold]
    return np.asarray(Y)
