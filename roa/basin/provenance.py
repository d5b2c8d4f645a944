"""Where a verdict comes from: versions, processor, seed, fingerprint, command and time."""

from __future__ import annotations

import platform
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

from roa import __version__

# Packages whose arithmetic or file format shows in a verdict.
PACKAGES = ("numpy", "scipy", "numba", "h5py", "sympy")


def provenance(
    command: str, seed: int, samples: int | None = None, jobs: int | None = None, fingerprint: str | None = None
) -> dict[str, Any]:
    """Describe this machine and this call as plain values.

    Parameters
    ----------
    command : str, the command line as it was given
    seed : int, of the design and of every search
    samples, jobs, fingerprint : of the sweep, None where there was none
    """
    return {
        "command": command,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "seed": seed,
        "samples": samples,
        "jobs": jobs,
        "fingerprint": fingerprint,
        "processor": processor(),
        "platform": platform.platform(),
        "versions": {
            "roa": __version__,
            "python": platform.python_version(),
            **{package: version(package) for package in PACKAGES},
        },
    }


def processor() -> str:
    """Name of the processor: results agree bit for bit on one kind of processor."""
    cpuinfo = Path("/proc/cpuinfo")  # the only place with the full name; platform.processor() is often empty there
    if cpuinfo.is_file():
        for line in cpuinfo.read_text(encoding="utf-8", errors="replace").splitlines():
            if line.lower().startswith("model name"):
                return line.partition(":")[2].strip()
    return platform.processor() or platform.machine()
