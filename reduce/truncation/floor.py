"""How small any model of so many states could be: Hankel singular values and the floor they put under the error.

No stable model with r states has an H-infinity error over the whole axis below ``s_(r+1)`` (Glover, Int. J. Control 39,
1984). For the full model, ``s_(r+1)(G) >= s_(r+1)(H) - sup_w e_H``. In a band a modal model can be better than this
floor: it belongs on whole-axis errors only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_continuous_lyapunov

from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.records import Certainty
from modesieve.reduce.response.small import FirstOrderModal, SecondOrderModal, SmallSystem
from modesieve.reduce.truncation.diagonal import Diagonal, diagonal, is_diagonal
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.supremum import hub_suprema, suprema


@dataclass(frozen=True, kw_only=True, eq=False)
class Floor:
    """values (r,): Hankel singular values, descending; floor (r + 1,): no model with that many states (its index) has a
    whole-axis error below; certainty of the floor; reason: why there is none, "" if there is."""

    values: Real
    floor: Real
    certainty: Certainty
    reason: str = ""


def hankel_values(system: SmallSystem, amplitudes: Real | None = None, resolutions: Real | None = None) -> Real:
    """Hankel singular values (states,), descending, of a stable small system, weighted channels.

    ``sqrt(eig(P Q))`` with the Gramians ``A P + P A^T + B B^T = 0`` and ``A^T Q + Q A + C^T C = 0``. A loss factor
    counts as ``zeta = eta/2``. Feedthrough plays no part.

    Raises ChoiceError where a pole is not in the open left half plane.
    """
    worst = system.poles.real.max(initial=-np.inf)
    if worst >= 0:
        raise ChoiceError(
            "Hankel singular values are undefined", expected="damping in every mode", got=f"Re = {worst:.3g} 1/s"
        )
    if isinstance(system, FirstOrderModal) and is_diagonal(system):
        return _of_real_poles(diagonal(system), amplitudes, resolutions)
    A, B, C, _ = system.state_space()
    B = B if amplitudes is None else B * amplitudes
    C = C if resolutions is None else C / resolutions[:, None]
    return of_matrices(A, B, C)


def of_matrices(A: Real, B: Real, C: Real) -> Real:
    """Hankel singular values of a dense stable (A, B, C), descending, by the two Gramians' square roots."""
    if len(A) == 0:
        return np.zeros(0)
    P = solve_continuous_lyapunov(A, -B @ B.T)
    Q = solve_continuous_lyapunov(A.T, -C.T @ C)
    return np.asarray(np.linalg.svd(_root(Q).T @ _root(P), compute_uv=False))


def _of_real_poles(terms: Diagonal, amplitudes: Real | None, resolutions: Real | None) -> Real:
    """Real poles of a symmetric pencil: Gramians in closed form, ``P_ij = b_i^T b_j/(x_i + x_j)``.

    With as many outputs as inputs and C = B^T the two are one, and its eigenvalues are the values (state-space
    symmetric systems; Liu, Sreeram and Teo, Syst. Control Lett. 34, 1998).
    """
    b = terms.b if amplitudes is None else terms.b * amplitudes
    c = terms.cq.T if resolutions is None else terms.cq.T / resolutions
    sums = terms.x[:, None] + terms.x[None, :]
    P = (b @ b.T) / sums
    if b.shape == c.shape and np.array_equal(b, c):
        return np.maximum(np.linalg.eigvalsh(P)[::-1], 0.0)
    return np.asarray(np.linalg.svd(_root((c @ c.T) / sums).T @ _root(P), compute_uv=False))


def _root(P: Real) -> Real:
    value, vector = np.linalg.eigh((P + P.T) / 2)
    return np.asarray(vector * np.sqrt(np.maximum(value, 0.0)))


def floor_of(hub: Hub) -> Floor:
    """The floor under the whole-axis error of the elastic part of the hub's full model."""
    reason = _undefined(hub)
    if reason:
        return Floor(values=np.zeros(0), floor=np.zeros(0), certainty="guaranteed", reason=reason)
    values = hankel_values(hub.elastic(), hub.amplitudes, hub.resolutions)
    own = whole_axis_error(hub)
    floor = np.maximum(np.append(values, 0.0) - own, 0.0)
    return Floor(values=values, floor=floor, certainty="guaranteed")


def _undefined(hub: Hub) -> str:
    terms = hub.terms
    if terms.order == 1:
        return ""
    if np.any(terms.ca):
        return "acceleration outputs: the whole-axis error is unbounded"
    if hub.rest.eta:
        return "a loss factor has no time-domain model of which it is the response"
    if hub.rest.beta <= 0:
        return "the uncomputed part has no damping that grows with stiffness: its whole-axis error is unbounded"
    return ""


def whole_axis_error(hub: Hub) -> float:
    """``sup e_H(w)`` over the whole axis: branch and bound to far above the tail, and one bound for all beyond."""
    x = float(hub.terms.x.max(initial=1.0))
    top = 30 * (x if hub.rest.order == 1 else max(np.sqrt(x), 1 / hub.rest.beta, hub.rest.beta * x))
    edges = np.concatenate([[1e-12 * top], np.geomspace(1e-6 * top, top, 400)])

    def own(left: Real, right: Real) -> tuple[Real, Real]:
        upper, middle = hub_suprema(hub, left, right)
        return upper[:, None], middle[:, None]

    found = suprema(own, edges, share=0.05, budget=4000)[0]
    return max(found.value, _beyond(hub, top))


def _beyond(hub: Hub, W: float) -> float:
    """Bound of ``e_H(w)`` for all w >= W, W far above every tail eigenvalue.

    There ``d/(a x + b)`` differs from 1 by at most ``abs(a)(x - sigma)/(abs(b) - abs(a) x)``, and q is at most
    ``(1 - sigma/x_c)/(beta W)``, or about 1 for thermal models; velocity outputs take one W.
    """
    terms = hub.terms.select(np.arange(hub.computed, hub.terms.terms))
    rest, shift = hub.rest, 1 - hub.sigma / hub.x_c if np.isfinite(hub.x_c) else 1.0
    a, b = (np.abs(v[0]) for v in rest.coefficients(np.array([W])))
    off = a * np.abs(terms.x - hub.sigma) / (b - a * terms.x)
    R = np.linalg.norm(hub.tail_rest, axis=0) * off

    def limit(free: Real, port: Real) -> float:
        part = np.linalg.norm(free - hub.tail_rest @ port, 2) if free.size else 0.0
        return float(part + R @ np.linalg.norm(port, axis=1))

    load = limit(hub.load_rest * hub.amplitudes, terms.b * hub.amplitudes)
    q_rest, v_rest, _ = hub.output_rest / hub.resolutions
    displacement = limit(q_rest, terms.cq.T / hub.resolutions)
    velocity = limit(v_rest, terms.cv.T / hub.resolutions)
    q = shift if rest.order == 1 else shift / (rest.beta * W)
    rounding = float(np.linalg.norm(np.abs(hub.weigh(hub.rounding(np.array([W])) + hub.defect(np.array([W]))))))
    return q * load * (displacement + (W if rest.order == 2 else 0.0) * velocity) + rounding


def estimated_floor(system: SecondOrderModal | FirstOrderModal) -> Floor:
    """The same from computed modes alone: an estimate, for models whose uncomputed part has no bound."""
    try:
        values = hankel_values(system)
    except ChoiceError as error:
        return Floor(values=np.zeros(0), floor=np.zeros(0), certainty="estimated", reason=f"{error.what}: {error.got}")
    return Floor(values=values, floor=np.append(values, 0.0), certainty="estimated")
