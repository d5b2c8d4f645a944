"""A number over a plane of two states as shades, with its scale: what the maps have in common."""

from __future__ import annotations

from math import ceil

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome
from roa.report import layers
from roa.report.evidence import Evidence
from roa.report.plane import Slice
from roa.report.style import PAPER, QUIET, new_figure, title_lines

Array = NDArray[np.float64]

# Grows evenly in lightness, for grey prints and for readers who confuse red and green.
SHADES = "cividis"
PER_ROW = 3
# Part of a plane, below which there is nothing to see in it.
SPECK = 1e-3


def map_figure(evidence: Evidence, panels: int) -> tuple[Figure, list[Axes]]:
    """A titled figure with so many panels for maps of the same plane."""
    across = min(panels, PER_ROW if panels > 4 else 2)
    down = ceil(panels / across)
    size = (7.8, 6.4) if panels == 1 else (5.2 * across, 4.4 * down + 0.6)
    drawn = new_figure(*size)
    title = title_lines(evidence.title, int(11 * size[0]))
    plane = evidence.plane(*evidence.first_pair)
    if plane.others:
        title += f"\n{held_short(evidence)}"
    drawn.suptitle(title, x=0.01, ha="left", fontweight="normal" if plane.others else "bold")
    grid = list(drawn.subplots(down, across, squeeze=False).flat)
    for unused in grid[panels:]:
        unused.set_visible(False)
    return drawn, grid[:panels]


def shows_basin(evidence: Evidence) -> bool:
    """Whether so much of the plane converges that a map of it can be read."""
    return bool(evidence.slice(*evidence.first_pair).converged.mean() > SPECK)


def held_short(evidence: Evidence) -> str:
    """Say of a figure of one plane that it is a slice, and where the other states are held."""
    where = "at the equilibrium" if evidence.at is None else "at the values of --at"
    i, j = evidence.first_pair
    names = evidence.loop.states
    return f"A slice, not a projection: {names[i]} and {names[j]} vary, the other states are {where}."


def draw_map(axes: Axes, found: Slice, values: Array, norm: Normalize, label: str) -> None:
    """Shade `values` (cells + 1, cells + 1) over the plane, NaN hatched, with its scale beside the axes."""
    x, y = found.axes_values
    corner = (x[0], y[0])
    axes.add_patch(
        Rectangle(
            corner, x[-1] - x[0], y[-1] - y[0], facecolor=PAPER, edgecolor=QUIET, hatch="....", linewidth=0, zorder=0
        )
    )
    shades = axes.pcolormesh(x, y, values, cmap=SHADES, norm=norm, shading="nearest", rasterized=True, zorder=1)
    figure = axes.get_figure()
    assert figure is not None
    figure.colorbar(shades, ax=axes, label=label, pad=0.015)
    for outcome in (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT):
        if outcome in found.regions:
            layers.draw_edges(axes, outcome, found.regions[outcome])
