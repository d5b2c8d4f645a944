"""How near stored starts lie to the edge of the basin: the distance to the nearest start that ended otherwise."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from roa.kernel.trajectories import Trajectories
from roa.loop.model import Loop

Array = NDArray[np.float64]


def distance_to_the_edge(trajectories: Trajectories, loop: Loop) -> Array:
    """Distance of each start to the nearest of the others whose answer (in the basin or not) differs, float64 (m,).

    In half-widths of the domain. The edge lies between the two, so it is an upper limit of the distance to the edge;
    infinite where all answers are the same.
    """
    points = trajectories.initial / loop.half_widths
    inside = trajectories.in_basin
    distance = np.full(len(points), np.inf)
    if inside.any() and not inside.all():
        distance[inside] = cKDTree(points[~inside]).query(points[inside])[0]
        distance[~inside] = cKDTree(points[inside]).query(points[~inside])[0]
    return distance
