"""Converged share against the level of V: the picture that works for any number of states."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from roa.report.level_sets import LevelSet
from roa.report.overlay import add_legends, level_set_entries
from roa.report.style import BASIN, bound_line, new_figure
from roa.report.wording import confidence_text

Array = NDArray[np.float64]


def share_by_level(axes: Axes, levels: Sequence[Mapping[str, Any]], level_sets: Sequence[LevelSet]) -> Axes:
    """Draw the share of converged starts in each shell of V, with its interval, and mark every level.

    `levels` is the table of that name in the verdict: rows with `low`, `high`, `samples`,
    `share` and `interval`. Shells without a start are gaps.
    """
    edges = np.array([[row["low"], row["high"]] for row in levels], dtype=float)
    left = _left_end(edges, level_sets)
    v = np.maximum(edges, left).ravel()
    low = _steps(levels, lambda row: row["interval"][0])
    high = _steps(levels, lambda row: row["interval"][1])
    axes.fill_between(v, low, high, facecolor=BASIN.tone, linewidth=0)
    axes.plot(v, _steps(levels, lambda row: row["share"]), color=BASIN.edge.colour, linewidth=1.6)
    for one in level_sets:
        if one.level > 0:
            line = bound_line(one.name)
            axes.axvline(one.level, color=line.colour, linestyle=line.dash, linewidth=line.width)
    axes.set_xscale("log")
    axes.set_xlim(left, edges[:, 1].max())
    axes.set_ylim(-0.03, 1.05)
    axes.set_xlabel("V at the start")
    axes.set_ylabel("converged share of the starts")
    return axes


def share_by_level_figure(
    levels: Sequence[Mapping[str, Any]], level_sets: Sequence[LevelSet], confidence: float
) -> Figure:
    """Converged share against V, with its legend."""
    figure = new_figure(7.8, 4.8)
    share_by_level(figure.subplots(), levels, level_sets)
    shells = [
        Line2D([], [], color=BASIN.edge.colour, linewidth=1.6, label="converged share in a shell of V"),
        Patch(facecolor=BASIN.tone, label=f"its {confidence_text(confidence)} interval"),
    ]
    add_legends(figure, shells, level_set_entries(level_sets))
    return figure


def _steps(levels: Sequence[Mapping[str, Any]], value: Callable[[Mapping[str, Any]], float]) -> Array:
    """A value of every shell, at both of its ends; NaN where the shell holds no start."""
    return np.repeat([value(row) if row["samples"] else np.nan for row in levels], 2)


def _left_end(edges: Array, level_sets: Sequence[LevelSet]) -> float:
    """Left end of the logarithmic axis: below the lowest level, and above V = 0."""
    marked = [one.level for one in level_sets if one.level > 0]
    return min([float(edges[edges > 0].min()), *(level / 3 for level in marked)])
