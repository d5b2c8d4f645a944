"""Compile a function of this package by numba and keep the machine code for the next process.

numba's cache looks at the one file that holds the function and not at the files that it calls: after a
change in one of those it would go on answering with the old code, silently. So each set of sources has a
cache folder of its own, named by their hash. A folder that cannot be written to costs time and no more.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Iterable
from pathlib import Path
from types import ModuleType
from typing import Any, TypeVar

import llvmlite
import numba
from numba import njit

from roa.kernel.generated import cache_folder

F = TypeVar("F", bound=Callable[..., Any])

# Small functions that other compiled functions call. Division by zero gives an infinity, as everywhere else
# in floating point, in place of an exception whose message would have to be compiled too.
inner: Callable[[F], F] = njit(error_model="numpy", no_cpython_wrapper=True, no_cfunc_wrapper=True)  # type: ignore[call-overload]


_folders: list[Path | None] = []


def is_kept() -> bool:
    """Whether the machine code of all functions that were given to `compiled` so far is in the cache."""
    return all(folder is not None and any(folder.rglob("*.nbi")) for folder in _folders)


def compiled(function: Callable[..., Any], uses: Iterable[ModuleType]) -> Any:
    """Compile a function that calls compiled functions of the modules `uses`, and cache the result.

    Parameters
    ----------
    function : at the top level of a module
    uses : every module of this package whose compiled functions or constants it reaches
    """
    files = [__file__, function.__code__.co_filename, *(str(module.__file__) for module in uses)]
    folder = _folder_of([Path(file).read_text(encoding="utf-8") for file in files])
    _folders.append(folder)
    if folder is None:
        return njit(nogil=True, error_model="numpy")(function)
    settings: Any = numba.config  # its attributes are set at run time, unknown to a type checker
    before = settings.CACHE_DIR
    settings.CACHE_DIR = str(folder)  # read once, while the cache of the function is being set up
    try:
        return njit(nogil=True, error_model="numpy", cache=True)(function)
    finally:
        settings.CACHE_DIR = before


def _folder_of(texts: list[str]) -> Path | None:
    """Return the folder for machine code that comes from the texts, None where it cannot be written."""
    key = "\0".join([numba.__version__, llvmlite.__version__, *texts])
    folder = cache_folder() / f"tape_{hashlib.sha256(key.encode()).hexdigest()[:32]}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError:
        return None
    return folder if os.access(folder, os.W_OK) else None
