"""Progress of long stages: a bar on a terminal, plain lines when piped, nothing for what takes under two seconds."""

from __future__ import annotations

import sys
import threading
import time
from types import TracebackType
from typing import Any

from modesieve.reduce.progress import Progress

#: Seconds before a stage is worth a word, and between two lines when piped.
PATIENCE, PAUSE = 2.0, 15.0


class ProgressDisplay:
    """A listener for stages, to be used as a context; everything goes to standard error.

    A stage shows itself after two seconds, even if it sends nothing meanwhile (one long factorisation).
    """

    def __init__(self, stream: Any = None, patience: float = PATIENCE) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._patience = patience
        self._lock = threading.Lock()
        self._latest: Progress | None = None
        self._began = self._said = 0.0
        self._stop = threading.Event()
        self._thread: threading.Thread | None = None
        self._bars: Any = None
        self._task: Any = None

    def __enter__(self) -> ProgressDisplay:
        self._thread = threading.Thread(target=self._watch, daemon=True)
        self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stop.set()
        if self._thread is not None:
            self._thread.join()
        with self._lock:
            self._close()

    def __call__(self, report: Progress) -> None:
        """Take one report; cheap, so that the work is not held up."""
        with self._lock:
            if self._latest is None or self._latest.stage != report.stage:
                self._began, self._said = time.monotonic(), 0.0
            self._latest = report

    def _watch(self) -> None:
        while not self._stop.wait(0.1):
            with self._lock:
                if self._latest is not None and time.monotonic() - self._began >= self._patience:
                    self._show(self._latest)

    def _show(self, report: Progress) -> None:
        if self._stream.isatty():
            self._draw(report)
        elif time.monotonic() - self._said >= PAUSE or not self._said:
            self._said = time.monotonic()
            print(line(report), file=self._stream, flush=True)

    def _draw(self, report: Progress) -> None:
        if self._bars is None:
            self._open()
        total = report.total or None
        text = f"{report.stage}: {report.message}" if report.message else report.stage
        self._bars.update(self._task, description=text, completed=report.done, total=total)

    def _open(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeElapsedColumn, TimeRemainingColumn
        from rich.progress import Progress as Bars

        console = Console(file=self._stream, markup=False, highlight=False)
        self._bars = Bars(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=24),
            MofNCompleteColumn(),
            TimeElapsedColumn(),
            TimeRemainingColumn(),
            console=console,
            transient=True,
        )
        self._bars.start()
        self._task = self._bars.add_task("", total=None)

    def _close(self) -> None:
        if self._bars is not None:
            self._bars.stop()
            self._bars = None


def line(report: Progress) -> str:
    """One report as a plain line.

    >>> line(Progress(stage="full response", done=120, total=311)), line(Progress(stage="modes", message="counting"))
    ('full response: 120 of 311', 'modes: counting')
    """
    parts = [f"{report.done} of {report.total}" if report.total else (str(report.done) if report.done else "")]
    parts = [part for part in (*parts, report.message) if part]
    return f"{report.stage}: {', '.join(parts)}" if parts else report.stage
