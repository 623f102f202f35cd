"""Local dampers of low rank: a hub whose dampers are extra ports, closed by feedback, with a bound at every frequency.

The local part ``j w D + j S`` (viscous matrix D, imaginary stiffness S) has rank r: ``L (j w R + j T) L^T``, on few
unknowns. The model without it has real modes and a hub for loads ``[F, L]`` and outputs ``[C; L^T]``; with the matrix
``Y(w) = j w R + j T`` the damped model is the closed loop

    G = G_yu - G_yl Y N^-1 G_lu,   N = I + G_ll Y.

Replacing each block by the hub's leaves, with e_.. the hub's bounds and t = norm(N_H^-1),

    norm(N^-1 - N_H^-1) <= t^2 d/(1 - t d),  d = e_ll norm(Y),  as long as t d < 1

(perturbation of the inverse; Golub and Van Loan, Matrix Computations, section 2.3), and so a bound of G itself. It
holds pointwise; between the frequencies asked for nothing is claimed.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from modesieve.reduce.arrays import Complex, Ints, Real, Sparse
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Modes
from modesieve.reduce.model import Damping, Structure
from modesieve.reduce.response.norms import largest_singular_value
from modesieve.reduce.truncation.build import build_hub
from modesieve.reduce.truncation.hub import Hub
from modesieve.reduce.truncation.krylov import Shifted

#: More damped directions than this are not "a few dampers": the feedback loop then costs more than it tells.
_MOST = 60


@dataclass(frozen=True, kw_only=True, eq=False)
class Loop:
    """The damped directions L (n, r) and what closes them: R and T (r, r) symmetric, ``Y(w) = j w R + j T``."""

    L: Real
    R: Real
    T: Real

    def gain(self, omega: Real) -> Complex:
        """``Y(w)``, (w, r, r)."""
        w = np.asarray(omega, dtype=float)[:, None, None]
        return np.asarray(1j * w * self.R + 1j * np.sign(w) * self.T)


@dataclass(frozen=True, kw_only=True, eq=False)
class DampedHub:
    """hub: of the model without its local dampers, inputs ``[u, l]``, outputs ``[y, l]``; loop closes the l. m, p: the
    model's own inputs and outputs."""

    hub: Hub
    loop: Loop
    m: int
    p: int

    def response(self, omega: Real) -> Complex:
        """The closed loop of the hub, (w, p, m): the reference that small models are held against."""
        return self._parts(np.asarray(omega, dtype=float))[0]

    def error(self, omega: Real) -> Real:
        """Bound of the largest singular value of ``G - response`` at every frequency, weighted, (w,); inf where the
        hub is not good enough to close the loop."""
        return self._parts(np.asarray(omega, dtype=float))[1]

    @np.errstate(invalid="ignore", over="ignore", divide="ignore")
    def _parts(self, w: Real) -> tuple[Complex, Real]:
        p, m = self.p, self.m
        H, e = self.hub.response(w), self.hub.entry_error(w)
        rows, columns = 1 / self.hub.resolutions[:p, None], self.hub.amplitudes[:m]
        yu, yl, lu, ll = H[:, :p, :m], H[:, :p, m:], H[:, p:, :m], H[:, p:, m:]
        Y = self.loop.gain(w)
        inverse = np.linalg.inv(np.eye(ll.shape[1]) + ll @ Y)
        closed = yu - yl @ Y @ inverse @ lu
        # Norms of the blocks and of their errors (Frobenius norms of entry bounds), ports weighted.
        size = [largest_singular_value(G) for G in (rows * yl, lu * columns, inverse, Y)]
        off = [np.sqrt(np.sum(part**2, axis=(1, 2))) for part in self._errors(e, rows, columns)]
        total = _closed_error(*size, *off)
        return closed, np.where(np.isnan(total), np.inf, total)

    def _errors(self, e: Real, rows: Real, columns: Real) -> tuple[Real, Real, Real, Real]:
        p, m = self.p, self.m
        return rows * e[:, :p, :m] * columns, rows * e[:, :p, m:], e[:, p:, :m] * columns, e[:, p:, m:]


