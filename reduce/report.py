"""Words and columns for the records' printed form: three significant figures, units after the number."""

from __future__ import annotations

import html
import math
import re
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

_PREFIXES = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"))


class ShowsAsTable:
    """A record whose printed report is a table in a notebook."""

    def _repr_html_(self) -> str:
        return html_table(repr(self))


def html_table(text: str) -> str:
    """The aligned lines of a report as an HTML table; every text is escaped.

    >>> html_table("Small\\n  kept  4 <b>")
    '<table><caption>Small</caption><tr><td>kept</td><td>4 &lt;b&gt;</td></tr></table>'
    """
    first, *lines = text.splitlines() or [""]
    rows = (re.split(r"\s{2,}", line.strip()) for line in lines if line.strip())
    body = "".join("<tr>" + "".join(f"<td>{html.escape(cell)}</td>" for cell in row) + "</tr>" for row in rows)
    return f"<table><caption>{html.escape(first)}</caption>{body}</table>"


def aligned(title: str, rows: Iterable[tuple[str, str]]) -> str:
    """A title and labelled lines, labels padded to one width; rows without text are left out.

    >>> print(aligned("Small model", [("kept", "4 modes"), ("statics", "none"), ("error", "")]))
    Small model
      kept     4 modes
      statics  none
    """
    shown = [(label, text) for label, text in rows if text]
    width = max((len(label) for label, _ in shown), default=0)
    return "\n".join([title, *(f"  {label:<{width}}  {text}" for label, text in shown)])


def columns(header: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A table: first column to the left, the others to the right.

    >>> print(columns(("model", "states"), [("a", "12"), ("bb", "4")]))
    model  states
    a          12
    bb          4
    """
    table = [list(header), *(list(row) for row in rows)]
    widths = [max(len(row[i]) for row in table) for i in range(len(header))]
    lines = []
    for row in table:
        cells = [row[0].ljust(widths[0]), *(cell.rjust(w) for cell, w in zip(row[1:], widths[1:], strict=True))]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


def number(value: float) -> str:
    """Three significant figures, true minus sign; "undefined" for nan, "infinite" for inf.

    >>> number(0.0123456), number(-12345.0), number(float("nan"))
    ('0.0123', '−1.23e+04', 'undefined')
    """
    if math.isnan(value):
        return "undefined"
    if math.isinf(value):
        return "infinite"
    return f"{value:.3g}".replace("-", "−", 1) if value < 0 else f"{value:.3g}"


def share(value: float) -> str:
    """A ratio in per cent.

    >>> share(0.0213), share(3e-7), share(float("nan"))
    ('2.13 %', '3e-05 %', 'undefined')
    """
    return f"{number(100 * value)} %" if math.isfinite(value) else number(value)


def hertz(omega: float) -> str:
    """An angular frequency (rad/s) in hertz with an engineering prefix.

    >>> hertz(2 * np.pi * 2400), hertz(0.0), hertz(2 * np.pi * 0.16)
    ('2.4 kHz', '0 Hz', '160 mHz')
    """
    value = omega / (2 * np.pi)
    return f"{prefixed(value)}Hz"


def seconds(value: float) -> str:
    """A time with an engineering prefix (`s` up to thousands are left as they are).

    >>> seconds(0.0032), seconds(5400.0)
    ('3.2 ms', '5400 s')
    """
    return f"{value:.4g} s" if 1 <= abs(value) < 1e6 else f"{prefixed(value)}s"


def prefixed(value: float) -> str:
    """A number with its engineering prefix, ready for a unit."""
    size = abs(value)
    if size == 0 or not math.isfinite(value):
        return f"{number(value)} "
    for factor, prefix in _PREFIXES:
        if size >= factor * 0.9995:
            return f"{number(value / factor)} {prefix}"
    return f"{number(value)} "


def span(band: tuple[float, float] | None) -> str:
    """A band (rad/s) in hertz; "" for None."""
    return "" if band is None else f"{hertz(band[0])} to {hertz(band[1])}"


def runs(numbers: Iterable[Any]) -> str:
    """Mode numbers with runs shortened.

    >>> runs([1, 2, 3, 7, 9, 10])
    '1-3, 7, 9, 10'
    """
    out: list[list[int]] = []
    for one in (int(i) for i in numbers):
        if out and one == out[-1][-1] + 1:
            out[-1].append(one)
        else:
            out.append([one])
    parts = [f"{run[0]}-{run[-1]}" if len(run) > 2 else ", ".join(map(str, run)) for run in out]
    return ", ".join(parts)
