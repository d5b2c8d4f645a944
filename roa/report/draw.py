"""All figures of a run, from what its folder holds and from further simulations for the planes."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from roa.basin.independent import path
from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.loop.configuration import Configuration
from roa.loop.model import Loop
from roa.report.answer import partial_sentence
from roa.report.level_sets import level_sets_of
from roa.report.overlay import Trace, overlay_figure
from roa.report.plane import Label, Plane, regions
from roa.report.save import save
from roa.report.share_by_level import share_by_level_figure
from roa.report.slices import simulate_slices, slices_figure
from roa.report.style import settings

if TYPE_CHECKING:
    from roa.sweep.samples import Samples

Array = NDArray[np.float64]

# Trajectories of the overlay: so many of each outcome, chosen among the first stored samples.
TRACES, AMONG = 3, 4096
TRACE_POINTS = 1000
# Part of the domain, in half-widths, in which they start.
CENTRAL = 0.85


def draw_figures(
    folder: Path,
    configuration: Configuration,
    verdict: Mapping[str, Any],
    samples: Samples,
    label: Label,
    value: Callable[[Array], Array],
) -> tuple[Path, ...]:
    """Draw and write the figures that fit the number of states; return the paths of all files.

    Parameters
    ----------
    folder : where they go
    verdict : as in `verdict.json`, of a run with a sweep
    label : outcomes of starts by the lanes of the same plan, float64 (m, n) -> uint8 (m,)
    value : V at points, float64 (m, n) -> (m,)
    """
    loop = configuration.loop
    equilibrium = np.array(verdict["equilibrium"])
    level_sets = level_sets_of(verdict, value)
    written: list[Path] = []
    with settings():
        if loop.n == 2:
            plane = Plane(loop.states, loop.units, loop.box, equilibrium)
            traces = [*sample_traces(configuration, samples), *counterexample_trace(configuration, verdict)]
            fraction = verdict["basin"]["fraction"]
            figure = overlay_figure(plane, regions(plane, label), level_sets, traces, fraction)
            written += save(_marked(figure, verdict), folder, "overlay")
        elif loop.n > 2:
            slices = simulate_slices(loop.states, loop.units, loop.box, equilibrium, label)
            written += save(_marked(slices_figure(slices, level_sets), verdict), folder, "slices")
        if any(shell["high"] > 0 for shell in verdict["levels"]):
            figure = share_by_level_figure(verdict["levels"], level_sets, verdict["confidence"])
            written += save(_marked(figure, verdict), folder, "share_by_level")
    return tuple(written)


def _marked(figure: Figure, verdict: Mapping[str, Any]) -> Figure:
    """Write on a figure of a partial sweep that it is one."""
    if sentence := partial_sentence(verdict):
        figure.text(0.01, 0.005, sentence, fontsize=7, ha="left", va="bottom")
    return figure


def sample_traces(configuration: Configuration, samples: Samples) -> list[Trace]:
    """A few stored starts of each outcome, far from each other, with their trajectories."""
    stored = samples.read(0, min(AMONG, samples.n))
    loop = configuration.loop
    traces = []
    for outcome in sorted(set(stored.outcome.tolist()) - {Outcome.FAILED}):
        for index in _far_apart(stored, outcome, loop):
            duration = min(float(stored.time[index]), configuration.sweep.horizon)
            if duration > 0:
                _, states = path(loop, stored.initial[index], duration, TRACE_POINTS, configuration.sweep.escape)
                traces.append(Trace(states, Outcome(outcome)))
    return traces


def counterexample_trace(configuration: Configuration, verdict: Mapping[str, Any]) -> list[Trace]:
    """The trajectory of the counterexample, where the claim is refuted by one."""
    found = verdict["claim"] and verdict["claim"]["counterexample"]
    if not found:
        return []
    start = np.array(found["initial"])
    _, states = path(configuration.loop, start, found["time"], TRACE_POINTS, configuration.sweep.escape)
    return [Trace(states, Outcome[found["outcome"].upper()], refutes=True)]


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
