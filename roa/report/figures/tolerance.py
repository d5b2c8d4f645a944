"""Starts of a plane whose outcome hangs on the integrator's tolerance."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from roa.report import layers
from roa.report.evidence import Evidence
from roa.report.maps import held_short
from roa.report.style import COUNTEREXAMPLE, PAPER, new_figure, title_lines

PLACE = 45
CAPTION = (
    "Starts of the plane's raster whose outcome changes when both tolerances are made ten times tighter (simulated). "
    "Where there are many, the edge that is drawn is not to be trusted to a cell of the raster."
)

# Beyond so many marks they are drawn as one picture, so that the file stays small.
MANY = 2000


def applies(evidence: Evidence) -> bool:
    """Whether there is a plane to show in which a start changes its outcome."""
    return evidence.loop.n >= 2 and bool(evidence.sensitive.any())


def tolerance(axes: Axes, evidence: Evidence) -> Axes:
    """Draw the regions of the plane and mark the starts of its raster whose outcome is sensitive to tolerance."""
    found = evidence.slice(*evidence.first_pair)
    points = found.plane.raster(found.cells)
    changed = evidence.sensitive
    layers.draw_regions(axes, found.regions)
    axes.plot(
        *points[changed].T, linestyle="none", marker="o", markersize=3.5, markerfacecolor=PAPER,
        markeredgecolor=COUNTEREXAMPLE.colour, markeredgewidth=1.0, rasterized=bool(changed.sum() > MANY), zorder=5,
    )  # fmt: skip
    count = np.count_nonzero(changed)
    axes.set_title(f"{count:,} of {len(points):,} starts of the raster change their outcome", loc="left")
    layers.draw_equilibrium(axes, found.plane)
    return layers.frame(axes, found.plane)


def figure(evidence: Evidence) -> Figure:
    """Sensitive starts over the plane."""
    drawn = new_figure(7.4, 6.6)
    title = title_lines(evidence.title, 80)
    if evidence.loop.n > 2:
        title += f"\n{held_short(evidence)}"
    drawn.suptitle(title, x=0.01, ha="left")
    tolerance(drawn.subplots(), evidence)
    return drawn
