"""What the full model is on everything that was not computed: ``Z(w) = a(w) K + b(w) M``.

The counted modes carry the damping that the model gives them. On the M-orthogonal complement of their span the
dynamic stiffness is a combination of K and M alone, so that one number, the supremum of ``(x - sigma)/abs(a x + b)``
over the uncomputed eigenvalues x, carries a static energy bound to every frequency.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from modesieve.reduce.arrays import Complex, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.model import (
    BaseDamping,
    LossFactor,
    ModalRatio,
    Model,
    RatioByFrequency,
    RatioByMode,
    Rayleigh,
    Structure,
    Thermal,
)


@dataclass(frozen=True, kw_only=True)
class Rest:
    """The law on the uncomputed part.

    order 2: ``a = 1 + j eta sgn(w) + j w beta``, ``b = j w alpha - w^2``; order 1 (thermal): ``a = 1``, ``b = j w``.
    alpha in 1/s, beta in s, eta without unit.
    """

    order: Literal[1, 2] = 2
    alpha: float = 0.0
    beta: float = 0.0
    eta: float = 0.0

    def coefficients(self, omega: Real) -> tuple[Complex, Complex]:
        """``a(w)`` and ``b(w)``, each (w,)."""
        w = np.asarray(omega, dtype=float)
        if self.order == 1:
            return np.ones(len(w), dtype=complex), 1j * w
        return 1 + 1j * (self.eta * np.sign(w) + self.beta * w), 1j * self.alpha * w - w**2

    def viscous(self, x: Real) -> Real:
        """Viscous coefficient ``alpha + beta x`` (1/s) of a vector of the rest with eigenvalue x."""
        return self.alpha + self.beta * np.asarray(x, dtype=float)

    @np.errstate(divide="ignore", invalid="ignore")
    def supremum(self, omega: Real, x_c: float, sigma: float) -> Real:
        """``sup over x >= x_c of (x - sigma)/abs(a x + b)``, shape (w,); inf where the rest can resonate undamped.

        With ``u = 1/(x - sigma)`` this is one over the distance from 0 to the segment ``[a, a + d u_c]``,
        ``d = a sigma + b``. Any sigma below x_c; x_c = inf (nothing uncomputed but massless parts) gives 1/abs(a).
        """
        a, b = self.coefficients(omega)
        u_c = 0.0 if np.isinf(x_c) else 1.0 / (x_c - sigma)
        d = a * sigma + b
        size = np.abs(d) ** 2
        foot = np.where(size > 0, -(np.conj(d) * a).real / np.where(size > 0, size, 1.0), 0.0)
        inside = (foot > 0) & (foot < u_c)
        # Inside the segment the distance comes from the imaginary part alone: exactly 0 for an undamped rest.
        distance = np.abs((np.conj(d) * a).imag) / np.sqrt(np.where(size > 0, size, 1.0))
        return 1.0 / np.where(inside, distance, np.abs(a + d * np.clip(foot, 0.0, u_c)))

    @np.errstate(divide="ignore", invalid="ignore")
    def disc(self, omega: Real, x_c: float, sigma: float) -> tuple[Complex, Real]:
        """Centre (w,) and radius (w,) of the smallest disc that holds ``(x - sigma)/(a x + b)`` for every x >= x_c.

        The values lie on the arc that inversion makes of the segment ``[a, a + d u_c]``, from 1/a to 1/(a + d u_c). Up
        to a half circle its chord is a diameter of the disc; beyond (the ends are seen from 0 under more than a right
        angle) the disc is the whole circle, which has 0 and one over the foot of the perpendicular at opposite ends.
        """
        a, b = self.coefficients(omega)
        u_c = 0.0 if np.isinf(x_c) else 1.0 / (x_c - sigma)
        d = a * sigma + b
        end = a + d * u_c
        short = (np.conj(a) * end).real >= 0
        one, other = 1 / a, 1 / end
        size = np.where(np.abs(d) > 0, np.abs(d), 1.0)
        foot = 1j * d / size * ((np.conj(d) * a).imag / size)
        centre = np.where(short, (one + other) / 2, 1 / (2 * foot))
        radius = np.where(short, np.abs(one - other) / 2, 1 / (2 * np.abs(foot)))
        known = np.isfinite(centre) & np.isfinite(radius)
        return np.where(known, centre, 0.0), np.where(known, radius, np.inf)

    @property
    def formula(self) -> str:
        """The law in words, for the certificate."""
        if self.order == 1:
            return "Z = K + j w E"
        parts = ["Z = K"]
        if self.eta:
            parts = [f"Z = (1 + j {self.eta:.6g}) K"]
        if self.alpha or self.beta:
            parts.append(f"j w ({self.alpha:.6g} M + {self.beta:.6g} K)")
        return " + ".join(parts) + " - w^2 M"


def rest_of(model: Model) -> Rest:
    """The law of ``model`` on everything that was not computed.

    Modal damping is defined on the counted modes alone: the rest is undamped.

    Raises ChoiceError for models without such a law (state space, local damping).
    """
    if isinstance(model, Thermal):
        return Rest(order=1)
    if not isinstance(model, Structure):
        raise ChoiceError(
            "no guaranteed bound for this kind of model",
            expected="a symmetric pencil: a structure or a thermal model",
            got=f"a {model.kind} model, possibly not normal",
            remedy="the error is measured against the full model instead",
        )
    if model.damping.is_local:
        raise ChoiceError(
            "no guaranteed bound with local damping",
            expected="damping that leaves the undamped modes uncoupled",
            got="a local viscous matrix or imaginary stiffness",
            remedy="the error is measured against the full model instead",
        )
    match model.damping.base:
        case Rayleigh(alpha=alpha, beta=beta):
            return Rest(alpha=alpha, beta=beta)
        case LossFactor(eta=eta):
            return Rest(eta=eta)
    return Rest()


def pseudo_damping(base: BaseDamping, x: Real) -> tuple[Real, Real]:
    """Viscous coefficient d (1/s) and loss factor of pseudo-modes at ``x`` in a *small* model, each (k,).

    By the base damping's own rule, continued past the counted modes: a small model that is handed over must not ring
    for ever. Where the full model leaves the rest undamped, the difference is part of the error that is reported.
    """
    x = np.asarray(x, dtype=float)
    w, none = np.sqrt(np.maximum(x, 0.0)), np.zeros_like(x)
    match base:
        case ModalRatio(ratio=ratio):
            return 2 * ratio * w, none
        case RatioByFrequency(omega=omega, ratio=ratios):
            return 2 * np.interp(w, omega, ratios) * w, none
        case RatioByMode(ratio=ratios):
            return 2 * float(ratios[-1]) * w, none
        case Rayleigh(alpha=alpha, beta=beta):
            return alpha + beta * x, none
        case LossFactor(eta=eta):
            return none, np.full_like(x, eta)
    return none, none.copy()