def _closed_error(yl: Real, lu: Real, t: Real, y: Real, e_yu: Real, e_yl: Real, e_lu: Real, e_ll: Real) -> Real:
    """``e_yu + norm(G_yl Y N^-1 G_lu - the same of the hub)``, term by term.

    ``A N^-1 B - A' N'^-1 B' = (A - A') N^-1 B + A' (N^-1 - N'^-1) B + A' N'^-1 (B - B')``, A = G_yl Y, B = G_lu.
    """
    d = e_ll * y
    inside = t * d < 1
    whole = np.where(inside, t / np.where(inside, 1 - t * d, 1.0), np.inf)  # norm(N^-1)
    B = lu + e_lu
    return np.asarray(e_yu + e_yl * y * whole * B + yl * y * (t * d * whole) * B + yl * y * t * e_lu)


def loop_of(model: Structure) -> Loop:
    """The local dampers as a loop of low rank.

    Raises ChoiceError without local dampers, or with more damped directions than a loop is worth.
    """
    parts = [part for part in (model.damping.viscous, model.damping.stiffness_loss) if part is not None]
    if not parts:
        raise ChoiceError("there is no local damper", expected="a viscous matrix or an imaginary stiffness", got="none")
    touched: Ints = np.flatnonzero(sum(np.asarray(abs(part).sum(axis=1)).ravel() for part in parts))
    if len(touched) > 20 * _MOST:
        raise _too_many(len(touched))
    left, size, _ = np.linalg.svd(np.hstack([_dense(part, touched) for part in parts]), full_matrices=False)
    U = left[:, size > 1e-13 * size.max(initial=0.0)]
    if U.shape[1] > _MOST:
        raise _too_many(U.shape[1])
    L = np.zeros((model.n, U.shape[1]))
    L[touched] = U

    def squeezed(part: Sparse | None) -> Real:
        return np.zeros((U.shape[1],) * 2) if part is None else np.asarray(U.T @ _dense(part, touched) @ U)

    return Loop(L=L, R=squeezed(model.damping.viscous), T=squeezed(model.damping.stiffness_loss))


def _dense(part: Sparse, touched: Ints) -> Real:
    return np.asarray(part[touched][:, touched].toarray())


def _too_many(found: int) -> ChoiceError:
    return ChoiceError(
        "too many local dampers for a guarantee",
        expected=f"at most {_MOST} damped directions",
        got=str(found),
        remedy="the error is measured against the full model instead",
    )


def opened(model: Structure, loop: Loop) -> Structure:
    """The model without its local dampers, the damped directions added to its inputs and outputs.

    Raises ChoiceError for modal damping: what the counted modes carry is then not this model's own.
    """
    if model.damping.is_modal:
        raise ChoiceError(
            "no guarantee for modal ratios beside local dampers",
            expected="no base damping, Rayleigh or a loss factor",
            got="damping ratios of modes",
        )
    r, p, m = loop.L.shape[1], model.p, model.m
    kinds: dict[str, Any] = {name: getattr(model, name) for name in ("Cv", "Ca") if getattr(model, name) is not None}
    wider: dict[str, Any] = {name: np.vstack([C, np.zeros((r, model.n))]) for name, C in kinds.items()}
    Du = np.zeros((p + r, m + r))
    Du[:p, :m] = model.Du
    weights_in = np.concatenate([model.amplitudes, np.ones(r)])
    weights_out = np.concatenate([model.resolutions, np.ones(r)])
    inputs, outputs = model.inputs[:1], model.outputs[:1]
    if not inputs or not outputs:
        raise ChoiceError("a guarantee needs a response", expected="an input and an output", got="none")
    return replace(
        model,
        F=np.hstack([np.asarray(model.F), loop.L]),
        Cq=np.vstack([np.zeros((p, model.n)) if model.Cq is None else model.Cq, loop.L.T]),
        Du=Du,
        damping=Damping(base=model.damping.base),
        inputs=tuple(replace(inputs[0], name=f"port {i + 1}", amplitude=float(a)) for i, a in enumerate(weights_in)),
        outputs=tuple(
            replace(outputs[0], name=f"port {i + 1}", resolution=float(a)) for i, a in enumerate(weights_out)
        ),
        **wider,
    )


def damped_hub(model: Structure, modes: Modes, loop: Loop, *, shifted: Shifted | None = None) -> DampedHub:
    """The hub of a locally damped structure. modes: those of ``opened(model, loop)``, counted.

    Raises ChoiceError as `build_hub` does.
    """
    return DampedHub(hub=build_hub(modes, shifted=shifted), loop=loop, m=model.m, p=model.p)
