"""The name of a bound written on its own line, where there is room for it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from roa.report.style import PAPER, bound_line

Array = NDArray[np.float64]

SIZE = 8.0
# Mean width of a letter and height of a line, in parts of the size of the letters.
LETTER, HEIGHT = 0.56, 1.25
CANDIDATES = 48
# An outline smaller than this, in points, is left to the legend.
LEAST = 15.0


@dataclass(frozen=True)
class Outline:
    """Name of a bound and one closed outline of it, float64 (k, 2), in the units of the axes."""

    name: str
    ring: Array


def label_outlines(axes: Axes, outlines: Sequence[Outline], others: Sequence[Array]) -> None:
    """Write each name across its outline, where it covers the fewest other lines.

    `others` are the lines, float64 (k, 2), that labels keep clear of: edges and trajectories. Where
    the axes have no place for a name it is left to the legend.
    """
    size = _size_in_points(axes)
    rings = [_in_points(axes, outline.ring, size) for outline in outlines]
    lines = [_in_points(axes, _resampled(line), size) for line in others]
    taken: list[tuple[Array, Array]] = []
    for k, outline in enumerate(outlines):
        if np.ptp(rings[k], axis=0).max() < LEAST:
            continue
        half = np.array([LETTER * SIZE * len(outline.name), HEIGHT * SIZE]) / 2 + 1.5
        places = [place for place in _places(rings[k], half) if _free(place, half, size, taken)]
        if not places:
            continue
        foreign = [*rings[:k], *rings[k + 1 :], *lines]
        best = min(places, key=lambda place: _lines_covered(place, half, foreign))
        taken.append((best, half))
        _write(axes, outline.name, best / size)


def _free(place: Array, half: Array, size: Array, taken: Sequence[tuple[Array, Array]]) -> bool:
    """Whether a label of the half size (2,) at the place (2,) lies inside the axes and meets no earlier label."""
    inside = bool(np.all((place > half + 4) & (place < size - half - 4)))
    return inside and not any(np.all(np.abs(place - other) < half + its_half) for other, its_half in taken)


def _lines_covered(place: Array, half: Array, lines: Sequence[Array]) -> int:
    return sum(bool(np.any(np.all(np.abs(line - place) < half, axis=1))) for line in lines)


def _places(ring: Array, half: Array) -> Array:
    """Centres (k, 2) at which a label of the half size (2,) may stand: on a large ring, beside a small one."""
    low, high = ring.min(axis=0), ring.max(axis=0)
    if (high - low).min() >= 3 * half[0]:
        return ring[:: max(1, len(ring) // CANDIDATES)]
    sides = np.array([[0, -1], [0, 1], [1, 0], [-1, 0], [1, -1], [-1, 1], [1, 1], [-1, -1]])
    return np.asarray((low + high) / 2 + sides * ((high - low) / 2 + half + 2))


def _write(axes: Axes, name: str, at: Array) -> None:
    axes.text(
        float(at[0]),
        float(at[1]),
        name,
        transform=axes.transAxes,
        ha="center",
        va="center",
        fontsize=SIZE,
        color=bound_line(name).colour,
        fontweight="bold",
        bbox={"facecolor": PAPER, "edgecolor": "none", "alpha": 0.8, "pad": 1.0},
        zorder=7.5,
    )


def _size_in_points(axes: Axes) -> Array:
    """Size (2,) of the axes before the layout is final: near enough to keep labels apart."""
    box = axes.get_window_extent().transformed(axes.figure.dpi_scale_trans.inverted())
    return 72 * np.array([box.width, box.height])


def _in_points(axes: Axes, line: Array, size: Array) -> Array:
    low, high = np.transpose([axes.get_xlim(), axes.get_ylim()])
    return np.asarray((line - low) / (high - low) * size)


def _resampled(line: Array) -> Array:
    """Four points a segment, so that a coarse line cannot pass through a label unseen."""
    t = np.linspace(0, 1, 4, endpoint=False)[:, None, None]
    return np.asarray((1 - t) * line[:-1] + t * line[1:]).reshape(-1, 2)
