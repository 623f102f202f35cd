"""Reports on a terminal: tables that fit 100 columns, plain text when piped, certainty always written out."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterable, Sequence
from typing import IO, Any, TypeAlias

import numpy as np
from rich.console import Console, Group, RenderableType
from rich.table import Table
from rich.text import Text

#: Header and cells.
Column: TypeAlias = tuple[str, Sequence[str]]

WIDTH = 100
_EIGHTHS = " ▏▎▍▌▋▊▉█"
#: A number: what stands before the decimal point, and the rest with its unit.
_NUMERIC = re.compile(r"([−-]?\d+)(\D.*|)")
#: Stand-ins where the output's encoding has only ASCII.
_ASCII = str.maketrans(
    {
        "−": "-",
        "µ": "u",
        "°": "deg",
        "█": "#",
        "·": "-",
        "–": "-",
        "²": "^2",
        "³": "^3",
        **dict.fromkeys("▏▎▍▌▋▊▉", "#"),
    }
)


def screen(file: IO[str] | None = None) -> Console:
    """A console of at most 100 columns; without a terminal, plain text of exactly that width."""
    console = Console(file=file or sys.stdout, highlight=False, markup=False, emoji=False, soft_wrap=False)
    console.width = min(console.width, WIDTH) if console.is_terminal else WIDTH
    return console


def show(console: Console, *parts: Any) -> None:
    """Print texts and tables; names that came from files can neither style nor steer the terminal."""
    safe = [Text(clean(part, console)) if isinstance(part, str) else part for part in parts]
    if console.is_terminal:
        for part in safe:
            console.print(part)
    else:
        console.file.write(plain(console, safe))
        console.file.flush()


def plain(console: Console, parts: Iterable[Any]) -> str:
    """What would be printed, without trailing blanks."""
    with console.capture() as captured:
        for part in parts:
            console.print(part)
    return "".join(line.rstrip() + "\n" for line in captured.get().splitlines())


def clean(text: str, console: Console | None = None) -> str:
    """``text`` without control characters (an escape sequence in a channel name must not reach the terminal).

    >>> clean("tip\\x1b[31m x")
    'tip?[31m x'
    """
    out = "".join(c if c == "\n" or c.isprintable() else "?" for c in text)
    if console is not None and not (console.encoding or "").lower().startswith("utf"):
        out = out.translate(_ASCII)
    return out


# ---- cells -----------------------------------------------------------------------------------------------------------


def bar(value: float, width: int = 8) -> str:
    """A share from 0 to 1 as a bar of eighth blocks.

    >>> bar(1.0, 4), bar(0.5, 4), bar(0.03, 4), bar(float("nan"), 4)
    ('████', '██  ', '▏   ', '    ')
    """
    if not np.isfinite(value) or value <= 0:
        return " " * width
    eighths = max(1, round(min(value, 1.0) * 8 * width))
    full, rest = divmod(eighths, 8)
    return ("█" * full + (_EIGHTHS[rest] if rest else "")).ljust(width)


def on_point(cells: Sequence[str]) -> list[str]:
    """Numbers padded so that their decimal points stand in one column; words go to the right edge.

    >>> on_point(["1.76", "37.4", "120", "none"])
    ['  1.76', ' 37.4 ', '120   ', '  none']
    """
    split = [_NUMERIC.fullmatch(cell) for cell in cells]
    heads = [found[1] if found else "" for found in split]
    tails = [found[2] if found else "" for found in split]
    left, right = max(map(len, heads), default=0), max(map(len, tails), default=0)
    width = max([left + right, *map(len, cells)])
    return [
        (head.rjust(left) + tail.ljust(right)).rjust(width) if head else cell.rjust(width)
        for cell, head, tail in zip(cells, heads, tails, strict=True)
    ]


def table(
    console: Console,
    columns: Sequence[Column],
    title: str = "",
    *,
    left: Iterable[int] = (0,),
    fold: Iterable[int] = (),
) -> RenderableType:
    """A table from columns (header, cells) under a title.

    Numbers align on the decimal point; the columns ``left`` stand to the left; those of ``fold`` may wrap.
    """
    flush, wrapping = set(left), set(fold)
    out = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold", show_edge=False)
    padded = []
    for i, (header, cells) in enumerate(columns):
        head, body = clean(header, console), [clean(cell, console) for cell in cells]
        if i not in flush:
            # Padded here and set to the left: set to the right, rich would drop the blanks behind the numbers.
            body = on_point(body)
            width = max([len(head), *map(len, body)])
            head, body = head.rjust(width), [cell.rjust(width) for cell in body]
        padded.append(body)
        out.add_column(Text(head), no_wrap=i not in wrapping, overflow="fold")
    for row in zip(*padded, strict=True):
        out.add_row(*(Text(cell) for cell in row))
    return Group(Text(clean(title, console), style="bold"), out) if title else out


def labelled(console: Console, rows: Iterable[tuple[str, str]]) -> Table:
    """Labels and texts in two columns; rows without text are left out; long texts wrap under themselves."""
    out = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), show_header=False, show_edge=False)
    out.add_column(no_wrap=True, style="dim")
    out.add_column(overflow="fold")
    for label, text in rows:
        if text:
            out.add_row(Text(clean(label, console)), Text(clean(text, console)))
    return out


def bullets(console: Console, lines: Iterable[str], mark: str = "·") -> Table:
    """Lines behind a mark, wrapped under themselves."""
    out = Table(box=None, pad_edge=False, padding=(0, 1, 0, 0), show_header=False, show_edge=False)
    out.add_column(no_wrap=True)
    out.add_column(overflow="fold")
    for line in lines:
        out.add_row(Text(clean(mark, console)), Text(clean(line, console)))
    return out
