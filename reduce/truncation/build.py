"""Making the hub from the computed modes: tail vectors, their small system and the residuals."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Model, Structure, Thermal
from modesieve.reduce.response.small import SmallSystem
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal, is_diagonal
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.krylov import Shifted, Tail, deflation, residual_coordinates, tail_vectors
from modesieve.reduce.truncation.pencil import Pencil, pencil_of
from modesieve.reduce.truncation.rest import Rest, rest_of
from modesieve.reduce.truncation.shift import factor_of

#: Reasons of the modal stage for modes whose response has no static part.
FLOATING = ("rigid body", "integrating")
#: mu = 1/x below this share of the largest counts as massless: its vector answers statically at every frequency.
_MASSLESS = 1e-13


def build_hub(modes: Modes, levels: int = 3, *, shifted: Shifted | None = None) -> Hub:
    """The hub of ``modes``: every computed mode and ``levels`` tail levels (0 to 3).

    shifted: a factor of ``K - sigma M``, any sigma below the counting point; the modal stage's own if not given.
    Costs ``levels + 1`` solves a port, a few more where sigma is not 0 (rigid-body modes).

    Raises ChoiceError without a symmetric pencil, stored vectors and damping that leaves the modes uncoupled.
    """
    model, phi = _checked(modes)
    rest, terms = rest_of(model), diagonal(modes.system)
    x_c = counting_point(modes)
    amplitudes, resolutions = modes.origin.amplitudes, modes.origin.resolutions
    common: dict[str, Any] = {"computed": terms.terms, "x_c": x_c, "rest": rest}
    common |= {"amplitudes": amplitudes, "resolutions": resolutions, "damping": _base(model)}
    common |= {"floating": np.array([reason in FLOATING for reason in modes.always_kept], dtype=bool)}
    common |= {"relative_rounding": rounding_limit(modes), "direct": _direct(model)}
    pencil = pencil_of(model)
    if np.isinf(x_c):
        return _complete_hub(modes.system, pencil, common)
    shifted = shifted if shifted is not None else factor_of(modes)
    away = deflation(pencil.M, phi)
    ports, places = _ports(pencil)
    tail = tail_vectors(pencil, ports, away, shifted, levels)
    T, image, pseudo = _rediagonalised(pencil, tail, rest)
    coordinates = residual_coordinates(pencil.K, pencil.M, shifted.sigma, T, np.hstack([tail.start, image]))
    load, outputs = _spread(coordinates[:, : ports.shape[1]], places, pencil)
    load_energy, output_energy = _energies(ports, tail, places, pencil)
    massless = pencil.static + pseudo.X
    # The constant parts are our own: a list of modes cannot know those of massless combinations of unknowns.
    terms = replace(terms, D=common["direct"], X=massless, eta_X=rest.eta)
    return Hub(
        system=terms.join(replace(pseudo, X=np.zeros_like(massless))).system(),
        levels=tail.levels,
        sigma=float(shifted.sigma),
        load_rest=load,
        output_rest=outputs,
        tail_rest=coordinates[:, ports.shape[1] :][:, : pseudo.terms],
        massless=massless,
        load_energy=load_energy,
        output_energy=output_energy,
        solves=tail.solves,
        **common,
    )


def counting_point(modes: Modes) -> float:
    """``x_c``: every eigenvalue below it is in the list; rad^2/s^2 for structures, 1/s for thermal models."""
    certificate = modes.certificate
    if certificate.complete == "all":
        return float("inf")
    if certificate.complete == "no" or certificate.below_omega is None:
        raise ChoiceError(
            "no guaranteed bound without a complete list of modes",
            expected="a list that the inertia count has confirmed",
            got=certificate.reason or "no count",
        )
    below = float(certificate.below_omega)
    return below if modes.origin.kind == "thermal" else below**2


def rounding_limit(modes: Modes) -> float:
    """Relative widening of every bound: 1e-12, or ten times the worst residual of a computed mode."""
    worst = float(np.max(modes.residual)) if len(modes) else 0.0
    return max(1e-12, 10 * worst)


def _checked(modes: Modes) -> tuple[Model, Real]:
    model = modes.model
    if model is None or modes.vectors is None:
        raise ChoiceError(
            "the tail needs the full model and the mode shapes",
            expected="modes computed from the model in this run, or loaded together with it",
            got="modes alone",
            remedy="pass the model file as well",
        )
    if not isinstance(model, (Structure, Thermal)) or not is_diagonal(modes.system) or np.iscomplexobj(modes.vectors):
        raise ChoiceError(
            "the tail needs real, uncoupled modes",
            expected="a structure without local damping, or a thermal model",
            got=f"a {model.kind} model with coupled or complex modes",
        )
    return model, np.asarray(modes.vectors, dtype=float)


def _base(model: Model) -> Any:
    return model.damping.base if isinstance(model, Structure) else None


def _direct(model: Model) -> Real:
    return np.asarray(model.Du if isinstance(model, Structure) else model.D)


def _ports(pencil: Pencil) -> tuple[Real, Ints]:
    """All nonzero port columns side by side, and their places among load columns and the three kinds of outputs."""
    none = np.zeros((pencil.n, pencil.p))
    every = np.hstack([pencil.load, *(none if C is None else C for C in pencil.outputs)])
    places = np.flatnonzero(np.any(every, axis=0))
    return every[:, places], places


def _energies(ports: Real, tail: Tail, places: Ints, pencil: Pencil) -> tuple[Real, Real]:
    """Gram matrices in K_s^-1 of the deflated loads (m, m) and of all output rows (3 p, 3 p)."""
    width = pencil.m + 3 * pencil.p
    gram = ports.T @ tail.start  # the start is free of the computed modes, so the ports need not be
    full = np.zeros((width, width))
    full[np.ix_(places, places)] = (gram + gram.T) / 2
    return full[: pencil.m, : pencil.m], full[pencil.m :, pencil.m :]


def _spread(coordinates: Real, places: Ints, pencil: Pencil) -> tuple[Real, Real]:
    """Residual coordinates of the ports back in their places: load (r, m) and outputs (3, r, p)."""
    full = np.zeros((coordinates.shape[0], pencil.m + 3 * pencil.p))
    full[:, places] = coordinates
    kinds = np.split(full[:, pencil.m :], 3, axis=1)
    return full[:, : pencil.m], np.stack(kinds)


def _rediagonalised(pencil: Pencil, tail: Tail, rest: Rest) -> tuple[Real, Real, Diagonal]:
    """Tail vectors (K-orthonormal still) and images turned so that M is diagonal too, and their terms."""
    gram = tail.T.T @ np.asarray(pencil.M @ tail.T)
    mu, Y = np.linalg.eigh((gram + gram.T) / 2)
    mu, Y = mu[::-1], Y[:, ::-1]
    T, image = tail.T @ Y, tail.image @ Y
    heavy = mu > _MASSLESS * (mu[0] if len(mu) else 0.0)
    b, c = T.T @ pencil.load, [_rows(C, T, pencil.p) for C in pencil.outputs]
    count = int(np.count_nonzero(heavy))
    scale, x = np.sqrt(mu[:count]), 1 / mu[:count]
    X = c[0][:, count:] @ b[count:]
    kinds = [part[:, :count] / scale for part in c]
    pseudo = Diagonal(
        order=rest.order,
        x=x,
        b=b[:count] / scale[:, None],
        cq=kinds[0],
        cv=kinds[1],
        ca=kinds[2],
        d=rest.viscous(x),
        eta=np.full(count, rest.eta),
        D=np.zeros_like(X),
        X=X,
        eta_X=rest.eta,
    )
    return T, image[:, :count] / scale, pseudo


def _rows(C: Real | None, T: Real, p: int) -> Real:
    return np.zeros((p, T.shape[1])) if C is None else np.asarray(C.T @ T)


def _complete_hub(system: SmallSystem, pencil: Pencil, common: dict[str, Any]) -> Hub:
    """With every mode known there is no rest: the bound is rounding alone."""
    return Hub(
        system=system,
        levels=0,
        sigma=0.0,
        load_rest=np.zeros((0, pencil.m)),
        output_rest=np.zeros((3, 0, pencil.p)),
        tail_rest=np.zeros((0, 0)),
        load_energy=np.zeros((pencil.m, pencil.m)),
        output_energy=np.zeros((3 * pencil.p, 3 * pencil.p)),
        massless=pencil.static if np.any(pencil.static) else diagonal(system).X,
        **common,
    )
