"""Chains, ladders and rods: models whose answers are closed forms."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

from modesieve.reduce.arrays import Real
from modesieve.reduce.model import Damping, Input, Output, StateSpace, Structure, Thermal, Unknowns


def tridiagonal(n: int, first: float = 2.0, last: float = 2.0) -> sp.csr_array:
    """Second difference matrix (n, n) with the given ends: 2 held, 1 free."""
    diagonal = np.full(n, 2.0)
    diagonal[0], diagonal[-1] = (first, last) if n > 1 else (first + last - 2.0,) * 2
    off = -np.ones(max(n - 1, 0))
    return sp.csr_array(sp.diags_array([off, diagonal, off], offsets=[-1, 0, 1], shape=(n, n)))


def chain(
    n: int, *, k: float = 1.0, m: float = 1.0, ends: str = "fixed-free", damping: Damping | None = None
) -> Structure:
    """n equal masses m on springs k in a line, driven and read at the last mass.

    ends: "fixed-free", "fixed-fixed" or "free-free"; see `chain_omega` for the exact frequencies.
    """
    first, last = {"fixed-free": (2.0, 1.0), "fixed-fixed": (2.0, 2.0), "free-free": (1.0, 1.0)}[ends]
    F = np.zeros((n, 1))
    F[-1] = 1.0
    return Structure(
        K=k * tridiagonal(n, first, last),
        M=m * sp.eye_array(n, format="csr"),
        F=F,
        Cq=F.T,
        damping=damping or Damping(),
        inputs=(Input(name="push", unit="N"),),
        outputs=(Output(name="end", unit="m"),),
        unknowns=Unknowns(
            node=tuple(str(i + 1) for i in range(n)),
            direction=("x",) * n,
            xyz=np.column_stack([np.arange(1.0, n + 1), np.zeros(n), np.zeros(n)]),
        ),
        title=f"{ends} chain of {n} masses",
    )


def chain_omega(n: int, *, k: float = 1.0, m: float = 1.0, ends: str = "fixed-free") -> Real:
    """Exact angular frequencies (n,) of `chain`, ascending (lattice result; Blevins 1979, Table 6-2)."""
    j = np.arange(1, n + 1)
    angle = {
        "fixed-free": (2 * j - 1) * np.pi / (2 * (2 * n + 1)),
        "fixed-fixed": j * np.pi / (2 * (n + 1)),
        "free-free": (j - 1) * np.pi / (2 * n),
    }[ends]
    return np.asarray(2 * np.sqrt(k / m) * np.sin(angle))


def ladder(n: int, *, R: float = 1.0, C: float = 1.0, at: str = "far") -> Thermal:
    """n equal sections of series R and shunt C, driven by a temperature behind the first R.

    at: the output, "far" end or the "driven" node. Decay rates: ``(4/(R C)) sin^2((2j-1) pi/(2(2n+1)))``.
    """
    F, row = np.zeros((n, 1)), np.zeros((1, n))
    F[0] = 1 / R
    row[0, -1 if at == "far" else 0] = 1.0
    return Thermal(
        K=tridiagonal(n, 2.0, 1.0) / R,
        E=C * sp.eye_array(n, format="csr"),
        F=F,
        C=row,
        inputs=(Input(name="source", unit="K"),),
        outputs=(Output(name=at, unit="K"),),
        title=f"ladder of {n} sections",
    )


def ladder_rates(n: int, *, R: float = 1.0, C: float = 1.0) -> Real:
    """Exact decay rates (n,) of `ladder` in 1/s, ascending (Elmore 1948)."""
    return np.asarray(4 / (R * C) * np.sin((2 * np.arange(1, n + 1) - 1) * np.pi / (2 * (2 * n + 1))) ** 2)


def rod(n: int, *, length: float = 1.0, area: float = 1.0, E: float = 1.0, rho: float = 1.0) -> Structure:
    """Clamped-free rod of n linear elements, consistent mass, pulled and read at its free end.

    Continuum: ``omega_j = (2j - 1) pi/2 sqrt(E/rho)/length``; effective masses ``8/((2j-1) pi)^2`` of the total.
    """
    h = length / n
    K = E * area / h * tridiagonal(n, 2.0, 1.0)
    M = rho * area * h / 6 * (6 * sp.eye_array(n) - tridiagonal(n, 2.0, 1.0))
    M = M.tolil()
    M[n - 1, n - 1] = rho * area * h / 3
    F = np.zeros((n, 1))
    F[-1] = 1.0
    return Structure(
        K=K, M=sp.csr_array(M), F=F, Cq=F.T, unknowns=Unknowns(direction=("x",) * n), title=f"rod of {n} elements"
    )


def random_state_space(seed: int, n: int = 20, m: int = 2, p: int = 2, repeats: int = 0) -> StateSpace:
    """A stable real state space with real poles, pairs, and ``repeats`` copies of one pole in a Jordan-like chain."""
    rng = np.random.default_rng(seed)
    A = np.zeros((n, n))
    i = 0
    while i < n - repeats:
        if i + 1 < n - repeats and rng.random() < 0.5:
            a, b = rng.uniform(0.01, 1.0), rng.uniform(0.5, 20.0)
            A[i : i + 2, i : i + 2] = [[-a, b], [-b, -a]]
            i += 2
        else:
            A[i, i] = -rng.uniform(0.05, 30.0)
            i += 1
    for j in range(n - repeats, n):
        A[j, j] = -1.7
        if j + 1 < n:
            A[j, j + 1] = 1.0
    T = np.linalg.qr(rng.normal(size=(n, n)))[0] @ np.diag(rng.uniform(0.5, 2.0, n))
    return StateSpace(
        A=T @ A @ np.linalg.inv(T), B=rng.normal(size=(n, m)), C=rng.normal(size=(p, n)), title=f"random system {seed}"
    )
