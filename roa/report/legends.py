"""The legends of the figures: what was simulated, and the level sets with their levels and strengths."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from typing import Any

from matplotlib.artist import Artist
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from roa.kernel.outcomes import Outcome
from roa.report.evidence import Evidence
from roa.report.layers import equilibrium_mark, rest_mark, start_mark, witness_mark
from roa.report.level_sets import LevelSet
from roa.report.plane import Region
from roa.report.style import AREAS, COUNTEREXAMPLE, LIMIT, PAPER, RISING, TRAJECTORY, bound_line
from roa.report.traces import Trace
from roa.report.wording import level_text, outcome_word, percent


def add_legends(figure: Figure, simulated: list[Artist], level_sets: list[Artist]) -> None:
    """Legend of what was simulated at the lower left, of the level sets at the lower right."""
    look: dict[str, Any] = {"handlelength": 3.2, "alignment": "left"}
    rows = max(len(simulated), len(level_sets))
    figure.legend(handles=_padded(simulated, rows), title="simulated", loc="outside lower left", **look)
    if level_sets:
        title = "level sets {V ≤ c}, volume in % of the simulated basin"
        figure.legend(handles=_padded(level_sets, rows), title=title, loc="outside lower right", **look)


def region_entries(regions: Mapping[Outcome, Region], basin: Mapping[str, Any] | None = None) -> list[Artist]:
    """Legend entries of the areas and of the equilibrium; `basin` of the verdict for the shares of the domain."""
    entries: list[Artist] = []
    limited = Outcome.CONVERGED_OVER_LIMIT in regions
    for outcome in sorted(regions):
        area = AREAS[outcome]
        text = outcome_word(outcome)
        if outcome is Outcome.CONVERGED:
            text = "converged within the limits" if limited else "basin: starts that converged"
            text += _share(basin and (basin.get("safe") if limited else basin))
        elif outcome is Outcome.CONVERGED_OVER_LIMIT and basin:
            text += f"; both{_share(basin)}"
        edge, width = area.edge.colour, area.edge.width
        entries.append(Patch(facecolor=area.tone, edgecolor=edge, linewidth=width, hatch=area.hatch, label=text))
    return [*entries, equilibrium_mark([], [], label="equilibrium")]


def _share(measured: Mapping[str, Any] | None) -> str:
    """The share of the domain, where one was measured."""
    if not measured or measured["fraction"] is None:
        return ""
    return f", {percent(measured['fraction'])} of the domain"


def other_entries(evidence: Evidence) -> list[Artist]:
    """Legend entries of what a picture holds only in some runs: other equilibria, limits, a witness, rising V."""
    entries: list[Artist] = []
    if evidence.rests:
        entries.append(rest_mark([], [], label="another stable equilibrium"))
    if evidence.limits:
        look = {"color": LIMIT.colour, "linestyle": LIMIT.dash, "linewidth": LIMIT.width}
        entries.append(Line2D([], [], label="limit on a state or signal", **look))  # type: ignore[arg-type]
    if evidence.rising and evidence.V is not None:
        look = {"facecolor": PAPER, "edgecolor": RISING.edge.colour, "hatch": RISING.hatch, "linewidth": 0.4}
        entries.append(Patch(label="V̇ ≥ 0 (estimated)", **look))  # type: ignore[arg-type]
    if evidence.witness is not None:
        entries.append(witness_mark([], [], label="a point with V̇ ≥ 0 (proved)"))
    return entries


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
            mark = start_mark(outcome, refutes, ([], []), 0)
            kind = "counterexample" if refutes else "trajectory from a start"
            mark.set(label=f"{kind} that {outcome_word(outcome)}", color=line.colour)
            mark.set(linestyle=line.dash, linewidth=line.width, markerfacecolor=PAPER)
            entries.append(mark)
    return entries


def _padded(entries: list[Artist], rows: int) -> list[Artist]:
    """Entries with blank ones below, so that the titles of two legends stand on one line."""
    return [*entries, *(Patch(visible=False, label=" ") for _ in range(rows - len(entries)))]
