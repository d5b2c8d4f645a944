"""How the figures look: one colour and one line, mark or hatch for every meaning.

The hues differ for readers who confuse red and green, the luminances and dashes differ in a grey
print, and every area also has a hatch or an edge. Hex values are kept here instead of a style
sheet of the plotting library, whose palettes differ between its versions.
"""

from __future__ import annotations

from contextlib import AbstractContextManager
from dataclasses import dataclass
from textwrap import wrap
from typing import Literal

import matplotlib
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from roa.kernel.outcomes import Outcome

Dash = tuple[float, tuple[float, ...]] | Literal["solid"]

INK = "#1d2430"
QUIET = "#6a7280"
PAPER = "#ffffff"

# DejaVu comes with the plotting library, so figures are the same bytes on every machine.
SETTINGS = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "axes.titlesize": 10.0,
    "axes.labelsize": 9.5,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 8.5,
    "ytick.labelsize": 8.5,
    "figure.titlesize": 10.5,
    "figure.titleweight": "bold",
    "legend.fontsize": 8.5,
    "legend.title_fontsize": 8.5,
    "legend.frameon": False,
    "hatch.linewidth": 0.6,
    "svg.fonttype": "path",
    "svg.hashsalt": "roa",
}


@dataclass(frozen=True)
class Line:
    """Colour, dash pattern and width of a line."""

    colour: str
    dash: Dash
    width: float


@dataclass(frozen=True)
class Area:
    """Tone of a filled area, with the hatch and the edge that carry its meaning without colour."""

    tone: str
    edge: Line
    hatch: str = ""


BOUNDS = {
    "norm bound": Line("#9a3412", "solid", 2.0),
    "contact level": Line("#b7790f", (0, (5.5, 1.8)), 2.0),
    "unfalsified level": Line("#6d3fa0", (0, (1.2, 1.3)), 2.2),
    "best quadratic": Line("#14918a", (0, (8, 2.4)), 2.0),
    "best polynomial": Line("#153f7f", (0, (4, 1.2, 1.2, 1.2)), 2.2),
    "no-return set": Line("#292524", (0, (3.2, 1.2)), 1.8),
    "claim": Line("#000000", (0, (7, 1.6, 1.4, 1.6)), 2.6),
}
OTHER_BOUND = Line("#3f4a56", (0, (3, 1.2, 1, 1.2, 1, 1.2)), 1.8)

BASIN = Area("#cfe1f0", Line("#123a63", "solid", 1.3))
AREAS = {
    Outcome.CONVERGED: BASIN,
    Outcome.CONVERGED_OVER_LIMIT: Area("#e4eef6", Line("#123a63", (0, (2, 1)), 1.0), "\\\\\\\\"),
    Outcome.SETTLED_ELSEWHERE: Area("#f1dfc2", Line("#8a5a1c", "solid", 0.9), "////"),
    Outcome.UNRESOLVED: Area("#dcd6e4", Line("#5b4b6e", "solid", 0.9), "...."),
    Outcome.FAILED: Area("#c9c9cc", Line("#3f3f46", "solid", 0.9), "xxxx"),
    Outcome.ESCAPED: Area(PAPER, Line(QUIET, "solid", 0.8)),
}

TRAJECTORY = Line("#4b6a88", "solid", 0.9)
COUNTEREXAMPLE = Line("#b0004f", (0, (3, 1.4)), 1.5)
# Of two basins in one picture.
KEPT = Area("#cfe1f0", Line("#123a63", "solid", 1.1))
LOST = Area("#f3d9c9", Line("#9a3412", "solid", 1.3), "\\\\\\\\")
GAINED = Area("#d5e8dc", Line("#0f766e", "solid", 1.3), "////")

LIMIT = Line("#7f1d1d", (0, (9, 3, 2, 3)), 1.1)
FIELD = "#aab4c2"
RISING = Area(PAPER, Line("#b0004f", "solid", 0.4), "////")
EQUILIBRIUM_MARK = "P"
REST_MARK = "D"
WITNESS_MARK = "^"
# The mark at the start of a trajectory says how it ends.
START_MARKS = {
    Outcome.CONVERGED: "o",
    Outcome.CONVERGED_OVER_LIMIT: "s",
    Outcome.ESCAPED: "x",
    Outcome.SETTLED_ELSEWHERE: "D",
    Outcome.UNRESOLVED: "v",
    Outcome.FAILED: "*",
}


def bound_line(name: str) -> Line:
    """Line of the bound of that name; a name without a line of its own gets the common one."""
    return BOUNDS.get(name, OTHER_BOUND)


def settings() -> AbstractContextManager[None]:
    """Context in which figures are made and saved; nothing outside it is changed."""
    return matplotlib.rc_context(SETTINGS)  # type: ignore[arg-type]


def new_figure(width: float, height: float) -> Figure:
    """Empty figure of the given size in inches; call it inside `settings()`."""
    return Figure(figsize=(width, height), facecolor=PAPER, layout="constrained")


def title_lines(title: str, width: int) -> str:
    """The title of the configuration, broken into lines of so many letters."""
    return "\n".join(wrap(title, width))


def label_axes(axes: Axes, names: tuple[str, str], units: tuple[str, str]) -> None:
    """Write name and unit on both axes."""
    axes.set_xlabel(quantity(names[0], units[0]))
    axes.set_ylabel(quantity(names[1], units[1]))


def quantity(name: str, unit: str) -> str:
    """Name of an axis, with its unit unless it has none."""
    return f"{name} ({unit})" if unit and unit != "1" else name
