"""How long the starts of a plane take to the target set."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LogNorm, Normalize
from matplotlib.figure import Figure

from roa.report import layers
from roa.report.evidence import Evidence
from roa.report.maps import draw_map, map_figure, shows_basin
from roa.report.style import quantity

PLACE = 40
CAPTION = (
    "Time from each start of the plane to the target set (simulated). Near the edge of the basin it grows without "
    "bound; hatched starts do not converge."
)


def applies(evidence: Evidence) -> bool:
    """Whether there is a plane to show in which more converged than a speck."""
    return evidence.loop.n >= 2 and shows_basin(evidence)


def time_to_converge(axes: Axes, evidence: Evidence) -> Axes:
    """Draw the time to the target set over the plane of the first pair, with a scale beside the axes."""
    found = evidence.slice(*evidence.first_pair)
    times = np.where(found.converged, found.square(found.found.time), np.nan)
    low, high = float(np.nanmin(times)), float(np.nanmax(times))
    positive = times[times > 0]
    wide = len(positive) > 0 and high > 100 * np.nanmedian(positive)
    norm = LogNorm(max(float(np.nanmin(positive)), high / 1e4), high) if wide else Normalize(low, max(high, low + 1e-9))
    draw_map(axes, found, times, norm, quantity("time to the target set", "s"))
    layers.draw_equilibrium(axes, found.plane)
    return layers.frame(axes, found.plane)


def figure(evidence: Evidence) -> Figure:
    """Time to the target set over the plane."""
    drawn, (axes,) = map_figure(evidence, 1)
    time_to_converge(axes, evidence)
    return drawn
