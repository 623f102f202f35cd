"""Loading a large model file: peak memory over the size of the arrays, time over a plain h5py read of the same file.

    python tests/benchmarks/large_file.py [--nonzeros 100e6] [--folder /tmp]

Each measurement runs in a process of its own (peak memory never falls); the answer is checked before times are printed.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
from pathlib import Path

import h5py
import numpy as np

_PER_ROW = 50
_PLAIN = """
import h5py, json, resource, sys, time
start = time.perf_counter()
with h5py.File(sys.argv[1]) as file:
    parts = [file["stiffness"][name][()] for name in ("data", "indices", "indptr")]
print(json.dumps({"seconds": time.perf_counter() - start, "sum": float(parts[0].sum()), "entries": len(parts[0])}))
"""
_LOAD = """
import json, resource, sys, time
from modesieve import io
import modesieve.io.files  # imports are not the file's
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
start = time.perf_counter()
model = io.load(sys.argv[1])
seconds = time.perf_counter() - start
peak = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) * 1024
size = sum(part.nbytes for M in (model.K, model.M) for part in (M.data, M.indices, M.indptr))
answer = {"sum": float(model.K.data.sum()), "entries": model.K.nnz}
print(json.dumps({"seconds": seconds, "peak": peak, "size": size} | answer))
"""


def write(path: Path, nonzeros: int) -> None:
    """A banded stiffness with 64-bit indices, as other tools write them."""
    n = nonzeros // _PER_ROW
    rng = np.random.default_rng(1)
    with h5py.File(path, "w") as file:
        file.attrs["kind"] = "structure"
        group = file.create_group("stiffness")
        group.attrs["shape"] = (n, n)
        data = group.create_dataset("data", (n * _PER_ROW,), dtype="f8", chunks=(1 << 18,))
        indices = group.create_dataset("indices", (n * _PER_ROW,), dtype="i8", chunks=(1 << 18,))
        group["indptr"] = np.arange(0, n * _PER_ROW + 1, _PER_ROW)
        for low in range(0, n, 20_000):
            rows = np.arange(low, min(low + 20_000, n))
            part = slice(low * _PER_ROW, (rows[-1] + 1) * _PER_ROW)
            indices[part] = (np.minimum(rows, n - _PER_ROW)[:, None] + np.arange(_PER_ROW)).ravel()
            data[part] = rng.random(len(rows) * _PER_ROW)
        mass = file.create_group("mass")
        mass.attrs["shape"] = (n, n)
        mass["data"], mass["indices"], mass["indptr"] = np.ones(n), np.arange(n), np.arange(n + 1)


def measure(code: str, path: Path) -> dict[str, float]:
    done = subprocess.run([sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=True)
    return dict(json.loads(done.stdout))


def _seconds(measured: dict[str, float]) -> float:
    return measured["seconds"]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--nonzeros", type=float, default=100e6)
    parser.add_argument("--folder", type=Path, default=None)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=given.folder) as folder:
        path = Path(folder) / "large.h5"
        write(path, int(given.nonzeros))
        measure(_PLAIN, path)  # both then read from the same warm cache
        rounds = [(measure(_PLAIN, path), measure(_LOAD, path)) for _ in range(4)]  # in turns: a busy machine is fair
        plain, load = (min(column, key=_seconds) for column in zip(*rounds, strict=True))
    assert (plain["sum"], plain["entries"]) == (load["sum"], load["entries"])
    print(f"{load['entries']:.3g} nonzeros, arrays {load['size'] / 1e9:.2f} GB")
    print(f"peak memory over arrays      {load['peak'] / load['size']:.3f}  (promised: under 1.4)")
    print(f"time over a plain h5py read  {load['seconds'] / plain['seconds']:.2f}  (promised: within 3)")


if __name__ == "__main__":
    main()
