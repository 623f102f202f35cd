"""How long work tells where it is, without knowing who listens."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias


@dataclass(frozen=True, kw_only=True)
class Progress:
    """One report of a stage: ``done`` of ``total`` (0: not known), and what is being done."""

    stage: str
    done: int = 0
    total: int = 0
    message: str = ""


Listener: TypeAlias = Callable[[Progress], None] | None


def tell(listener: Listener, stage: str, done: int = 0, total: int = 0, message: str = "") -> None:
    """Send one report to ``listener`` if there is one."""
    if listener is not None:
        listener(Progress(stage=stage, done=done, total=total, message=message))
