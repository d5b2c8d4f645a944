"""How many starts ended in which way, each share with its interval."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from roa.kernel.outcomes import Outcome
from roa.report.evidence import Evidence
from roa.report.style import AREAS, INK, new_figure, title_lines
from roa.report.wording import confidence_text, interval_percent, outcome_word, percent

PLACE = 50
CAPTION = "Share of the starts that ended in each way, with its interval (simulated)."

# A bar as wide as this part of the axes has room for its text inside.
WIDE = 0.6


def applies(evidence: Evidence) -> bool:
    """Whether the share of the starts that ended in some way is that of the domain."""
    return bool(evidence.verdict["basin"]["count_intervals"])


def outcomes(axes: Axes, basin: Mapping[str, Any]) -> Axes:
    """Draw a bar for each outcome that occurred into the axes, from `basin` of the verdict."""
    total = sum(basin["counts"].values())
    found = [outcome for outcome in Outcome if basin["counts"].get(outcome.word)]
    for row, outcome in enumerate(found):
        share = basin["counts"][outcome.word] / total
        low, high = basin["count_intervals"][outcome.word]
        area = AREAS[outcome]
        axes.barh(row, share, 0.62, color=area.tone, edgecolor=area.edge.colour, hatch=area.hatch, zorder=1)
        axes.plot([low, high], [row, row], color=INK, linewidth=1.4, marker="|", markersize=9, zorder=3)
        text = f"{percent(share, 2)}  ({interval_percent(low, high)})"
        inside = share > WIDE
        axes.text(
            share / 2 if inside else high + 0.012, row, text, va="center", ha="center" if inside else "left",
            bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 1.5}, zorder=2,
        )  # fmt: skip
    axes.set_yticks(range(len(found)), [outcome_word(outcome) for outcome in found])
    axes.invert_yaxis()
    axes.set_xlim(0.0, 1.0)
    axes.set_xlabel(f"share of the starts, with its {confidence_text(basin['confidence'])} interval (simulated)")
    return axes


def figure(evidence: Evidence) -> Figure:
    """Outcome counts."""
    basin = evidence.verdict["basin"]
    rows = sum(1 for count in basin["counts"].values() if count)
    drawn = new_figure(7.8, 1.5 + 0.5 * rows)
    drawn.suptitle(title_lines(evidence.title, 84), x=0.01, ha="left")
    outcomes(drawn.subplots(), basin)
    return drawn
