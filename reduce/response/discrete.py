"""Exact discrete-time forms of small systems: held or linear input between samples, with an optional input delay.

For ``x' = A x + B u`` and an input that is linear on each piece of a step, the step is exact:
``x(t + h) = e^{A h} x(t) + G0 u(start) + G1 u(end)``; see e.g. Franklin, Powell and Workman, Digital Control of Dynamic
Systems, 3rd ed. 1998, sections 4.3 and 6.3 (held and first-order hold, delays).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np
from scipy.linalg import block_diag, expm

from modesieve.reduce.arrays import Complex, Real, frozen
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.response.small import FirstOrderModal, SmallSystem

Hold: TypeAlias = Literal["zero", "linear"]
#: Tail levels and fast modes past the Nyquist frequency fold; a pole is well sampled at this many samples a period.
SAMPLES_PER_PERIOD = 10
#: ... and at this many samples a time constant of a real pole.
SAMPLES_PER_TIME_CONSTANT = 10


@dataclass(frozen=True, kw_only=True, eq=False)
class Discrete:
    """``z[k+1] = A z[k] + B u[k]``, ``y[k] = C z[k] + D u[k]``, sample time ``dt`` in s.

    With a linear hold z is the state less ``G1 u[k]`` so that no future input is needed; the delay's past inputs are
    the last states. states: of the continuous model, the first ones. shift (states, m): the state is ``z + shift u``.
    """

    A: Real
    B: Real
    C: Real
    D: Real
    dt: float
    hold: Hold
    delay: float
    states: int
    shift: Real

    def __post_init__(self) -> None:
        for name in ("A", "B", "C", "D", "shift"):
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=np.float64)))

    def response(self, omega: Real) -> Complex:
        """``C (e^{j w dt} I - A)^-1 B + D``, shape (w, p, m)."""
        eye = np.eye(len(self.A))
        z = np.exp(1j * np.asarray(omega, dtype=float) * self.dt)
        return np.array([self.C @ np.linalg.solve(v * eye - self.A, self.B) + self.D for v in z])

    def run(self, u: Real, z: Real | None = None) -> tuple[Real, Real]:
        """Outputs (k, p) for inputs u (k, m) from the state z (default 0), and the state afterwards."""
        z = np.zeros(len(self.A)) if z is None else np.array(z, dtype=float)
        y = np.empty((len(u), len(self.C)))
        for k, uk in enumerate(u):
            y[k] = self.C @ z + self.D @ uk
            z = self.A @ z + self.B @ uk
        return y, z


def discretise(system: SmallSystem, dt: float, *, hold: Hold = "zero", delay: float = 0.0) -> Discrete:
    """The exact discrete form at sample time ``dt`` (s) for inputs held or linear between samples.

    delay: of every input, in s, any value >= 0. Raises ChoiceError for a sample time that is no positive number, a
    negative delay, or a linear hold of a model whose future inputs a delay shorter than a step would need.
    """
    if not (np.isfinite(dt) and dt > 0):
        raise ChoiceError("the sample time must be positive", expected="a time above 0 s", got=f"{dt:g} s")
    if not (np.isfinite(delay) and delay >= 0):
        raise ChoiceError("the delay must not be negative", expected="0 s or more", got=f"{delay:g} s")
    whole, part = _split(delay, dt)
    A, B, C, D = system.state_space()
    E, (G_before, G0, G1) = _pieces(system, A, B, dt, part, hold)
    # x[k+1] = E x[k] + G_before v[k-1] + G0 v[k] + G1 v[k+1], v[k] = u[k - whole]
    if whole == 0 and part == 0:
        return Discrete(A=E, B=G0 + E @ G1, C=C, D=D + C @ G1, dt=dt, hold=hold, delay=0.0, states=len(A), shift=G1)
    return _delayed(E, (G_before, G0, G1), C, D, dt, hold, delay, whole, part)


def _split(delay: float, dt: float) -> tuple[int, float]:
    steps = delay / dt
    whole = int(np.floor(steps + 1e-9))
    part = max(delay - whole * dt, 0.0)
    return whole, 0.0 if part < 1e-9 * dt else part


def step_matrices(blocks: list[Real], B: Real, h: float) -> tuple[Real, Real, Real]:
    """``e^{A h}``, and G0, G1 with ``int_0^h e^{A (h-s)} B (u0 (1 - s/h) + u1 s/h) ds = G0 u0 + G1 u1``, by blocks."""
    E, G0, G1, at = [], [], [], 0
    for A in blocks:
        r, m = len(A), B.shape[1]
        wide = np.zeros((r + 2 * m, r + 2 * m))
        wide[:r, :r], wide[:r, r : r + m], wide[r : r + m, r + m :] = A * h, B[at : at + r] * h, np.eye(m)
        X = expm(wide)
        first, second = X[:r, r : r + m], X[:r, r + m :]
        E.append(X[:r, :r])
        G0.append(first - second)
        G1.append(second)
        at += r
    if not E:
        return np.zeros((0, 0)), np.zeros((0, B.shape[1])), np.zeros((0, B.shape[1]))
    return block_diag(*E), np.vstack(G0), np.vstack(G1)


def real_blocks(system: SmallSystem) -> list[Real]:
    """The diagonal blocks of the real state matrix."""
    if isinstance(system, FirstOrderModal):
        return list(system.blocks)
    A = system.state_space()[0]
    return [A[2 * i : 2 * i + 2, 2 * i : 2 * i + 2] for i in range(system.terms)]


def _pieces(
    system: SmallSystem, A: Real, B: Real, dt: float, part: float, hold: Hold
) -> tuple[Real, tuple[Real, Real, Real]]:
    """``e^{A dt}`` and what one step takes from the input before, at and after its start."""
    blocks = real_blocks(system)
    E, G0, G1 = step_matrices(blocks, B, dt)
    nothing = np.zeros_like(G0)
    if hold == "zero":
        if part == 0:
            return E, (nothing, G0 + G1, nothing)
        late, L0, L1 = step_matrices(blocks, B, dt - part)
        _, H0, H1 = step_matrices(blocks, B, part)
        return E, (late @ (H0 + H1), L0 + L1, nothing)
    if part == 0:
        return E, (nothing, G0, G1)
    return E, _linear_with_delay(blocks, B, dt, part)


def _linear_with_delay(blocks: list[Real], B: Real, dt: float, part: float) -> tuple[Real, Real, Real]:
    """A linear input whose corner falls ``part`` after the start of the step."""
    late, L0, L1 = step_matrices(blocks, B, dt - part)
    _, H0, H1 = step_matrices(blocks, B, part)
    share = part / dt
    # At the step's start the delayed input is (share) of the way back from v[k] to v[k-1]; it reaches v[k] at `part`.
    before = late @ (share * H0)
    now = late @ ((1 - share) * H0 + H1) + L0 + share * L1
    after = (1 - share) * L1
    return before, now, after


def _delayed(
    E: Real, G: tuple[Real, Real, Real], C: Real, D: Real, dt: float, hold: Hold, delay: float, whole: int, part: float
) -> Discrete:
    """Past inputs as further states. Times are counted so that no future input is needed."""
    before, now, after = G
    lead = 1 if np.any(after) else 0
    if lead and whole == 0:
        # z = x - after v[k]: the future input enters through the state's own shift.
        shift = after
        now, feed = now + E @ after, after
        before_u = before
    else:
        shift, feed, before_u = np.zeros_like(after), np.zeros_like(after), before
    n, m = now.shape
    oldest = whole + 1  # v[k-1] = u[k - whole - 1]
    slots = oldest
    A = np.zeros((n + slots * m, n + slots * m))
    B = np.zeros((n + slots * m, m))
    A[:n, :n] = E

    def into(steps_back: int, matrix: Real) -> None:
        if steps_back == 0:
            B[:n] += matrix
        else:
            A[:n, n + (steps_back - 1) * m : n + steps_back * m] += matrix

    into(whole + 1, before_u)
    into(whole, now)
    if lead and whole > 0:
        into(whole - 1, after)
    B[n : n + m] = np.eye(m)
    for s in range(1, slots):
        A[n + s * m : n + (s + 1) * m, n + (s - 1) * m : n + s * m] = np.eye(m)
    C_all, D_all = np.zeros((len(C), len(A))), np.zeros((len(C), m))
    C_all[:, :n] = C
    D_all += C @ feed
    _output_delay(C_all, D_all, D, n, m, whole, part / dt, hold)
    return Discrete(A=A, B=B, C=C_all, D=D_all, dt=dt, hold=hold, delay=delay, states=n, shift=shift)


def _output_delay(C: Real, D_all: Real, D: Real, n: int, m: int, whole: int, share: float, hold: Hold) -> None:
    """The feedthrough sees the delayed input too, between two samples where the delay is no whole number of steps."""
    older = 1.0 if (hold == "zero" and share > 0) else share
    for steps_back, weight in ((whole, 1 - older), (whole + 1, older)):
        if weight == 0:
            continue
        if steps_back == 0:
            D_all += weight * D
        else:
            C[:, n + (steps_back - 1) * m : n + steps_back * m] += weight * D


# ---- honest sampling -----------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Folded:
    """A pole past the Nyquist frequency: where it is (Hz), and where it appears after sampling."""

    hz: float
    appears_hz: float
    in_band: bool


def suggested_sample_time(system: SmallSystem, band: tuple[float, float] | None = None) -> float:
    """A sample time (s) with ten samples a period of the fastest oscillation and a time constant of the fastest pole.

    With a band (rad/s), poles beyond twice its top are not waited for. Common practice.
    """
    poles = system.poles
    if band is not None:
        inside = poles[np.abs(poles) <= 2 * band[1]]
        poles = inside if inside.size else poles
    swing = np.abs(poles.imag).max(initial=0.0)
    if band is not None:
        swing = max(swing, band[1])
    decay = np.abs(poles.real[np.abs(poles.imag) < 1e-3 * np.abs(poles)]).max(initial=0.0)
    limits = [2 * np.pi / (SAMPLES_PER_PERIOD * swing)] if swing > 0 else []
    if decay > 0 and band is None:
        limits.append(1 / (SAMPLES_PER_TIME_CONSTANT * decay))
    return _round_down(min(limits)) if limits else 1.0


def _round_down(t: float) -> float:
    """The next lower of 1, 2 or 5 times a power of ten."""
    power = 10.0 ** np.floor(np.log10(t) + 1e-12)
    return float(max(f for f in (1.0, 2.0, 5.0) if f * power <= t * (1 + 1e-9)) * power)


def folded_poles(system: SmallSystem, dt: float, band: tuple[float, float] | None = None) -> tuple[Folded, ...]:
    """Oscillating poles that the sample time ``dt`` (s) cannot tell from lower ones, with where they appear."""
    out = []
    rate = 1 / dt
    for pole in system.poles:
        hz = pole.imag / (2 * np.pi)
        if hz > rate / 2:
            seen = abs(hz - rate * round(hz / rate))
            inside = band is not None and band[0] <= 2 * np.pi * seen <= band[1]
            out.append(Folded(hz=float(hz), appears_hz=float(seen), in_band=inside))
    return tuple(sorted(out, key=lambda f: f.hz))
