"""Slices of the basin of three and more states: pairs of states, the others held."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from roa.kernel.outcomes import Outcome
from roa.report import layers, legends
from roa.report.evidence import ONE, SEVERAL, Evidence
from roa.report.level_sets import LevelSet
from roa.report.plane import Plane, Slice
from roa.report.style import new_figure, title_lines
from roa.report.wording import number, percent

PLACE = 11
CAPTION = (
    "Slices of the simulated basin in pairs of states, with the level sets of the bounds where they meet the slice; "
    "states that a panel does not show are held. Nothing is projected."
)

# A triangle of panels stays readable up to six states (fifteen panels).
MOST_STATES = 6
# Part of a panel's width that the mark of the equilibrium covers.
UNSEEN = 0.04
# Inches; below this the two legends would meet.
NARROWEST = 8.0


def applies(evidence: Evidence) -> bool:
    """Whether there are more states than a plane shows."""
    return evidence.loop.n > 2


def slice_overlay(axes: Axes, evidence: Evidence, i: int, j: int, level_sets: Sequence[LevelSet] | None = None) -> Axes:
    """Draw the slice of states i and j into the axes: regions, level sets, limits, equilibria.

    `level_sets` are those of the evidence where None; `evidence.at` says where the other states are held.
    """
    found = _slice(evidence, i, j)
    return layers.draw_plane(axes, evidence, found, evidence.level_sets if level_sets is None else level_sets)


def figure(evidence: Evidence) -> Figure:
    """Triangle of slices, or the one of the pair that is asked for.

    Each column shares its horizontal state, each row its vertical one. Level sets are drawn where they meet the
    slice, which is smaller than their shadow on it.
    """
    pairs = _pairs(evidence)
    side = 1 if evidence.pair else max(j for _, j in pairs)
    drawn = new_figure(max(2.6 * side + 1.0, NARROWEST), 6.6 if side == 1 else 2.3 * side + 2.4)
    grid = drawn.subplots(side, side, squeeze=False)
    for axes in grid.flat:
        axes.set_visible(False)
    slices = [_slice(evidence, i, j) for i, j in pairs]
    unseen = _unseen(slices, evidence.level_sets)
    seen = [one for one in evidence.level_sets if one.name not in unseen]
    for (i, j), found in zip(pairs, slices, strict=True):
        axes = grid[0, 0] if side == 1 else grid[j - 1, i]
        axes.set_visible(True)
        slice_overlay(axes, evidence, i, j, seen)
        _say_share(axes, found)
        if side > 1:
            _shared_labels(axes, found.plane, side)
    drawn.suptitle(
        f"{title_lines(evidence.title, 84)}\n{held_text(evidence)}",
        x=0.01,
        ha="left",
        fontsize=9.5,
        fontweight="normal",
    )
    present = {outcome: region for found in slices for outcome, region in found.regions.items()}
    simulated = [*legends.region_entries(present), *legends.other_entries(evidence)]
    legends.add_legends(drawn, simulated, legends.level_set_entries(evidence.level_sets, unseen))
    return drawn


def held_text(evidence: Evidence) -> str:
    """What a slice is, with the values at which the states that a panel does not show are held."""
    plane = evidence.plane(*evidence.first_pair)
    shown = plane.others if evidence.pair else range(len(plane.states))
    held = ", ".join(f"{plane.states[k]} = {number(plane.held[k])} {plane.units[k]}".rstrip() for k in shown)
    where = "at the equilibrium" if evidence.at is None else "held"
    text = f"Slices, not projections: the states that a panel does not show are {where}\n({held})."
    if len(plane.states) > MOST_STATES and not evidence.pair:
        text += f"\nThe first {MOST_STATES} of {len(plane.states)} states are shown."
    return text


def _pairs(evidence: Evidence) -> list[tuple[int, int]]:
    if evidence.pair:
        return [evidence.pair]
    return list(combinations(range(min(evidence.loop.n, MOST_STATES)), 2))


def _slice(evidence: Evidence, i: int, j: int) -> Slice:
    return evidence.slice(i, j, ONE if evidence.pair else SEVERAL)


def _say_share(axes: Axes, found: Slice) -> None:
    """Write what part of the slice converges."""
    basin = (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT)
    share = sum(region.share for outcome, region in found.regions.items() if outcome in basin)
    axes.set_title(f"{percent(share)} converges", fontsize=8, loc="left", pad=3)


def _unseen(slices: Sequence[Slice], level_sets: Sequence[LevelSet]) -> list[str]:
    """Names of the level sets that hide under the mark of the equilibrium in every panel."""

    def widest(one: LevelSet, plane: Plane) -> float:
        box = plane.box[[plane.i, plane.j]]
        widths = [(np.ptp(ring, axis=0) / np.ptp(box, axis=1)).max() for ring in one.outline(plane)]
        return float(max(widths, default=0.0))

    return [one.name for one in level_sets if all(widest(one, found.plane) < UNSEEN for found in slices)]


def _shared_labels(axes: Axes, plane: Plane, side: int) -> None:
    """Keep names and ticks on the outer panels alone."""
    if plane.j < side:
        axes.set_xlabel("")
        axes.tick_params(labelbottom=False)
    if plane.i > 0:
        axes.set_ylabel("")
        axes.tick_params(labelleft=False)
