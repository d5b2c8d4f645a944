"""How much memory this process has and has had, bytes."""

from __future__ import annotations

import os
import resource
import sys
from pathlib import Path

PAGE = os.sysconf("SC_PAGE_SIZE")


def peak_memory() -> int:
    """Return the largest memory that this process has had."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak if sys.platform == "darwin" else 1024 * peak


def memory_now() -> int:
    """Return the memory that this process has; where the system does not say it, the largest so far."""
    try:
        return int(Path("/proc/self/statm").read_text().split()[1]) * PAGE
    except (OSError, ValueError, IndexError):
        return peak_memory()


def physical_memory() -> int:
    """Return the memory of this machine."""
    return PAGE * os.sysconf("SC_PHYS_PAGES")
