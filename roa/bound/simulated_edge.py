"""The simulated edge of the basin along rays: the guide of the searches, and no evidence of anything."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.loop.model import Loop

Array = NDArray[np.float64]
Run = Callable[[Array], Trajectories]

SCAN = 24  # points on a ray
BISECTIONS = 12


@dataclass(frozen=True)
class Edge:
    """How far m rays run in the basin.

    Attributes
    ----------
    direction : (m, n), steps y = r direction from the equilibrium, state units
    radius : (m,), where the ray first leaves the basin, or the domain
    face : (m,), where it leaves the domain
    """

    direction: Array
    radius: Array
    face: Array

    @property
    def open(self) -> NDArray[np.bool_]:
        """Whether the ray reaches the domain's face within the basin, (m,)."""
        return self.radius >= self.face


def simulated_edge(loop: Loop, centre: Array, direction: Array, run: Run) -> Edge:
    """Follow rays to the first start that does not converge.

    Parameters
    ----------
    loop : Loop
    centre : float64 (n,), the equilibrium
    direction : float64 (m, n), state units
    run : simulates starts (m, n)
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        to_faces = np.where(direction > 0, loop.box[:, 1] - centre, loop.box[:, 0] - centre) / direction
    face = np.where(direction != 0, to_faces, np.inf).min(axis=1)
    share = np.arange(1, SCAN + 1) / SCAN

    def converges(r: Array) -> NDArray[np.bool_]:
        points = centre + r[..., None] * (direction if r.ndim == 1 else direction[:, None])
        outcome = run(points.reshape(-1, loop.n)).outcome.reshape(r.shape)
        return np.isin(outcome, (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT))

    left = ~converges(face[:, None] * share)
    at_face = ~left.any(axis=1)
    first = left.argmax(axis=1)
    near, far = face * first / SCAN, face * (first + 1) / SCAN
    for _ in range(BISECTIONS):
        middle = (near + far) / 2
        inside = converges(middle)
        near, far = np.where(inside, middle, near), np.where(inside, far, middle)
    return Edge(direction, np.where(at_face, face, near), face)
