"""The layers of a picture in a plane of two states: each function adds one meaning to the axes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D
from matplotlib.patches import PathPatch
from numpy.typing import NDArray

from roa.bound.lyapunov_function import LyapunovFunction
from roa.kernel.outcomes import Outcome
from roa.loop.model import Loop
from roa.report.evidence import Evidence
from roa.report.level_sets import LevelSet
from roa.report.plane import Plane, Region, Slice
from roa.report.style import (
    AREAS,
    COUNTEREXAMPLE,
    EQUILIBRIUM_MARK,
    FIELD,
    INK,
    LIMIT,
    PAPER,
    REST_MARK,
    RISING,
    START_MARKS,
    TRAJECTORY,
    WITNESS_MARK,
    bound_line,
    label_axes,
)
from roa.report.traces import Trace

Array = NDArray[np.float64]

FIELD_ARROWS = 17  # in each direction
RISING_CELLS = 400
SIGNAL_CELLS = 200


def frame(axes: Axes, plane: Plane) -> Axes:
    """Show the domain, with names and units on the axes."""
    (left, right), (bottom, top) = plane.box[[plane.i, plane.j]]
    axes.set_xlim(left, right)
    axes.set_ylim(bottom, top)
    label_axes(axes, plane.names, plane.axis_units)
    return axes


def draw_plane(
    axes: Axes, evidence: Evidence, found: Slice, level_sets: Sequence[LevelSet], traces: Sequence[Trace] = ()
) -> Axes:
    """Draw all layers of a slice: regions, field, rising V, trajectories, level sets, limits, equilibria, witness."""
    plane = found.plane
    draw_regions(axes, found.regions)
    if evidence.has_field:
        draw_field(axes, plane, evidence.loop)
    if evidence.rising and evidence.V is not None:
        draw_rising(axes, plane, evidence.V)
    draw_traces(axes, plane, traces)
    draw_level_sets(axes, plane, level_sets)
    draw_limits(axes, plane, evidence.loop)
    draw_rests(axes, plane, evidence.rests)
    draw_equilibrium(axes, plane)
    draw_witness(axes, plane, evidence.witness)
    return frame(axes, plane)


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
        draw_edges(axes, outcome, region)


def draw_edges(axes: Axes, outcome: Outcome, region: Region) -> None:
    """Draw the edge of a region alone."""
    edge = AREAS[outcome].edge
    axes.add_collection(
        LineCollection(region.edges, colors=edge.colour, linestyles=[edge.dash], linewidths=edge.width, zorder=2),
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
    """Mark the equilibrium, where the plane passes through it."""
    if plane.holds_equilibrium:
        x, y = plane.equilibrium[[plane.i, plane.j]]
        axes.add_line(equilibrium_mark([x], [y]))


def draw_rests(axes: Axes, plane: Plane, rests: Sequence[Array]) -> None:
    """Mark other stable equilibria, each (n,), that lie in the plane."""
    for rest in rests:
        if np.array_equal(rest[plane.others], plane.held[plane.others]):
            axes.add_line(rest_mark([rest[plane.i]], [rest[plane.j]]))


def draw_traces(axes: Axes, plane: Plane, traces: Sequence[Trace]) -> None:
    """Draw each trajectory from the mark at its start, with an arrow head on its way."""
    for trace in traces:
        points = trace.points[:, [plane.i, plane.j]]
        line = COUNTEREXAMPLE if trace.refutes else TRAJECTORY
        above = 7 if trace.refutes else 3
        axes.add_line(Line2D(*points.T, color=line.colour, linestyle=line.dash, linewidth=line.width, zorder=above))
        _arrow(axes, points, line.colour, above)
        axes.add_line(start_mark(trace.outcome, trace.refutes, points[:1].T, above + 0.5))


def draw_limits(axes: Axes, plane: Plane, loop: Loop) -> None:
    """Draw the limits on the two states that vary, and on signals where they are functions of the state."""
    for name, ends in loop.limits.items():
        for value in map(float, ends):
            if name == plane.names[0]:
                axes.axvline(value, color=LIMIT.colour, linestyle=LIMIT.dash, linewidth=LIMIT.width, zorder=2.5)
            elif name == plane.names[1]:
                axes.axhline(value, color=LIMIT.colour, linestyle=LIMIT.dash, linewidth=LIMIT.width, zorder=2.5)
            elif name not in loop.states and loop.hold is None:
                _draw_signal(axes, plane, loop, name, value)


def _draw_signal(axes: Axes, plane: Plane, loop: Loop, name: str, value: float) -> None:
    """Draw where a signal has the value."""
    points = plane.raster(SIGNAL_CELLS)
    with np.errstate(all="ignore"):
        signal = np.broadcast_to(loop.values_of(plane.lift(points))[name], len(points))
    if not np.nanmin(signal) < value < np.nanmax(signal):
        return
    x, y = np.unique(points[:, 0]), np.unique(points[:, 1])
    axes.contour(
        x, y, signal.reshape(len(y), len(x)), levels=[value], colors=LIMIT.colour, linestyles="dashdot",
        linewidths=LIMIT.width, zorder=2.5,
    )  # fmt: skip


def draw_field(axes: Axes, plane: Plane, loop: Loop) -> None:
    """Draw the direction of the dynamics in the plane as short strokes, all of one length on paper."""
    unit = (np.arange(FIELD_ARROWS) + 0.5) / FIELD_ARROWS
    across, up = np.meshgrid(unit, unit)
    points = plane.from_unit(np.column_stack([across.ravel(), up.ravel()]))
    with np.errstate(all="ignore"):
        slopes = loop.rhs(plane.lift(points))[:, [plane.i, plane.j]]
    sides = plane.box[[plane.i, plane.j]]
    slopes = slopes / (sides[:, 1] - sides[:, 0])
    length = np.linalg.norm(slopes, axis=1)
    moving = np.isfinite(length) & (length > 0)
    points, slopes = points[moving], slopes[moving] / length[moving, None]
    axes.quiver(
        *points.T, *slopes.T, color=FIELD, angles="uv", pivot="mid", scale=38, width=0.0016,
        headwidth=4, headlength=5, headaxislength=4.5, zorder=1.5,
    )  # fmt: skip


def draw_rising(axes: Axes, plane: Plane, V: LyapunovFunction) -> None:
    """Hatch the region of the plane in which V does not decrease, V̇ >= 0 (simulated no more than estimated)."""
    points = plane.raster(RISING_CELLS)
    with np.errstate(all="ignore"):
        decrease = V.decrease(plane.lift(points)).reshape(RISING_CELLS + 1, RISING_CELLS + 1)
    decrease = np.where(np.isfinite(decrease), decrease, np.inf)
    if not (decrease >= 0).any():
        return
    top = np.finfo(float).max
    x, y = (np.unique(points[:, k]) for k in (0, 1))
    axes.contourf(
        x, y, np.minimum(decrease, top), levels=[0.0, top], colors="none", hatches=[RISING.hatch], zorder=1.7
    ).set(edgecolor=RISING.edge.colour, linewidth=0.0)


def draw_witness(axes: Axes, plane: Plane, witness: Sequence[float] | None) -> None:
    """Mark the point at which V̇ >= 0, where the plane passes through it."""
    if witness is not None and np.array_equal(np.array(witness)[plane.others], plane.held[plane.others]):
        axes.add_line(witness_mark([witness[plane.i]], [witness[plane.j]]))


def equilibrium_mark(x: Sequence[float], y: Sequence[float], label: str = "") -> Line2D:
    """The mark of the equilibrium."""
    return _mark(x, y, label, EQUILIBRIUM_MARK, INK, PAPER, 7, 0.8)


def rest_mark(x: Sequence[float], y: Sequence[float], label: str = "") -> Line2D:
    """The mark of another stable equilibrium."""
    return _mark(x, y, label, REST_MARK, PAPER, INK, 7, 1.4)


def witness_mark(x: Sequence[float], y: Sequence[float], label: str = "") -> Line2D:
    """The mark of a point at which V̇ >= 0."""
    return _mark(x, y, label, WITNESS_MARK, PAPER, COUNTEREXAMPLE.colour, 7, 1.6)


def start_mark(outcome: Outcome, refutes: bool, at: Sequence[Sequence[float]] | Array, above: float) -> Line2D:
    """The mark at the start of a trajectory, which says how it ends."""
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


def _mark(
    x: Sequence[float], y: Sequence[float], label: str, marker: str, face: str, edge: str, size: float, width: float
) -> Line2D:
    return Line2D(
        x,
        y,
        marker=marker,
        markersize=size,
        markerfacecolor=face,
        markeredgecolor=edge,
        markeredgewidth=width,
        linestyle="none",
        zorder=8,
        label=label,
    )


def _arrow(axes: Axes, points: Array, colour: str, above: float) -> None:
    """Arrow head a third of the way along, measured in the plane scaled to the trajectory's own extent."""
    extent = np.ptp(points, axis=0)
    steps = np.linalg.norm(np.diff(points, axis=0) / np.where(extent > 0, extent, 1.0), axis=1)
    if not steps.any():
        return
    length = np.cumsum(steps)
    k = int(np.searchsorted(length, length[-1] / 3))
    axes.annotate(
        "",
        xy=tuple(points[k + 1]),
        xytext=tuple(points[k]),
        arrowprops={"arrowstyle": "-|>", "color": colour, "shrinkA": 0, "shrinkB": 0, "lw": 0.9},
        annotation_clip=True,
        zorder=above,
    )
