"""A plane of two states, a raster of starts simulated in it, and the regions of each outcome."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
from contourpy import FillType, LineType, contour_generator
from matplotlib.path import Path
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories

Array = NDArray[np.float64]
Simulate = Callable[[Array], Trajectories]
Belongs = Callable[[Array], NDArray[np.bool_]]

# Halvings of a raster edge: the drawn boundary lies within 1/256 of a cell of the simulated one.
HALVINGS = 8


@dataclass(frozen=True)
class Plane:
    """Two states vary over the domain, the others are held.

    Attributes
    ----------
    states, units : tuple of str, length n
    box : float64 (n, 2), domain, state units
    equilibrium : float64 (n,), state units
    i, j : indices of the states on the horizontal and the vertical axis
    at : float64 (n,), values at which the other states are held; the equilibrium where None
    """

    states: tuple[str, ...]
    units: tuple[str, ...]
    box: Array
    equilibrium: Array
    i: int = 0
    j: int = 1
    at: Array | None = None

    @property
    def held(self) -> Array:
        """Values (n,) at which the states that do not vary are held."""
        return self.equilibrium if self.at is None else self.at

    @property
    def others(self) -> list[int]:
        """Indices of the states that are held."""
        return [k for k in range(len(self.states)) if k not in (self.i, self.j)]

    @property
    def holds_equilibrium(self) -> bool:
        """Whether the plane passes through the equilibrium."""
        return bool(np.array_equal(self.held[self.others], self.equilibrium[self.others]))

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
        states = np.tile(self.held, (len(points), 1))
        states[:, self.i] = points[:, 0]
        states[:, self.j] = points[:, 1]
        return states

    def from_unit(self, points: Array) -> Array:
        """Points (m, 2) of the plane for coordinates (m, 2) in [0, 1] across the domain."""
        low, high = self.box[[self.i, self.j]].T
        # Written as a mean, so that 0 and 1 give the faces of the domain exactly.
        return np.asarray(low * (1 - points) + high * points)

    def raster(self, cells: int) -> Array:
        """Points ((cells + 1)², 2) of a raster over the domain, row by row from below."""
        unit = np.linspace(0.0, 1.0, cells + 1)
        across, up = np.meshgrid(unit, unit)
        return self.from_unit(np.column_stack([across.ravel(), up.ravel()]))


@dataclass(frozen=True)
class Region:
    """Where one outcome was simulated.

    Attributes
    ----------
    fill : Path, the region with its holes, state units of the plane
    edges : tuple of float64 (k, 2), its boundary inside the domain
    share : part of the plane's rectangle that it fills
    """

    fill: Path
    edges: tuple[Array, ...]
    share: float = 0.0


@dataclass(frozen=True)
class Slice:
    """A raster of (cells + 1)² starts in a plane, simulated.

    Attributes
    ----------
    plane : Plane
    simulate : runs starts, float64 (m, n) -> Trajectories
    cells : of the raster in each direction
    """

    plane: Plane
    simulate: Simulate
    cells: int

    @cached_property
    def found(self) -> Trajectories:
        """What became of the starts of the raster, row by row from below."""
        return self.simulate(self.plane.lift(self.plane.raster(self.cells)))

    def square(self, values: NDArray[np.generic]) -> NDArray[np.generic]:
        """Values of the raster's starts as an array of its own shape, (cells + 1, cells + 1)."""
        return values.reshape(self.cells + 1, self.cells + 1)

    @cached_property
    def converged(self) -> NDArray[np.bool_]:
        """Which starts of the raster converged, over a limit or not, in the raster's own shape."""
        return converged(self.square(self.found.outcome))

    @property
    def axes_values(self) -> tuple[Array, Array]:
        """Values (cells + 1,) of the two states along the sides of the raster."""
        points = self.plane.raster(self.cells).reshape(self.cells + 1, self.cells + 1, 2)
        return points[0, :, 0], points[:, 0, 1]

    @cached_property
    def regions(self) -> dict[Outcome, Region]:
        """The region of each outcome.

        Where two neighbours of the raster differ, the edge between them is halved by further
        simulations, so that the boundary is a line and not a staircase. Fingers thinner than a
        cell can be missed.
        """
        present = (Outcome(value) for value in np.unique(self.found.outcome))
        return {one: self._region(one) for one in present}

    def _region(self, one: Outcome) -> Region:
        inside = self.square(self.found.outcome) == one
        return outline(self.plane, inside, lambda states: self.simulate(states).outcome == one)


def outline(plane: Plane, inside: NDArray[np.bool_], belongs: Belongs) -> Region:
    """The region of the raster's starts that are inside, its edge refined by asking further starts.

    Parameters
    ----------
    plane : Plane
    inside : bool (cells + 1, cells + 1), of the starts of a raster, row by row from below
    belongs : whether starts belong to the region, float64 (m, n) -> bool (m,)
    """
    cells = len(inside) - 1
    contours = contour_generator(
        z=inside.astype(np.float64), fill_type=FillType.ChunkCombinedCode, line_type=LineType.Separate
    )
    fill_points, fill_codes = (chunk[0] for chunk in contours.filled(0.5, 2.0))
    if fill_points is None:  # nothing but single points of the raster on its border
        fill_points, fill_codes = np.empty((0, 2)), np.empty(0, np.uint8)
    lines = contours.lines(0.5)
    together = np.concatenate([fill_points, *lines])
    vertices, where = np.unique(together, axis=0, return_inverse=True)
    unit = (_halve(plane, inside, belongs, vertices) / cells)[where.ravel()]
    exact = plane.from_unit(unit)
    ends = np.cumsum([len(fill_points), *(len(line) for line in lines)])
    edges = tuple(exact[first:last] for first, last in pairwise(ends))
    codes = fill_codes if len(fill_points) else None
    first = len(fill_points)
    return Region(Path(exact[:first], codes), edges, path_area(Path(unit[:first], codes)))


def _halve(plane: Plane, inside: NDArray[np.bool_], belongs: Belongs, vertices: Array) -> Array:
    """Move the vertices (k, 2), in cells, that lie midway on a raster edge to where the region ends."""
    moved = vertices.copy()
    on_edge = (vertices % 1 != 0).any(axis=1)
    within, without = np.floor(vertices[on_edge]), np.ceil(vertices[on_edge])
    swap = ~inside[within[:, 1].astype(int), within[:, 0].astype(int)]
    within[swap], without[swap] = without[swap], within[swap].copy()
    cells = len(inside) - 1
    for _ in range(HALVINGS if len(within) else 0):
        middle = (within + without) / 2
        hit = belongs(plane.lift(plane.from_unit(middle / cells)))
        within[hit] = middle[hit]
        without[~hit] = middle[~hit]
    moved[on_edge] = (within + without) / 2
    return moved


def converged(outcome: NDArray[np.generic]) -> NDArray[np.bool_]:
    """Which outcomes are those of the basin: converged, over a limit or not."""
    return np.isin(outcome, (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT))


def path_area(path: Path) -> float:
    """Area of a filled path, 0 for an empty one; holes turn the other way and count against it."""
    return abs(sum(_signed_area(np.asarray(polygon)) for polygon in path.to_polygons()))


def _signed_area(ring: Array) -> float:
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    return float(np.sum(x0 * y1 - x1 * y0)) / 2
