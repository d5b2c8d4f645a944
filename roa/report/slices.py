"""Slices of the basin of three and more states: pairs of states, the others at the equilibrium."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import combinations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome
from roa.report.level_sets import LevelSet
from roa.report.overlay import add_legends, level_set_entries, overlay, region_entries
from roa.report.plane import Label, Plane, Region, regions
from roa.report.style import new_figure
from roa.report.wording import number

# A triangle of panels stays readable up to six states (fifteen panels).
MOST_STATES = 6
CELLS = 160
# Part of a panel's width that the mark of the equilibrium covers.
UNSEEN = 0.04
# Inches; below this the two legends would meet.
NARROWEST = 8.0

Array = NDArray[np.float64]

Slice = tuple[Plane, Mapping[Outcome, Region]]


def simulate_slices(
    states: tuple[str, ...], units: tuple[str, ...], box: Array, equilibrium: Array, label: Label
) -> list[Slice]:
    """Simulate every pair of the first six states, the others at the equilibrium."""
    slices: list[Slice] = []
    for i, j in combinations(range(min(len(states), MOST_STATES)), 2):
        plane = Plane(states, units, box, equilibrium, i, j)
        slices.append((plane, regions(plane, label, CELLS)))
    return slices


def slices_figure(slices: Sequence[Slice], level_sets: Sequence[LevelSet]) -> Figure:
    """Triangle of slices: each column shares its horizontal state, each row its vertical one.

    Level sets are drawn where they meet the slice, which is smaller than their shadow on it.
    """
    side = max(plane.j for plane, _ in slices)
    figure = new_figure(max(2.6 * side + 1.0, NARROWEST), 2.3 * side + 2.0)
    grid = figure.subplots(side, side, squeeze=False)
    for axes in grid.flat:
        axes.set_visible(False)
    unseen = _unseen(slices, level_sets)
    seen = [one for one in level_sets if one.name not in unseen]
    for plane, outcomes in slices:
        axes = grid[plane.j - 1, plane.i]
        axes.set_visible(True)
        overlay(axes, plane, outcomes, seen)
        _shared_labels(axes, plane, side)
    figure.suptitle(slices_title(slices[0][0]), x=0.01, ha="left", fontsize=10)
    present = {outcome: region for _, outcomes in slices for outcome, region in outcomes.items()}
    add_legends(figure, region_entries(present), level_set_entries(level_sets, unseen))
    return figure


def _unseen(slices: Sequence[Slice], level_sets: Sequence[LevelSet]) -> list[str]:
    """Names of the level sets that hide under the mark of the equilibrium in every panel."""

    def widest(one: LevelSet, plane: Plane) -> float:
        box = plane.box[[plane.i, plane.j]]
        widths = [(np.ptp(ring, axis=0) / np.ptp(box, axis=1)).max() for ring in one.outline(plane)]
        return float(max(widths, default=0.0))

    return [one.name for one in level_sets if all(widest(one, plane) < UNSEEN for plane, _ in slices)]


def slices_title(plane: Plane) -> str:
    """What a slice is, with the values at which the states that a panel does not show are held."""
    held = ", ".join(
        f"{name} = {number(value)} {unit}".rstrip()
        for name, value, unit in zip(plane.states, plane.equilibrium, plane.units, strict=True)
    )
    text = f"Slices, not projections: the states that a panel does not show are at the equilibrium\n({held})."
    if len(plane.states) > MOST_STATES:
        text += f"\nThe first {MOST_STATES} of {len(plane.states)} states are shown."
    return text


def _shared_labels(axes: Axes, plane: Plane, side: int) -> None:
    """Keep names and ticks on the outer panels alone."""
    if plane.j < side:
        axes.set_xlabel("")
        axes.tick_params(labelbottom=False)
    if plane.i > 0:
        axes.set_ylabel("")
        axes.tick_params(labelleft=False)
