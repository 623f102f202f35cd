"""How much memory is free, so that running out of it is foreseen and not suffered."""

from __future__ import annotations

import os
from pathlib import Path


def free_bytes() -> int:
    """Memory that can be had without swapping, in bytes: the kernel's own estimate, else the free pages."""
    # Free pages alone leave out the page cache, which fills any machine that has read files and is given up on demand.
    try:
        for line in Path("/proc/meminfo").read_text(encoding="ascii").splitlines():
            if line.startswith("MemAvailable:"):
                return int(line.split()[1]) * 1024
    except OSError:
        pass
    return _free_pages()


def _free_pages() -> int:
    try:
        return int(os.sysconf("SC_AVPHYS_PAGES")) * int(os.sysconf("SC_PAGE_SIZE"))
    except (AttributeError, ValueError, OSError):
        return 2**62  # a system that does not say: nothing can be foreseen there


def in_words(count: float) -> str:
    """A number of bytes for messages.

    >>> in_words(3 * 2**30)
    '3.0 GiB'
    """
    for unit in ("bytes", "KiB", "MiB"):
        if count < 1024:
            return f"{count:.0f} {unit}" if unit == "bytes" else f"{count:.1f} {unit}"
        count /= 1024
    return f"{count:.1f} GiB"
