"""The overlay: the simulated basin of two states under the level sets of the bounds."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, PathPatch
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome
from roa.report.direct_labels import Outline, label_outlines
from roa.report.level_sets import LevelSet
from roa.report.plane import Plane, Region
from roa.report.style import (
    AREAS,
    COUNTEREXAMPLE,
    EQUILIBRIUM_MARK,
    INK,
    PAPER,
    START_MARKS,
    TRAJECTORY,
    bound_line,
    label_axes,
    new_figure,
)
from roa.report.wording import level_text, outcome_word, percent

Array = NDArray[np.float64]

# A level set narrower than this part of the axes gets a second, magnified pair of axes.
SMALL = 0.03


@dataclass(frozen=True)
class Trace:
    """One simulated trajectory for a picture.

    Attributes
    ----------
    points : float64 (k, 2), states along the way, the initial condition first
    outcome : Outcome
    refutes : bool, whether it starts in the claimed set and refutes the claim
    """

    points: Array
    outcome: Outcome
    refutes: bool = False


def overlay(
    axes: Axes,
    plane: Plane,
    regions: Mapping[Outcome, Region],
    level_sets: Sequence[LevelSet],
    traces: Sequence[Trace] = (),
) -> Axes:
    """Draw basin, bounds, equilibrium and trajectories of a loop of two states into the axes."""
    draw_regions(axes, regions)
    draw_traces(axes, traces)
    draw_level_sets(axes, plane, level_sets)
    draw_equilibrium(axes, plane)
    (left, right), (bottom, top) = plane.box[[plane.i, plane.j]]
    axes.set_xlim(left, right)
    axes.set_ylim(bottom, top)
    label_axes(axes, plane.names, plane.axis_units)
    return axes


def overlay_figure(
    plane: Plane,
    regions: Mapping[Outcome, Region],
    level_sets: Sequence[LevelSet],
    traces: Sequence[Trace] = (),
    fraction: float | None = None,
) -> Figure:
    """Overlay with its legend; a bound too small to be seen well is shown a second time, magnified.

    `fraction` is the simulated share of the domain that the basin fills, for the legend.
    """
    window = _magnified(plane, level_sets)
    figure = new_figure(*((10.4, 6.4) if window is not None else (7.8, 7.0)))
    panels = figure.subplots(1, 2 if window is not None else 1, squeeze=False)[0]
    overlay(panels[0], plane, regions, level_sets, traces)
    if window is not None:
        overlay(panels[1], plane, regions, level_sets, [trace for trace in traces if trace.refutes])
        panels[0].set_title("The whole domain", loc="left")
        panels[1].set_title("Magnified: the frame on the left", loc="left")
        panels[1].set_xlim(*window[0])
        panels[1].set_ylim(*window[1])
        _frame(panels[0], window)
    for axes in panels:
        outlines = [Outline(one.name, ring) for one in level_sets for ring in one.outline(plane)[:1]]
        edges = [edge for region in regions.values() for edge in region.edges]
        label_outlines(axes, outlines, [*edges, *(trace.points for trace in traces)])
    simulated = [*region_entries(regions, fraction), *trace_entries(traces)]
    add_legends(figure, simulated, level_set_entries(level_sets))
    return figure


def add_legends(figure: Figure, simulated: list[Artist], level_sets: list[Artist]) -> None:
    """Legend of what was simulated at the lower left, of the level sets at the lower right."""
    look: dict[str, Any] = {"handlelength": 3.2, "alignment": "left"}
    rows = max(len(simulated), len(level_sets))
    figure.legend(handles=_padded(simulated, rows), title="simulated", loc="outside lower left", **look)
    if level_sets:
        title = "level sets {V ≤ c}, volume in % of the simulated basin"
        figure.legend(handles=_padded(level_sets, rows), title=title, loc="outside lower right", **look)


def draw_regions(axes: Axes, regions: Mapping[Outcome, Region]) -> None:
    """Fill the region of every outcome but *escaped*, which stays paper, and draw its edge."""
    for outcome, region in regions.items():
        if outcome is Outcome.ESCAPED:
            continue
        area = AREAS[outcome]
        axes.add_patch(
            PathPatch(
                region.fill, facecolor=area.tone, edgecolor=area.edge.colour, hatch=area.hatch, linewidth=0, zorder=1
            )
        )
        axes.add_collection(
            LineCollection(
                region.edges,
                colors=area.edge.colour,
                linestyles=[area.edge.dash],
                linewidths=area.edge.width,
                zorder=2,
            ),
            autolim=False,
        )


def draw_level_sets(axes: Axes, plane: Plane, level_sets: Sequence[LevelSet]) -> None:
    """Draw the outline of every level set, the first on top."""
    for rank, level_set in enumerate(level_sets):
        line = bound_line(level_set.name)
        for ring in level_set.outline(plane):
            axes.add_line(
                Line2D(*ring.T, color=line.colour, linestyle=line.dash, linewidth=line.width, zorder=6 - 0.1 * rank)
            )


def draw_equilibrium(axes: Axes, plane: Plane) -> None:
    """Mark the equilibrium."""
    x, y = plane.equilibrium[[plane.i, plane.j]]
    axes.add_line(_equilibrium([x], [y]))


def draw_traces(axes: Axes, traces: Sequence[Trace]) -> None:
    """Draw each trajectory from the mark at its start, with an arrow head on its way."""
    for trace in traces:
        line = COUNTEREXAMPLE if trace.refutes else TRAJECTORY
        above = 7 if trace.refutes else 3
        axes.add_line(
            Line2D(*trace.points.T, color=line.colour, linestyle=line.dash, linewidth=line.width, zorder=above)
        )
        _arrow(axes, trace, line.colour, above)
        axes.add_line(_start(trace.outcome, trace.refutes, trace.points[:1].T, above + 0.5))


def region_entries(regions: Mapping[Outcome, Region], fraction: float | None = None) -> list[Artist]:
    """Legend entries of the areas and of the equilibrium."""
    entries: list[Artist] = []
    for outcome in sorted(regions):
        area = AREAS[outcome]
        text = "basin: starts that converged" if outcome is Outcome.CONVERGED else outcome_word(outcome)
        if outcome is Outcome.CONVERGED and fraction is not None:
            text += f", {percent(fraction)} of the domain"
        edge, width = area.edge.colour, area.edge.width
        entries.append(Patch(facecolor=area.tone, edgecolor=edge, linewidth=width, hatch=area.hatch, label=text))
    return [*entries, _equilibrium([], [], label="equilibrium")]


def level_set_entries(level_sets: Sequence[LevelSet], unseen: Collection[str] = ()) -> list[Artist]:
    """Legend entries of the level sets: name, strength, level and share of the basin.

    `unseen` are the names of those that are too small for the picture.
    """
    entries: list[Artist] = []
    for one in level_sets:
        line = bound_line(one.name)
        text = f"{one.name} ({one.strength}): c = {level_text(one.level)}"
        if one.share is not None:
            text += f", {percent(one.share)}"
        if one.name in unseen:
            text += ", too small to see here"
        entries.append(Line2D([], [], color=line.colour, linestyle=line.dash, linewidth=line.width, label=text))
    return entries


def trace_entries(traces: Sequence[Trace]) -> list[Artist]:
    """Legend entries of the trajectories, one for each way of ending that occurs."""
    entries: list[Artist] = []
    for refutes in (True, False):
        for outcome in sorted({trace.outcome for trace in traces if trace.refutes is refutes}):
            line = COUNTEREXAMPLE if refutes else TRAJECTORY
            mark = _start(outcome, refutes, ([], []), 0)
            kind = "counterexample" if refutes else "trajectory from a start"
            mark.set(label=f"{kind} that {outcome_word(outcome)}", color=line.colour)
            mark.set(linestyle=line.dash, linewidth=line.width, markerfacecolor=PAPER)
            entries.append(mark)
    return entries


def _padded(entries: list[Artist], rows: int) -> list[Artist]:
    """Entries with blank ones below, so that the titles of two legends stand on one line."""
    return [*entries, *(Patch(visible=False, label=" ") for _ in range(rows - len(entries)))]


def _equilibrium(x: Sequence[float], y: Sequence[float], label: str = "") -> Line2D:
    return Line2D(
        x,
        y,
        marker=EQUILIBRIUM_MARK,
        markersize=7,
        markerfacecolor=INK,
        markeredgecolor=PAPER,
        markeredgewidth=0.8,
        linestyle="none",
        zorder=8,
        label=label,
    )


def _start(outcome: Outcome, refutes: bool, at: Sequence[Sequence[float]] | Array, above: float) -> Line2D:
    line = COUNTEREXAMPLE if refutes else TRAJECTORY
    return Line2D(
        at[0],
        at[1],
        marker=START_MARKS[outcome],
        markersize=8 if refutes else 5.5,
        markerfacecolor=PAPER,
        markeredgecolor=line.colour,
        markeredgewidth=2.0 if refutes else 1.2,
        linestyle="none",
        zorder=above,
    )


def _arrow(axes: Axes, trace: Trace, colour: str, above: float) -> None:
    """Arrow head a third of the way along, measured in the plane scaled to the trajectory's own extent."""
    extent = np.ptp(trace.points, axis=0)
    steps = np.linalg.norm(np.diff(trace.points, axis=0) / np.where(extent > 0, extent, 1.0), axis=1)
    if not steps.any():
        return
    length = np.cumsum(steps)
    k = int(np.searchsorted(length, length[-1] / 3))
    axes.annotate(
        "",
        xy=tuple(trace.points[k + 1]),
        xytext=tuple(trace.points[k]),
        arrowprops={"arrowstyle": "-|>", "color": colour, "shrinkA": 0, "shrinkB": 0, "lw": 0.9},
        annotation_clip=True,
        zorder=above,
    )


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
