"""Integration methods, one a file: the word in the configuration is the file's name."""

from __future__ import annotations

import importlib
import pkgutil

from roa.errors import UserError
from roa.kernel.tableau import Method
from roa.loop.wording import hint

# What `method = "auto"` stands for: at the usual tolerances, and where the loop has clips, the quickest.
AUTO = "tsitouras5"


def available() -> list[str]:
    """Return the names of the methods, sorted."""
    return sorted(module.name for module in pkgutil.iter_modules(__path__))


def load(name: str) -> Method:
    """Return the tableau called `name`; "auto" picks one.

    Raises
    ------
    UserError
        There is no such method.
    """
    chosen = AUTO if name == "auto" else name
    if chosen not in available():
        raise UserError(
            f'[sweep] method = "{name}": no such integration method; available: auto, {", ".join(available())}'
            + hint(chosen, available())
        )
    tableau: Method = importlib.import_module(f"{__name__}.{chosen}").TABLEAU
    return tableau
