"""Sampling designs, one a file: the word in the configuration is the file's name."""

from __future__ import annotations

import importlib
import pkgutil
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from roa.errors import UserError
from roa.loop.wording import hint, listed

Array = NDArray[np.float64]


class Design(Protocol):
    """A rule that gives every index its initial condition; the file `sobol.py` holds the class `Sobol`.

    A design is made from (box, seed, replicates, samples): the domain as float64 (n, 2), an integer, the number of
    independent replicates that is wanted and the number of starts that is asked for.

    Attributes
    ----------
    samples : number of starts that the design really has
    replicates : number of independent replicates; start i belongs to replicate i mod replicates
    extendable : whether a larger design keeps the starts of the smaller one
    interval : what an interval for a share can stand on, in words
    parts : what of it changes results, for the fingerprint: name -> JSON-able value
    """

    samples: int
    replicates: int
    extendable: bool
    interval: str
    parts: dict[str, Any]

    def __init__(self, box: Array, seed: int, replicates: int, samples: int) -> None: ...

    def points(self, first: int, count: int) -> Array:
        """Return starts first, …, first + count - 1, float64 (count, n), state units; a pure function."""
        ...


def available() -> list[str]:
    """Return the names of the designs, sorted."""
    return sorted(module.name for module in pkgutil.iter_modules(__path__))


def load(name: str) -> type[Design]:
    """Return the class of the design called `name`.

    Raises
    ------
    UserError
        There is no such design.
    """
    names = available()
    if name not in names:
        raise UserError(
            f'[sweep] design = "{name}": no such sampling design; available: {listed(names)}{hint(name, names)}'
        )
    design: type[Design] = getattr(importlib.import_module(f"{__name__}.{name}"), name.title().replace("_", ""))
    return design
