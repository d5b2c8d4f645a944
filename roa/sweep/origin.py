"""Where results come from: versions, the state of the code, the processor. None of it is imported to say so."""

from __future__ import annotations

import hashlib
import platform
import subprocess
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import Any

from roa import __version__

PACKAGE = Path(__file__).parents[1]
# Packages whose arithmetic or file format shows in what is stored.
PACKAGES = ("numpy", "scipy", "numba", "h5py", "sympy")


def versions() -> dict[str, str]:
    """Return the versions of this program, of Python, and of the packages that show in what is stored."""
    return {
        "roa": __version__,
        "python": platform.python_version(),
        **{package: version(package) for package in PACKAGES},
    }


@cache
def code_state() -> dict[str, Any]:
    """Return a digest of this program's source, and of a clone the commit and whether it was changed."""
    digest = hashlib.sha256()
    for path in sorted([*PACKAGE.rglob("*.py"), *PACKAGE.rglob("*.jinja")]):
        digest.update(f"{path.relative_to(PACKAGE)}\0".encode())
        digest.update(path.read_bytes())
    return {"digest": digest.hexdigest(), **_commit()}


def _commit() -> dict[str, Any]:
    """Return commit and changes of the clone that the program runs from; nothing where it is none."""
    if not (PACKAGE.parent / ".git").exists():
        return {}
    try:
        commit = _git("rev-parse", "HEAD")
        return {"commit": commit, "changed": bool(_git("status", "--porcelain", "--", "roa"))}
    except (OSError, subprocess.SubprocessError):
        return {}


def _git(*words: str) -> str:
    done = subprocess.run(
        ["git", "-C", str(PACKAGE.parent), *words], capture_output=True, text=True, timeout=10, check=True
    )
    return done.stdout.strip()


@cache
def processor() -> str:
    """Name of the processor: results agree bit for bit on one kind of processor."""
    cpuinfo = Path("/proc/cpuinfo")  # the only place with the full name; platform.processor() is often empty there
    if cpuinfo.is_file():
        for line in cpuinfo.read_text(encoding="utf-8", errors="replace").splitlines():
            if line.lower().startswith("model name"):
                return line.partition(":")[2].strip()
    return platform.processor() or platform.machine()
