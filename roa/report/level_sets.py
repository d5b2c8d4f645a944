"""The level sets of the bounds, as outlines in a plane of two states."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from contourpy import FillType, contour_generator
from numpy.typing import NDArray

from roa.report.plane import Plane

Array = NDArray[np.float64]

# A polygon of 720 corners misses 1.3e-5 of the area of its ellipse.
CORNERS = 720
CELLS = 400


@dataclass(frozen=True)
class LevelSet:
    """The set {V ≤ level} of one bound, or of the claim, as the figures need it.

    Attributes
    ----------
    name : str, as in `verdict.json`
    strength : str, the word that goes with it
    level : float
    share : part of the simulated basin that it covers, None where no basin was measured
    P : float64 (n, n) of a quadratic V, else None
    value : V of a formula, (m, n) -> (m,), used where P is None
    """

    name: str
    strength: str
    level: float
    share: float | None
    P: Array | None
    value: Callable[[Array], Array] | None = None

    def outline(self, plane: Plane) -> tuple[Array, ...]:
        """Closed outlines, float64 (k, 2) each, of the section of the set with the plane."""
        if self.level <= 0:
            return ()
        if self.P is not None:
            if np.linalg.eigvalsh(self.P).min() <= 0:  # a claim that is refuted for this very reason
                return ()
            return (_ellipse(self.P[np.ix_([plane.i, plane.j], [plane.i, plane.j])], self.level, plane),)
        return _connected_part(self._values_in(plane), self.level, plane)

    def _values_in(self, plane: Plane) -> Array:
        assert self.value is not None
        unit = np.linspace(0.0, 1.0, CELLS + 1)
        across, up = np.meshgrid(unit, unit)
        points = plane.from_unit(np.column_stack([across.ravel(), up.ravel()]))
        return self.value(plane.lift(points)).reshape(across.shape)


def level_sets_of(verdict: Mapping[str, Any], value: Callable[[Array], Array] | None = None) -> tuple[LevelSet, ...]:
    """Level sets of the bounds and of the claim, which belongs to the same V.

    `value` is V where the verdict holds a formula instead of P.
    """
    found = [
        LevelSet(one["name"], one["strength"], one["level"], one["volume_ratio"], _matrix(one), value)
        for one in verdict["bounds"]
    ]
    claim = verdict["claim"]
    if claim and verdict["bounds"]:
        share = verdict["comparison"]["volume_ratio"]["value"]
        result = claim["result"].replace("_", " ")
        found.append(LevelSet("claim", result, claim["level"], share, _matrix(verdict["bounds"][0]), value))
    return tuple(found)


def _matrix(bound: Mapping[str, Any]) -> Array | None:
    return np.array(bound["P"]) if "P" in bound else None


def _ellipse(P: Array, level: float, plane: Plane) -> Array:
    """Points of {y' P y = level} about the equilibrium: y = L'⁻¹ u √level with P = L L'."""
    angle = np.linspace(0.0, 2 * np.pi, CORNERS + 1)
    circle = np.stack([np.cos(angle), np.sin(angle)])
    section = np.sqrt(level) * np.linalg.solve(np.linalg.cholesky(P).T, circle)
    return np.asarray(plane.equilibrium[[plane.i, plane.j]] + section.T)


def _connected_part(values: Array, level: float, plane: Plane) -> tuple[Array, ...]:
    """Outline, with its holes, of the part of {values ≤ level} that holds the equilibrium."""
    finite = np.where(np.isfinite(values), values, np.finfo(float).max)
    low = min(float(finite.min()), 0.0) - 1.0
    filled = contour_generator(z=finite, fill_type=FillType.OuterOffset).filled(low, level)
    at = plane.equilibrium[[plane.i, plane.j]]
    for corners, starts in zip(filled[0], filled[1], strict=True):
        points = plane.from_unit(np.asarray(corners) / CELLS)
        rings = tuple(points[first:last] for first, last in pairwise(np.asarray(starts).tolist()))
        if _holds(rings[0], at):
            return rings
    return ()


def _holds(ring: Array, at: Array) -> bool:
    """Whether the closed ring (k, 2) winds about the point (2,), by the crossings of a ray to the right."""
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    crosses = (y0 > at[1]) != (y1 > at[1])
    with np.errstate(divide="ignore", invalid="ignore"):
        right_of = at[0] < x0 + (at[1] - y0) * (x1 - x0) / (y1 - y0)
    return bool(np.count_nonzero(crosses & right_of) % 2)
