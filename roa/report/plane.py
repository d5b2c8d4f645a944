"""A plane of two states through the equilibrium, and the regions of each outcome in it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from contourpy import FillType, LineType, contour_generator
from matplotlib.path import Path
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome

Array = NDArray[np.float64]
Label = Callable[[Array], NDArray[np.uint8]]

# Halvings of a raster edge: the drawn boundary lies within 1/256 of a cell of the simulated one.
HALVINGS = 8


@dataclass(frozen=True)
class Plane:
    """Two states vary over the domain, the others stay at the equilibrium.

    Attributes
    ----------
    states, units : tuple of str, length n
    box : float64 (n, 2), domain, state units
    equilibrium : float64 (n,), state units
    i, j : indices of the states on the horizontal and the vertical axis
    """

    states: tuple[str, ...]
    units: tuple[str, ...]
    box: Array
    equilibrium: Array
    i: int = 0
    j: int = 1

    @property
    def names(self) -> tuple[str, str]:
        """Names of the two states."""
        return self.states[self.i], self.states[self.j]

    @property
    def axis_units(self) -> tuple[str, str]:
        """Units of the two states."""
        return self.units[self.i], self.units[self.j]

    def lift(self, points: Array) -> Array:
        """States (m, n) of the points (m, 2) of the plane."""
        states = np.tile(self.equilibrium, (len(points), 1))
        states[:, self.i] = points[:, 0]
        states[:, self.j] = points[:, 1]
        return states

    def from_unit(self, points: Array) -> Array:
        """Points (m, 2) of the plane for coordinates (m, 2) in [0, 1] across the domain."""
        low, high = self.box[[self.i, self.j]].T
        # Written as a mean, so that 0 and 1 give the faces of the domain exactly.
        return np.asarray(low * (1 - points) + high * points)


@dataclass(frozen=True)
class Region:
    """Where one outcome was simulated.

    Attributes
    ----------
    fill : Path, the region with its holes, state units of the plane
    edges : tuple of float64 (k, 2), its boundary inside the domain
    """

    fill: Path
    edges: tuple[Array, ...]


def regions(plane: Plane, label: Label, cells: int = 400) -> dict[Outcome, Region]:
    """Simulate a raster of (cells + 1)² starts in the plane and outline the region of each outcome.

    Where two neighbours of the raster differ, the edge between them is halved by further
    simulations, so that the boundary is a line and not a staircase. Fingers thinner than a
    cell can be missed.
    """
    unit = np.linspace(0.0, 1.0, cells + 1)
    across, up = np.meshgrid(unit, unit)
    points = plane.from_unit(np.column_stack([across.ravel(), up.ravel()]))
    outcome = label(plane.lift(points)).reshape(across.shape)
    present = (Outcome(value) for value in np.unique(outcome))
    return {one: _region(plane, label, outcome, one) for one in present}


def _region(plane: Plane, label: Label, outcome: NDArray[np.uint8], one: Outcome) -> Region:
    inside = outcome == one
    cells = len(outcome) - 1
    contours = contour_generator(
        z=inside.astype(np.float64), fill_type=FillType.ChunkCombinedCode, line_type=LineType.Separate
    )
    fill_points, fill_codes = (chunk[0] for chunk in contours.filled(0.5, 2.0))
    if fill_points is None:  # nothing but single points of the raster on its border
        fill_points, fill_codes = np.empty((0, 2)), np.empty(0, np.uint8)
    lines = contours.lines(0.5)
    together = np.concatenate([fill_points, *lines])
    vertices, where = np.unique(together, axis=0, return_inverse=True)
    exact = plane.from_unit(_halve(plane, label, inside, one, vertices) / cells)[where.ravel()]
    fill = exact[: len(fill_points)]
    ends = np.cumsum([len(fill_points), *(len(line) for line in lines)])
    edges = tuple(exact[first:last] for first, last in pairwise(ends))
    return Region(Path(fill, fill_codes if len(fill) else None), edges)


def _halve(plane: Plane, label: Label, inside: NDArray[np.bool_], one: Outcome, vertices: Array) -> Array:
    """Move the vertices (k, 2), in cells, that lie midway on a raster edge to where the outcome changes."""
    moved = vertices.copy()
    on_edge = (vertices % 1 != 0).any(axis=1)
    within, without = np.floor(vertices[on_edge]), np.ceil(vertices[on_edge])
    swap = ~inside[within[:, 1].astype(int), within[:, 0].astype(int)]
    within[swap], without[swap] = without[swap], within[swap].copy()
    cells = len(inside) - 1
    for _ in range(HALVINGS if len(within) else 0):
        middle = (within + without) / 2
        hit = label(plane.lift(plane.from_unit(middle / cells))) == one
        within[hit] = middle[hit]
        without[~hit] = middle[~hit]
    moved[on_edge] = (within + without) / 2
    return moved
