"""Input and output histories as CSV: first column the time, then one column a channel, a header with names."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from modesieve.io.atomic import write_text
from modesieve.reduce.arrays import Real
from modesieve.reduce.errors import FileError


@dataclass(frozen=True, kw_only=True, eq=False)
class Inputs:
    """Times t (t,) in s and one column a channel, in the order of ``names``."""

    t: Real
    u: Real
    names: tuple[str, ...]


def read_inputs(path: Path, names: tuple[str, ...]) -> Inputs:
    """The inputs ``names`` from a CSV file; columns may come in any order, a missing one is refused.

    Raises FileError for blanks, text, NaN or times that do not ascend, with the row.
    """
    rows = _rows(path)
    header = [cell.strip() for cell in rows[0]]
    order = _columns(path, header, names)
    table = np.empty((len(rows) - 1, 1 + len(names)))
    for k, row in enumerate(rows[1:], start=2):
        if len(row) != len(header):
            raise _bad(path, k, f"{len(header)} columns", f"{len(row)}")
        table[k - 2] = [_number(path, k, header[at], row[at]) for at in order]
    late = np.flatnonzero(np.diff(table[:, 0]) <= 0)
    if late.size:
        raise _bad(path, int(late[0]) + 3, "a time later than the row before", f"{table[late[0] + 1, 0]:g} s")
    return Inputs(t=table[:, 0], u=table[:, 1:], names=names)


def is_spectrum(path: Path) -> bool:
    """True when the first column is named hz: the table then holds power spectral densities over frequency."""
    return _rows(path)[0][0].strip().lower() == "hz"


def _rows(path: Path) -> list[list[str]]:
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            rows = [row for row in csv.reader(file) if any(cell.strip() for cell in row)]
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise FileError("the inputs cannot be read", got=str(error), where=str(path)) from error
    if len(rows) < 2:
        raise FileError("the inputs are empty", expected="a header and at least one row", where=str(path))
    if len(rows[0]) == 1 and ";" in rows[0][0]:
        raise FileError(
            "the columns are separated by semicolons",
            expected="commas between columns, points in numbers",
            got=rows[0][0][:60],
            where=str(path),
            remedy="export the table as comma-separated values with decimal points",
        )
    return rows


def _columns(path: Path, header: list[str], names: tuple[str, ...]) -> list[int]:
    missing = [n for n in names if n not in header[1:]]
    unknown = [h for h in header[1:] if h not in names]
    if missing or unknown or len(set(header)) != len(header):
        raise FileError(
            "the header does not name the inputs",
            expected="time, " + ", ".join(names),
            got=", ".join(header),
            where=f"{path}, row 1",
            remedy="name every input once; an input at rest is a column of zeros",
        )
    return [0, *(header.index(n, 1) for n in names)]


def _number(path: Path, row: int, column: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise _bad(path, row, f"a finite number under {column!r}", repr(text[:40]) if text.strip() else "a blank")
    return value


def _bad(path: Path, row: int, expected: str, got: str) -> FileError:
    return FileError("the inputs have a bad row", expected=expected, got=got, where=f"{path}, row {row}")


def write_outputs(path: Path, t: Real, columns: dict[str, Real]) -> None:
    """Times and named columns as CSV, every number to its last digit, whole or not at all."""
    lines = [",".join(["time", *(safe_header(name) for name in columns)])]
    stacked = np.column_stack([t, *columns.values()])
    lines += [",".join(repr(float(v)) for v in row) for row in stacked]
    write_text(path, "\n".join(lines) + "\n")


def safe_header(name: str) -> str:
    """A name as a CSV cell; one that a spreadsheet would run as a formula gets an apostrophe in front."""
    text = " ".join(name.split())
    if text[:1] in ("=", "+", "-", "@"):
        text = "'" + text
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',"') else text
