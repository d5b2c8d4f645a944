"""The overlay: the simulated basin of two states under the level sets of the bounds."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from roa.report import layers, legends
from roa.report.direct_labels import Outline, label_outlines
from roa.report.evidence import Evidence
from roa.report.level_sets import LevelSet
from roa.report.plane import Plane
from roa.report.style import INK, new_figure, title_lines
from roa.report.traces import Trace

Array = NDArray[np.float64]

PLACE = 10
CAPTION = (
    "The simulated basin under the level sets of the bounds. Every start of a raster was simulated, and its edge "
    "refined by further simulations between neighbours that ended differently."
)

# A level set narrower than this part of the axes gets a second, magnified pair of axes.
SMALL = 0.03


def applies(evidence: Evidence) -> bool:
    """Whether the loop has two states."""
    return evidence.loop.n == 2


def overlay(axes: Axes, evidence: Evidence, traces: Sequence[Trace] | None = None) -> Axes:
    """Draw basin, bounds, equilibria, limits and trajectories of a loop of two states into the axes.

    Parameters
    ----------
    axes : of any figure
    evidence : of the run
    traces : the trajectories; a few of the stored starts where None
    """
    found = evidence.slice(*evidence.first_pair)
    return layers.draw_plane(axes, evidence, found, evidence.level_sets, evidence.traces if traces is None else traces)


def figure(evidence: Evidence) -> Figure:
    """Overlay with its legend; a bound too small to be seen well is shown a second time, magnified."""
    i, j = evidence.first_pair
    plane, level_sets, traces = evidence.plane(i, j), evidence.level_sets, evidence.traces
    window = _magnified(plane, level_sets)
    drawn = new_figure(*((10.4, 6.6) if window is not None else (7.8, 7.2)))
    drawn.suptitle(title_lines(evidence.title, 110 if window is not None else 84), x=0.01, ha="left")
    panels = drawn.subplots(1, 2 if window is not None else 1, squeeze=False)[0]
    overlay(panels[0], evidence)
    seen = [evidence]
    if window is not None:
        seen.append(evidence.magnified(window))
        overlay(panels[1], seen[1], [trace for trace in traces if trace.refutes])
        panels[0].set_title("The whole domain", loc="left")
        panels[1].set_title("Magnified: the frame on the left", loc="left")
        panels[1].locator_params(nbins=4)
        _frame(panels[0], window)
    for axes, one in zip(panels, seen, strict=True):
        outlines = [Outline(two.name, ring) for two in level_sets for ring in two.outline(one.plane(i, j))[:1]]
        edges = [edge for region in one.slice(i, j).regions.values() for edge in region.edges]
        label_outlines(axes, outlines, [*edges, *(trace.points[:, [i, j]] for trace in traces)])
    simulated = [
        *legends.region_entries(evidence.slice(i, j).regions, evidence.verdict["basin"]),
        *legends.trace_entries(traces),
        *legends.other_entries(evidence),
    ]
    legends.add_legends(drawn, simulated, legends.level_set_entries(level_sets))
    return drawn


def _magnified(plane: Plane, level_sets: Sequence[LevelSet]) -> Array | None:
    """Window (2, 2) about the smallest set with its surroundings, or None where it is large enough to be seen."""
    extents = [np.ptp(ring, axis=0) for one in level_sets for ring in one.outline(plane)[:1]]
    if not extents:
        return None
    box = plane.box[[plane.i, plane.j]]
    smallest = min(extents, key=lambda extent: float(extent.max()))
    if (smallest / (box[:, 1] - box[:, 0])).max() > SMALL:
        return None
    middle = plane.equilibrium[[plane.i, plane.j]]
    return np.column_stack([middle - 2 * smallest, middle + 2 * smallest])


def _frame(axes: Axes, window: Array) -> None:
    (left, right), (bottom, top) = window
    axes.add_line(
        Line2D([left, right, right, left, left], [bottom, bottom, top, top, bottom], color=INK, linewidth=0.6, zorder=9)
    )
