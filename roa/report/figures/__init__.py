"""The figures: one file a figure, whose name is its name on the command line and in the run folder.

Each file gives `PLACE` (a number: the order in the report), `CAPTION`, `applies(evidence)` (whether the run has
what the figure shows) and `figure(evidence)`; beside it a function that draws into axes which others
have made and returns them, for papers and slides.
"""

from __future__ import annotations

from importlib import import_module
from pkgutil import iter_modules
from typing import Protocol, cast

from matplotlib.figure import Figure

from roa.errors import UserError
from roa.loop.wording import hint
from roa.report.evidence import Evidence


class FigureFile(Protocol):
    """What a file of this folder gives."""

    PLACE: int
    CAPTION: str

    def applies(self, evidence: Evidence) -> bool:
        """Whether the run has what the figure shows."""

    def figure(self, evidence: Evidence) -> Figure:
        """Draw the figure."""


def names() -> list[str]:
    """Names of all figures, in the order of the report."""
    return sorted((module.name for module in iter_modules(__path__)), key=lambda name: load(name).PLACE)


def load(name: str) -> FigureFile:
    """Return the figure of that name.

    Raises
    ------
    UserError
        There is none.
    """
    known = [module.name for module in iter_modules(__path__)]
    if name not in known:
        raise UserError(f"there is no figure {name!r}; the figures are {', '.join(sorted(known))}{hint(name, known)}")
    return cast(FigureFile, import_module(f"{__name__}.{name}"))
