"""The slack ladder: what each bound covers of the basin, from the hand calculation to what was simulated."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from roa.report.evidence import Evidence
from roa.report.level_sets import OUTER
from roa.report.style import BASIN, INK, PAPER, QUIET, bound_line, new_figure, title_lines
from roa.report.wording import percent

PLACE = 20
CAPTION = (
    "The slack ladder: each bound's volume as a share of the simulated basin, with its interval. What lies between two "
    "rungs is the slack that the step from one to the next removes."
)

Rung = Mapping[str, Any]

# Left end of the logarithmic axis where a rung would be lost on a linear one.
LEAST = 1e-6
# Rungs below this share are read off a logarithmic axis.
LINEAR_FROM = 0.02


def applies(evidence: Evidence) -> bool:
    """Whether any bound was measured against the basin."""
    return bool(_rungs(evidence.verdict))


def ladder(axes: Axes, verdict: Mapping[str, Any]) -> Axes:
    """Draw the rungs of the verdict into the axes, the basin itself among them."""
    rungs = _rungs(verdict)
    shares = [rung["share"] for rung in rungs]
    logarithmic = min([share for share in shares if share > 0], default=1.0) < LINEAR_FROM
    left = max(min(share for share in shares if share > 0) / 3, LEAST) if logarithmic else 0.0
    for row, rung in enumerate(rungs):
        line, share = bound_line(rung["name"]), max(rung["share"], left)
        is_basin = rung["name"] == "simulated basin"
        colour = BASIN.edge.colour if is_basin else line.colour
        face = BASIN.tone if is_basin else colour
        axes.barh(row, share - left, 0.56, left=left, color=face, edgecolor=colour, alpha=1 if is_basin else 0.3)
        axes.plot(
            [share, share], [row - 0.28, row + 0.28], color=colour, linestyle="solid" if is_basin else line.dash,
            linewidth=2.2,
        )  # fmt: skip
        if rung["interval"] and None not in rung["interval"]:
            low, high = rung["interval"]
            axes.plot([max(low, left), high], [row, row], color=INK, linewidth=1.2, marker="|", markersize=7)
        axes.annotate(
            f"{percent(rung['share'])}  {rung['strength']}", (share, row), (8, 0), textcoords="offset points",
            va="center", bbox={"facecolor": PAPER, "edgecolor": "none", "pad": 1.0},
        )  # fmt: skip
    axes.axvline(1.0, color=QUIET, linewidth=0.8, zorder=0)
    axes.set_yticks(range(len(rungs)), [rung["name"] for rung in rungs])
    axes.invert_yaxis()
    if logarithmic:
        axes.set_xscale("log")
    top = max([1.0, *shares])
    axes.set_xlim(left, top * (8 if logarithmic else 1.35))
    axes.set_xlabel("volume as a share of the simulated basin")
    return axes


def figure(evidence: Evidence) -> Figure:
    """The ladder of a run."""
    drawn = new_figure(7.8, 1.6 + 0.45 * len(_rungs(evidence.verdict)))
    drawn.suptitle(title_lines(evidence.title, 84), x=0.01, ha="left")
    ladder(drawn.subplots(), evidence.verdict)
    return drawn


def _rungs(verdict: Mapping[str, Any]) -> Sequence[Rung]:
    """Name, share, interval and strength of each rung, the outer side last."""
    bounds = [bound for bound in verdict["bounds"] if bound["volume_ratio"] is not None]
    if not bounds:
        return []
    found = [
        {
            "name": bound["name"],
            "share": bound["volume_ratio"],
            "interval": bound["volume_ratio_interval"],
            "strength": bound["strength"],
        }
        for bound in bounds
    ]
    inner = sorted((rung for rung in found if rung["name"] != OUTER), key=lambda rung: rung["share"])
    basin = {"name": "simulated basin", "share": 1.0, "interval": None, "strength": "simulated"}
    return [*inner, basin, *(rung for rung in found if rung["name"] == OUTER)]
