"""All plates of a comparison, in files."""

from __future__ import annotations

import io
from collections.abc import Iterator
from pathlib import Path

from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.figure import Figure

from modesieve.io.atomic import output_folder, replacing, write_bytes
from modesieve.io.figures.curves import count_plate, error_plate, pole_plate, response_plate, time_plate, worst_pair
from modesieve.io.figures.sieve import sieve_chart
from modesieve.io.figures.style import INK, QUIET, styled
from modesieve.io.verdict import band_end, figure_size, leading
from modesieve.reduce.comparison.records import Comparison
from modesieve.reduce.errors import ChoiceError
from modesieve.reduce.modal.records import Ranking

FORMATS = ("svg", "pdf", "png")


def save_figures(
    comparison: Comparison, ranking: Ranking, folder: Path, formats: tuple[str, ...] = ("svg",)
) -> list[Path]:
    """Write every plate into ``folder``, whole or not at all, in each of the formats; the files written."""
    unknown = [f for f in formats if f not in FORMATS]
    if unknown:
        raise ChoiceError("unknown figure format", expected=", ".join(FORMATS), got=", ".join(unknown))
    out, written = output_folder(folder), []
    with styled():
        for name, figure in plates(comparison, ranking):
            for ending in formats:
                written.append(out / f"{name}.{ending}")
                write_bytes(written[-1], _drawn(figure, ending))
    return written


def _drawn(figure: Figure, ending: str) -> bytes:
    buffer = io.BytesIO()
    # No date: the same run gives the same bytes.
    metadata = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}[ending]
    figure.savefig(buffer, format=ending, dpi=160, metadata=metadata)
    return buffer.getvalue()


def plates(comparison: Comparison, ranking: Ranking) -> Iterator[tuple[str, Figure]]:
    """Name and figure of every plate that this comparison can show, the sieve chart first."""
    text, small = caption_text(comparison), comparison.checks[0].small
    yield "sieve", sieve_chart(ranking, small.kept, comparison.band, text)
    if comparison.full.G.size:
        k, l = worst_pair(comparison)
        yield "response", response_plate(comparison, k, l, text)
        yield "error", error_plate(comparison, text)
        if comparison.sweep is not None:
            yield "error-over-count", count_plate(comparison.sweep, comparison, text)
        for time in (comparison.step, comparison.impulse):
            if time is not None:
                yield f"{time.kind}-response", time_plate(time, comparison, k, l, text)
    yield "poles", pole_plate(comparison.modes, small.kept, text)


def caption_text(comparison: Comparison) -> str:
    """Model, kept count, statics, band and error, for the line under every plate."""
    origin, check = comparison.modes.origin, comparison.checks[0]
    low, high = (band_end(w, origin.kind) for w in comparison.band)
    figure = leading(comparison, check)
    size = (
        f"error {figure_size(figure)} of {figure.relative_to}"
        if figure.relative_to != "absolute"
        else (f"error {figure_size(figure)}")
    )
    kept = f"{len(check.small.kept)} of {len(comparison.modes)} modes kept"
    head = f"{origin.title or 'model'}; {kept}; statics {check.small.statics}"
    return f"{head}; band {low} to {high}; {size}, {figure.certainty}"


# ---- the static report -----------------------------------------------------------------------------------------------


def save_report(path: Path, comparison: Comparison, ranking: Ranking, lines: list[str]) -> None:
    """The page's content as a PDF for readers whose mail strips scripts: words first, then every plate."""
    with styled(), replacing(path) as temporary, PdfPages(temporary, metadata={"CreationDate": None}) as pages:
        for chunk in _chunks(lines, 52):
            pages.savefig(_words(chunk))
        for _, figure in plates(comparison, ranking):
            pages.savefig(figure)


def _chunks(lines: list[str], size: int) -> Iterator[list[str]]:
    for start in range(0, len(lines), size):
        yield lines[start : start + size]


def _words(lines: list[str]) -> Figure:
    figure = Figure(figsize=(8.27, 11.69))
    for k, line in enumerate(lines):
        head = line.startswith("# ")
        text = (line[2:] if head else line).replace("$", r"\$")
        figure.text(0.09, 0.94 - 0.0165 * k, text, fontsize=12 if head else 8.2, color=INK if head or line else QUIET,
                    fontweight="bold" if head else "normal", va="top")  # fmt: skip
    return figure
