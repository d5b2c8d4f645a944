"""Converged share against the level of V: the picture that works for any number of states."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from roa.bound.lyapunov_function import Quadratic
from roa.report import legends
from roa.report.evidence import Evidence
from roa.report.level_sets import LevelSet
from roa.report.style import BASIN, bound_line, new_figure, title_lines
from roa.report.wording import confidence_text

Array = NDArray[np.float64]

PLACE = 30
CAPTION = (
    "Share of the stored starts that converged, in shells of V from the equilibrium outward, with the level of each "
    "bound. Up to the level of a true bound it is 1."
)


def applies(evidence: Evidence) -> bool:
    """Whether there are shells of V that hold samples."""
    return any(shell["high"] > 0 for shell in evidence.verdict["levels"])


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


def figure(evidence: Evidence) -> Figure:
    """Converged share against V, with its legend."""
    drawn = new_figure(7.8, 5.0)
    drawn.suptitle(title_lines(evidence.title, 84), x=0.01, ha="left")
    level_sets = [one for one in evidence.level_sets if _same_V(one, evidence)]
    share_by_level(drawn.subplots(), evidence.verdict["levels"], level_sets)
    confidence = confidence_text(evidence.verdict["confidence"])
    shells: list[Artist] = [
        Line2D([], [], color=BASIN.edge.colour, linewidth=1.6, label="converged share in a shell of V"),
        Patch(facecolor=BASIN.tone, label=f"its {confidence} interval"),
    ]
    legends.add_legends(drawn, shells, legends.level_set_entries(level_sets))
    return drawn


def _same_V(one: LevelSet, evidence: Evidence) -> bool:
    """Whether the level is one of the V of the shells, and not of another shape."""
    V = evidence.V
    if not isinstance(V, Quadratic):
        return one.P is None and not one.is_outer
    return one.P is not None and np.array_equal(one.P, V.P)


def _steps(levels: Sequence[Mapping[str, Any]], value: Callable[[Mapping[str, Any]], float]) -> Array:
    """A value of every shell, at both of its ends; NaN where the shell holds no start."""
    return np.repeat([value(row) if row["samples"] else np.nan for row in levels], 2)


def _left_end(edges: Array, level_sets: Sequence[LevelSet]) -> float:
    """Left end of the logarithmic axis: below the lowest level, and above V = 0."""
    marked = [one.level for one in level_sets if one.level > 0]
    return min([float(edges[edges > 0].min()), *(level / 3 for level in marked)])
