"""How far each state goes from the equilibrium on its way."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.figure import Figure

from roa.report import layers
from roa.report.evidence import Evidence
from roa.report.maps import draw_map, map_figure, shows_basin
from roa.report.style import LIMIT, quantity

PLACE = 41
CAPTION = (
    "Largest excursion of each state from the equilibrium on the way from each start of the plane to the target set "
    "(simulated); hatched starts do not converge. A dash-dotted line marks starts whose excursion just reaches a limit."
)

MOST_STATES = 6


def applies(evidence: Evidence) -> bool:
    """Whether there is a plane to show in which more converged than a speck, and something moves."""
    return evidence.loop.n >= 2 and shows_basin(evidence) and bool(_moving(evidence))


def peak_excursion(axes: Axes, evidence: Evidence, state: int) -> Axes:
    """Draw the largest excursion of one state over the plane of the first pair, with a scale beside the axes."""
    found = evidence.slice(*evidence.first_pair)
    loop = evidence.loop
    peaks = np.where(found.converged, found.square(found.found.peak[:, state]), np.nan)
    high = float(np.nanmax(peaks))
    label = quantity(f"peak of |{loop.states[state]} − equilibrium|", loop.units[state])
    draw_map(axes, found, peaks, Normalize(0.0, high), label)
    for distance in evidence.limit_distances(state):
        if np.nanmin(peaks) < distance < high:
            x, y = found.axes_values
            axes.contour(
                x, y, peaks, levels=[distance], colors=LIMIT.colour, linestyles="dashdot", linewidths=1.6, zorder=3
            )
    layers.draw_equilibrium(axes, found.plane)
    return layers.frame(axes, found.plane)


def figure(evidence: Evidence) -> Figure:
    """One panel for each state that moves, up to six."""
    moving = _moving(evidence)
    drawn, panels = map_figure(evidence, len(moving))
    for state, axes in zip(moving, panels, strict=True):
        peak_excursion(axes, evidence, state)
    return drawn


def _moving(evidence: Evidence) -> list[int]:
    """The first states that leave the equilibrium from any start of the plane."""
    found = evidence.slice(*evidence.first_pair)
    peaks = found.found.peak[found.converged.ravel()].max(axis=0, initial=0.0)
    return [int(state) for state in np.flatnonzero(peaks > 0)[:MOST_STATES]]
