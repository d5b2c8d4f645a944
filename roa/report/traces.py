"""Trajectories for pictures, by the independent integrator: a few of the stored starts, and the counterexample."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from roa.basin.independent import path
from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.loop.configuration import Configuration
from roa.loop.model import Loop

if TYPE_CHECKING:
    from roa.sweep.samples import Samples

Array = NDArray[np.float64]

# So many of each outcome, chosen among the first stored samples.
TRACES, AMONG = 3, 4096
TRACE_POINTS = 1000
TIME_CONSTANTS = 4.0
# Part of the domain, in half-widths, in which they start.
CENTRAL = 0.85


@dataclass(frozen=True)
class Trace:
    """One simulated trajectory for a picture.

    Attributes
    ----------
    points : float64 (k, n), states along the way, the initial condition first
    outcome : Outcome
    refutes : bool, whether it starts in the claimed set and refutes the claim
    """

    points: Array
    outcome: Outcome
    refutes: bool = False


def sample_traces(configuration: Configuration, samples: Samples, slowest: float = 0.0) -> list[Trace]:
    """A few stored starts of each outcome, far from each other, with their trajectories.

    `slowest` is the slowest time constant, s: a trajectory is followed beyond its entry into the target set.
    """
    stored = samples.read(0, min(AMONG, samples.n))
    traces = []
    for outcome in sorted(set(stored.outcome.tolist()) - {Outcome.FAILED}):
        for index in _far_apart(stored, outcome, configuration.loop):
            duration = min(float(stored.time[index]), configuration.sweep.horizon)
            if outcome in (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT):
                duration = max(duration, TIME_CONSTANTS * slowest)  # on towards the equilibrium, inside the target set
            if duration > 0:
                points = _path(configuration, stored.initial[index], duration)
                traces.append(Trace(points, Outcome(outcome)))
    return traces


def counterexample_trace(configuration: Configuration, verdict: Mapping[str, Any]) -> list[Trace]:
    """The trajectory of the counterexample, where the claim is refuted by one."""
    found = verdict["claim"] and verdict["claim"]["counterexample"]
    if not found:
        return []
    points = _path(configuration, np.array(found["initial"]), found["time"])
    return [Trace(points, Outcome[found["outcome"].upper()], refutes=True)]


def _path(configuration: Configuration, start: Array, duration: float) -> Array:
    return path(configuration.loop, start, duration, TRACE_POINTS, configuration.sweep.escape)[1]


def _far_apart(stored: Trajectories, outcome: int, loop: Loop) -> list[int]:
    """Indices of up to `TRACES` starts of that outcome, each the farthest from those before it.

    Starts near a face of the domain, whose trajectories would leave the picture at once, come second.
    """
    points = (stored.initial - loop.centre) / loop.half_widths
    ended_so = stored.outcome == outcome
    away_from_faces = ended_so & (np.abs(points) < CENTRAL).all(axis=1)
    candidates = np.flatnonzero(away_from_faces if away_from_faces.any() else ended_so)
    points = points[candidates]
    chosen = [0]
    distance = np.linalg.norm(points - points[0], axis=1)
    while len(chosen) < min(TRACES, len(candidates)):
        chosen.append(int(np.argmax(distance)))
        distance = np.minimum(distance, np.linalg.norm(points - points[chosen[-1]], axis=1))
    return [int(index) for index in candidates[chosen]]
