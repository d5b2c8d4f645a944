"""Generated modules on disk: written once, compiled once, found again by every later process.

A module is a real file named by the hash of its text (numba caches only functions that have a
file), in a folder of the user's own. A folder that cannot be written costs compile time, no more.
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import sys
import tempfile
import threading
from pathlib import Path
from types import ModuleType

import llvmlite
import numba

_importing = threading.Lock()


def cache_folder() -> Path:
    """Return the folder of generated modules: `ROA_CACHE_DIR`, else the user's cache folder."""
    chosen = os.environ.get("ROA_CACHE_DIR")
    if chosen:
        return Path(chosen)
    base = os.environ.get("XDG_CACHE_HOME")
    try:
        return (Path(base) if base else Path.home() / ".cache") / "roa"
    except RuntimeError:  # a user without a name or a home, as in some containers
        return Path(tempfile.mkdtemp(prefix="roa-"))


def is_cached(text: str) -> bool:
    """Whether some process has compiled this text here before, so that loading it is quick."""
    folder = cache_folder() / "__pycache__"
    return any(folder.glob(f"{_name(text)}.*.nbi"))


def load(text: str) -> ModuleType:
    """Import the text as a module; numba's functions in it are compiled or read from the cache.

    Parameters
    ----------
    text : str, a whole module
    """
    name = _name(text)
    with _importing:
        if name in sys.modules:
            return sys.modules[name]
        path = _written(name, text)
        specification = importlib.util.spec_from_file_location(name, path)
        if specification is None or specification.loader is None:
            raise ImportError(f"cannot import the generated module {path}")
        module = importlib.util.module_from_spec(specification)
        # Registered before it is complete, because numba looks the module up while it compiles.
        sys.modules[name] = module
        try:
            specification.loader.exec_module(module)
        except BaseException:
            del sys.modules[name]
            raise
        return module


def _name(text: str) -> str:
    # numba keys its cache by file, content and processor, but not by its own or LLVM's version.
    versions = f"{numba.__version__} {llvmlite.__version__}"
    return "roa_loop_" + hashlib.sha256(f"{versions}\n{text}".encode()).hexdigest()[:32]


def _written(name: str, text: str) -> Path:
    """Write the module aside and rename it, so that a file that exists is complete."""
    folder = cache_folder()
    try:
        folder.mkdir(parents=True, exist_ok=True)
        path = folder / f"{name}.py"
        if not path.exists():
            handle, aside = tempfile.mkstemp(dir=folder, prefix=f".{name}")
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(text)
            os.replace(aside, path)
    except OSError:
        path = Path(tempfile.mkdtemp(prefix="roa-")) / f"{name}.py"
        path.write_text(text, encoding="utf-8")
    return path
