"""Speed of the modal stage and of the full response against what a script would do, in the same run.

    python tests/benchmarks/engine.py [--small] [--solver superlu]

Every answer is checked before its time is printed. Times are of whole calls, nothing precomputed; ratios count.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import eigsh, splu

from modesieve.examples import solid
from modesieve.reduce.linalg import certified_pairs, factorise
from modesieve.reduce.model import Damping, Rayleigh, Structure
from modesieve.reduce.response.full import full_response

MODES, FREQUENCIES = 60, 400


def timed(call: Callable[[], Any]) -> tuple[Any, float]:
    began = time.perf_counter()
    out = call()
    return out, time.perf_counter() - began


def modes_row(model: Structure, solver: Any) -> list[str]:
    """60 modes with their count against one factorisation and against eigsh as written."""
    factor, one = timed(lambda: factorise(model.K, symmetry="definite", solver=solver))
    factor.release()
    (pairs, count), ours = timed(lambda: certified_pairs(model.K, model.M, count=MODES, start=model.F, solver=solver))
    assert count.reliable
    assert count.expected == np.count_nonzero(pairs.x < count.mu)
    values, theirs = timed(lambda: eigsh(model.K.tocsc(), MODES, model.M.tocsc(), sigma=0)[0])
    worst = float(np.max(np.abs(pairs.x[:MODES] / np.sort(values) - 1)))
    assert worst < 1e-6, f"eigenvalues differ by {worst:.1e}"
    return [
        f"{MODES} modes, counted, {model.n:,} unknowns",
        f"{ours:.1f} s, {pairs.solves} solves, {pairs.factorisations} factorisations",
        f"eigsh {theirs:.1f} s: {theirs / ours:.1f} times; one factorisation {one:.1f} s: {ours / one:.1f} of them",
    ]


def response_row(model: Structure, solver: Any) -> list[str]:
    """400 verified frequencies against one complex splu a frequency (a few are timed and multiplied)."""
    omega = 2 * np.pi * np.geomspace(10, 3000, FREQUENCIES)
    full, ours = timed(lambda: full_response(model, omega, solver=solver))
    assert full.worst_backward_error <= 1e-12, f"backward error {full.worst_backward_error:.1e}"
    alpha, beta = 2.0, 1e-6
    assert model.Cq is not None
    spent, places = 0.0, np.linspace(0, FREQUENCIES - 1, 3 if model.n < 20_000 else 1).astype(int)
    for k in places:
        w = float(omega[k])
        Z = sp.csc_array((1 + 1j * w * beta) * model.K + (1j * w * alpha - w**2) * model.M)
        X, seconds = timed(lambda Z=Z: splu(Z).solve(model.F.astype(complex)))
        spent += seconds
        G = model.Cq @ X
        gap = float(np.abs(full.G[k] - G).max() / np.abs(G).max())
        assert gap < 1e-6, f"responses differ by {gap:.1e}"
    theirs = spent / len(places) * FREQUENCIES
    return [
        f"{FREQUENCIES} frequencies, {model.n:,} unknowns",
        f"{ours:.1f} s, {full.solves} solves, {full.factorisations} factorisations, residual {full.worst_residual:.1e}",
        f"complex splu {theirs / FREQUENCIES:.1f} s each: {theirs / ours:.0f} times",
    ]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--small", action="store_true", help="13,464 unknowns only")
    parser.add_argument("--solver", choices=["auto", "superlu", "pardiso"], default="auto")
    asked = parser.parse_args()
    damping = Damping(base=Rayleigh(alpha=2.0, beta=1e-6))
    sizes = [(24, 16, 10)] + ([] if asked.small else [(40, 32, 20)])
    for size in sizes:
        model = solid(*size, damping=damping)
        for row in (modes_row, response_row):
            print("  |  ".join(row(model, asked.solver)), flush=True)


if __name__ == "__main__":
    main()
