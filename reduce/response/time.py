"""Step and impulse responses of small systems by exact propagation.

Between two samples ``h`` apart every block obeys ``x(t + h) = e^{A h} x(t) + int_0^h e^{A s} ds B u`` for a held
input: exact at the samples, whatever the step. One exponential per block and step length; `time_grid` is made of
stretches of equal steps so that few are needed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm

from modesieve.reduce.arrays import Complex, Ints, Real
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.grid import HasPoles
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem

_E_FOLDINGS = 5.0  # of the slowest mode: within 1 % of the end
_PERIODS = 12.0  # of the slowest oscillation
_GROWTH = 3.0  # e-foldings of an unstable mode that are worth looking at
_PER_PERIOD = 16.0  # samples of the fastest oscillation, as far as `points` allows


def step_response(system: SmallSystem, t: Real) -> Real:
    """Outputs (t, p, m) to a unit step at t = 0 in each input, zero initial state. t (t,) in s, ascending from >= 0.

    At t = 0 the feedthrough already answers. Loss factors act as zeta = eta/2.

    >>> lag = FirstOrderModal(blocks=(np.array([[-2.0]]),), B=[[2.0]], C=[[1.0]], D=[[0.0]])
    >>> [round(float(y), 6) for y in step_response(lag, np.array([0.0, 0.5, 1.5]))[:, 0, 0]]
    [0.0, 0.632121, 0.950213]
    """
    return _walk(system, checked_times(t), held=True)


def impulse_response(system: SmallSystem, t: Real) -> Real:
    """Outputs (t, p, m) to a unit impulse at t = 0 in each input: ``C e^{A t} B``.

    A feedthrough answers an impulse by an impulse; that part is left out.
    """
    return _walk(system, checked_times(t), held=False)


def checked_times(t: Real) -> Real:
    """The times as an array. Raises ChoiceError unless ascending, finite and not negative."""
    t = np.asarray(t, dtype=float)
    if t.ndim != 1 or t.size == 0 or not np.isfinite(t).all() or t[0] < 0 or np.any(np.diff(t) <= 0):
        raise ChoiceError(
            "the times make no time grid", expected="finite, ascending, from 0 s or later", got=f"{t.size} values"
        )
    return t


@dataclass(frozen=True, kw_only=True, eq=False)
class _Stack:
    """Blocks of equal size: A (q, r, r), B (q, r, m), C (p, q r)."""

    A: Real
    B: Real
    C: Real

    def propagator(self, h: float) -> tuple[Real, Real]:
        """``e^{A h}`` and ``int_0^h e^{A s} ds B``, from one exponential of ``[[A, I], [0, 0]] h``."""
        q, r, _ = self.A.shape
        if r == 1:
            z = self.A * h
            return np.exp(z), h * _phi1(z) @ self.B
        wide = np.zeros((q, 2 * r, 2 * r))
        wide[:, :r, :r], wide[:, :r, r:] = self.A, np.eye(r)
        E = expm(wide * h)
        return E[:, :r, :r], E[:, :r, r:] @ self.B


def _phi1(z: Real) -> Real:
    """``(e^z - 1)/z``, 1 at 0."""
    return np.where(z == 0, 1.0, np.expm1(z) / np.where(z == 0, 1.0, z))


def _stacks(system: SmallSystem) -> tuple[list[_Stack], Real]:
    A, B, C, D = system.state_space()
    sizes = [len(a) for a in system.blocks] if isinstance(system, FirstOrderModal) else [2] * system.terms
    unit = _state_scale(system)
    A, B, C = A * unit / unit[:, None], B / unit[:, None], C * unit
    starts = np.concatenate([[0], np.cumsum(sizes)]).astype(int)
    out = []
    for r in sorted(set(sizes)):
        rows = np.array([np.arange(s, s + r) for s, size in zip(starts, sizes, strict=False) if size == r])
        out.append(_Stack(A=A[rows[:, :, None], rows[:, None, :]], B=B[rows], C=C[:, rows.ravel()]))
    return out, D


def _state_scale(system: SmallSystem) -> Real:
    """Velocities over omega: rotation blocks whose exponential keeps its digits."""
    unit = np.ones(system.states)
    if isinstance(system, FirstOrderModal):
        return unit
    omega = np.sqrt(np.abs(system.x))
    unit[1::2] = np.where(omega > 0, omega, 1.0)
    return unit


def _walk(system: SmallSystem, t: Real, *, held: bool) -> Real:
    stacks, D = _stacks(system)
    out = np.zeros((len(t), *D.shape))
    if held:
        out += D
    lengths, which = _step_lengths(t)
    for stack in stacks:
        _walk_stack(stack, lengths, which, held, out)
    return out


def _walk_stack(stack: _Stack, lengths: Real, which: Ints, held: bool, out: Real) -> None:
    table = [stack.propagator(h) for h in lengths]
    x = np.zeros_like(stack.B) if held else stack.B
    m = x.shape[2]
    for i, k in enumerate(which):
        if k >= 0:
            Phi, Gamma = table[k]
            x = Phi @ x + Gamma if held else Phi @ x
        out[i] += stack.C @ x.reshape(-1, m)


def _step_lengths(t: Real) -> tuple[Real, Ints]:
    """Distinct steps, and per sample the index of the one before it (-1: none, t = 0).

    Steps that differ by the rounding of t only share their mean, so that the stretch as a whole stays exact.
    """
    steps = np.diff(t, prepend=0.0)
    first = 1 if steps[0] == 0 else 0
    keys = np.array([float(f"{h:.9e}") for h in steps[first:]])
    distinct, inverse = np.unique(keys, return_inverse=True)
    mean = np.bincount(inverse, weights=steps[first:]) / np.maximum(np.bincount(inverse), 1) if keys.size else distinct
    return mean, np.concatenate([-np.ones(first, dtype=int), inverse]).astype(np.int64)


# ---- which times ---------------------------------------------------------------------------------------------------


def time_grid(modes: HasPoles, band: tuple[float, float], *, points: int = 1500) -> Real:
    """Times (t,) in s from 0 on, for the modes that move within or below ``band`` (rad/s).

    Oscillating modes: equal steps over five time constants or twelve periods of the slowest, whichever is shorter.
    Real poles only: stretches of equal steps, each twice the last, from a tenth of the fastest time constant in the
    band to five of the slowest. Integrating modes end with the others; an unstable one after three e-foldings.
    """
    lam = np.asarray(modes.eigenvalue)
    seen = lam[(np.abs(lam) <= band[1]) & (np.abs(lam) > 1e-9 * max(band[1], 1e-300))]
    end = _horizon(seen, band)
    swinging = seen[np.abs(seen.imag) > 1e-3 * np.abs(seen)]
    if swinging.size:
        wanted = end * np.abs(swinging).max() / (2 * np.pi) * _PER_PERIOD
        return np.linspace(0.0, end, int(np.clip(wanted, 400, points)) + 1)
    shortest = 0.1 / np.abs(seen).max() if seen.size else end / 400
    return _doubling(min(shortest, end / 100), end)


def _horizon(lam: Complex, band: tuple[float, float]) -> float:
    settling = lam[lam.real < 0]
    swinging = lam[np.abs(lam.imag) > 1e-3 * np.abs(lam)]
    ends = []
    if settling.size:
        ends.append(_E_FOLDINGS / (-settling.real).min())
    if swinging.size:
        ends.append(_PERIODS * 2 * np.pi / np.abs(swinging.imag).min())
    growing = lam.real.max(initial=0.0)
    if growing > 0:
        ends.append(_GROWTH / growing)
    return float(min(ends)) if ends else _PERIODS * 2 * np.pi / band[1]


def _doubling(h: float, end: float, stretch: int = 40) -> Real:
    """0, then ``stretch`` steps of h, of 2 h, of 4 h ... until ``end``."""
    parts: list[Real] = [np.zeros(1)]
    t = 0.0
    while t < end:
        count = min(stretch, int(np.ceil((end - t) / h - 1e-9)))
        parts.append(t + h * np.arange(1.0, count + 1))
        t, h = t + count * h, 2 * h
    return np.concatenate(parts)
