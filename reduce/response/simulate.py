"""Exact propagation of a small system through a given input history, on even or uneven times."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.integrate import trapezoid
from scipy.signal import lfilter

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.discrete import Hold, real_blocks, step_matrices
from modesieve.reduce.response.small import SmallSystem


@dataclass(frozen=True, kw_only=True, eq=False)
class History:
    """Outputs y (t, p) at the times t (t,) in s, and the state (states,) at the last time, to go on from."""

    t: Real
    y: Real
    state: Real


def simulate(system: SmallSystem, t: Real, u: Real, *, hold: Hold = "zero", state: Real | None = None) -> History:
    """Outputs for inputs u (t, m) given at the times t (t,) s, ascending; exact for held or linear inputs.

    state (states,): at the first time, default rest. A run split at any sample equals the run in one piece.
    Raises ChoiceError for times that do not ascend or an input of another shape.

    >>> from modesieve.reduce.response.small import FirstOrderModal
    >>> lag = FirstOrderModal(blocks=(np.array([[-1.0]]),), B=[[1.0]], C=[[1.0]], D=[[0.0]])
    >>> run = simulate(lag, np.array([0.0, 0.3, 3.0]), np.ones((3, 1)))
    >>> [round(float(v), 6) for v in run.y[:, 0]]
    [0.0, 0.259182, 0.950213]
    """
    t, u = _checked(system, t, u)
    _, B, C, D = system.state_space()
    x0 = np.zeros(system.states) if state is None else np.asarray(state, dtype=float)
    lengths, which = _steps(t)
    X = np.empty((len(t), system.states))
    X[0] = x0
    at = 0
    for block in real_blocks(system):
        rows = slice(at, at + len(block))
        _walk(block, B[rows], lengths, which, u, hold, X[:, rows])
        at += len(block)
    return History(t=t, y=X @ C.T + u @ D.T, state=X[-1].copy())


def _checked(system: SmallSystem, t: Real, u: Real) -> tuple[Real, Real]:
    t, u = np.asarray(t, dtype=float), np.asarray(u, dtype=float)
    if t.ndim != 1 or t.size == 0 or not np.isfinite(t).all() or np.any(np.diff(t) <= 0):
        raise ChoiceError("the times do not ascend", expected="finite times, each later than the one before")
    if u.shape != (t.size, system.m):
        raise ChoiceError("the inputs do not fit", expected=f"shape ({t.size}, {system.m})", got=f"shape {u.shape}")
    return t, u


def _steps(t: Real) -> tuple[Real, Ints]:
    """Distinct step lengths (equal to ten digits: the rounding of t) and which one each step has."""
    steps = np.diff(t)
    keys = np.array([float(f"{h:.9e}") for h in steps])
    distinct, which = np.unique(keys, return_inverse=True)
    mean = np.bincount(which, weights=steps) / np.bincount(which) if steps.size else distinct
    return mean, which.astype(np.int64)


def _walk(A: Real, B: Real, lengths: Real, which: Ints, u: Real, hold: Hold, X: Real) -> None:
    """Fill the states X (t, r) of one block; X[0] is given."""
    table = [step_matrices([A], B, h) for h in lengths]
    drive = np.empty((len(which), len(A)))
    for k, (_, G0, G1) in enumerate(table):
        at = np.flatnonzero(which == k)
        end = u[at] if hold == "zero" else u[at + 1]
        drive[at] = u[at] @ G0.T + end @ G1.T
    if len(lengths) == 1 and len(A) == 1:
        e = table[0][0][0, 0]
        X[1:, 0] = lfilter([1.0], [1.0, -e], drive[:, 0], zi=[e * X[0, 0]])[0]
        return
    x = X[0].copy()
    for i, k in enumerate(which):
        x = table[k][0] @ x + drive[i]
        X[i + 1] = x


def steady_state(system: SmallSystem, u: Real) -> Real:
    """The state (states,) that the constant inputs u (m,) lead to.

    Raises ChoiceError where a forced pole at zero or on the right never settles.
    """
    _, B, _, _ = system.state_space()
    x, at = np.zeros(system.states), 0
    for A in real_blocks(system):
        drive = B[at : at + len(A)] @ u
        if np.any(drive):
            if np.linalg.eigvals(A).real.max() >= 0:
                raise ChoiceError(
                    "there is no steady state",
                    expected="poles with negative real part, or a load that does not reach the others",
                    got="an integrating, undamped or unstable mode under a constant input",
                    remedy="start from rest, or from a saved state",
                )
            x[at : at + len(A)] = -np.linalg.solve(A, drive)
        at += len(A)
    return x


@dataclass(frozen=True, kw_only=True, eq=False)
class RandomResponse:
    """Root mean square of every output (p,), and how far the model's error can move it on the samples (p,) or None."""

    rms: Real
    error: Real | None
    hz: tuple[float, float]


def random_response(
    system: SmallSystem, hz: Real, psd: Real, G: Real | None = None, bound: Real | None = None
) -> RandomResponse:
    """RMS of the outputs under one-sided input power spectral densities, uncorrelated between inputs.

    hz (w,) ascending; psd (w, m) in unit^2/Hz: ``rms_k^2 = int sum_l abs(R_kl)^2 S_l df`` by the trapezoidal rule, so
    hz must resolve the resonances. G (w, p, m): the full response there; then
    ``abs(rms(G) - rms(R)) <= rms(G - R)`` (triangle inequality), which is returned as the error. bound (w, p, m): an
    upper bound of ``abs(G - R)`` in its place.
    """
    R = system.response(2 * np.pi * np.asarray(hz))

    def rms(H: Complex | Real) -> Real:
        return np.sqrt(trapezoid(np.einsum("wpm,wm->wp", np.abs(H) ** 2, psd), hz, axis=0))

    gap = G - R if G is not None else bound
    return RandomResponse(rms=rms(R), error=None if gap is None else rms(gap), hz=(float(hz[0]), float(hz[-1])))
