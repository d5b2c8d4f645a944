"""The level sets of the bounds, as outlines in a plane of two states."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from contourpy import FillType, contour_generator
from numpy.typing import NDArray

from roa.bound.lyapunov_function import FormulaV, LyapunovFunction, Quadratic
from roa.loop.formula import Vocabulary, parse
from roa.loop.model import Loop
from roa.report.plane import Plane

Array = NDArray[np.float64]

# A polygon of 720 corners misses 1.3e-5 of the area of its ellipse.
CORNERS = 720
CELLS = 400

OUTER = "no-return set"


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

    @property
    def is_outer(self) -> bool:
        """Whether the bound is the outer side of the bracket: the set that matters is {V ≥ level}."""
        return self.name == OUTER

    def outline(self, plane: Plane) -> tuple[Array, ...]:
        """Closed outlines, float64 (k, 2) each, of the section of the set with the plane."""
        if self.level <= 0:
            return ()
        if self.P is not None:
            if np.linalg.eigvalsh(self.P).min() <= 0:  # a claim that is refuted for this very reason
                return ()
            return _section(self.P, self.level, plane)
        return _connected_part(self.values_in(plane), self.level, plane)

    def values_in(self, plane: Plane, cells: int = CELLS) -> Array:
        """V on a raster of the plane, (cells + 1, cells + 1), row by row from below."""
        states = plane.lift(plane.raster(cells))
        if self.P is not None:
            y = states - plane.equilibrium
            values = np.einsum("mi,ij,mj->m", y, self.P, y)
        else:
            assert self.value is not None
            values = self.value(states)
        return np.asarray(values).reshape(cells + 1, cells + 1)


def level_sets_of(verdict: Mapping[str, Any], loop: Loop) -> tuple[LevelSet, ...]:
    """Level sets of the bounds and of the claim, in the order of the verdict."""
    centre = np.array(verdict["equilibrium"])

    def level_set(one: Mapping[str, Any], name: str, strength: str, share: float | None) -> LevelSet:
        V = lyapunov_function(one, loop, centre)
        return LevelSet(name, strength, one["level"], share, V.P if isinstance(V, Quadratic) else None, V.value)

    found = [level_set(one, one["name"], one["strength"], one["volume_ratio"]) for one in verdict["bounds"]]
    if claim := verdict["claim"]:
        share = verdict["comparison"]["volume_ratio"]["value"]
        found.append(level_set(claim, "claim", claim["result"].replace("_", " "), share))
    return tuple(found)


def lyapunov_function(bound: Mapping[str, Any], loop: Loop, centre: Array) -> LyapunovFunction:
    """The Lyapunov function of a bound or claim of the verdict: quadratic by its `P`, else by its formula `V`."""
    if bound.get("P") is not None:
        return Quadratic(loop, centre, np.array(bound["P"]))
    constants = {name: parameter.value for name, parameter in loop.parameters.items()}
    text = bound["V"]
    return FormulaV(loop, centre, parse(text, Vocabulary([*loop.states, *loop.parameters], constants)), text)


def _section(P: Array, level: float, plane: Plane) -> tuple[Array, ...]:
    """Outline of {y' P y = level} in the plane: an ellipse, or nothing where the plane passes it by.

    With the other coordinates held at z, y' P y = (a - a0)' A (a - a0) + z' S z for the two that vary: A is
    their block of P, a0 = -A⁻¹ B z and S the Schur complement of A.
    """
    free, others = [plane.i, plane.j], plane.others
    A, B = P[np.ix_(free, free)], P[np.ix_(free, others)]
    z = (plane.held - plane.equilibrium)[others]
    shift = -np.linalg.solve(A, B @ z)
    left = level - z @ (P[np.ix_(others, others)] @ z) - z @ (B.T @ shift)
    if not left > 0:
        return ()
    angle = np.linspace(0.0, 2 * np.pi, CORNERS + 1)
    circle = np.stack([np.cos(angle), np.sin(angle)])
    ring = np.sqrt(left) * np.linalg.solve(np.linalg.cholesky(A).T, circle)
    return (np.asarray(plane.equilibrium[free] + shift + ring.T),)


def _connected_part(values: Array, level: float, plane: Plane) -> tuple[Array, ...]:
    """Outline, with its holes, of the part of {values ≤ level} that holds the equilibrium.

    Away from the equilibrium, where a section need not hold it, every part is drawn.
    """
    finite = np.where(np.isfinite(values), values, np.finfo(float).max)
    low = min(float(finite.min()), 0.0) - 1.0
    filled = contour_generator(z=finite, fill_type=FillType.OuterOffset).filled(low, level)
    at = plane.equilibrium[[plane.i, plane.j]]
    drawn: list[Array] = []
    for corners, starts in zip(filled[0], filled[1], strict=True):
        points = plane.from_unit(np.asarray(corners) / (len(values) - 1))
        rings = tuple(points[first:last] for first, last in pairwise(np.asarray(starts).tolist()))
        if not plane.holds_equilibrium:
            drawn += rings
        elif _holds(rings[0], at):
            return rings
    return tuple(drawn)


def _holds(ring: Array, at: Array) -> bool:
    """Whether the closed ring (k, 2) winds about the point (2,), by the crossings of a ray to the right."""
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    crosses = (y0 > at[1]) != (y1 > at[1])
    with np.errstate(divide="ignore", invalid="ignore"):
        right_of = at[0] < x0 + (at[1] - y0) * (x1 - x0) / (y1 - y0)
    return bool(np.count_nonzero(crosses & right_of) % 2)
