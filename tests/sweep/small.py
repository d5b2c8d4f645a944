"""A small sweep for the tests: the unit ball of `gallery.ball(2)`, whose trajectories have a closed form.

The radius obeys r' = -(1 - r²) r, so that 1/r² - 1 grows as e^{2t}; the plane turns by one radian a second.
"""

from types import SimpleNamespace

import h5py
import numpy as np

import gallery
from roa.bound.bounds import Bounds
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Bound, Strength
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.sweep import launch as launching
from roa.sweep.means import Means
from roa.sweep.plan import make_plan
from roa.sweep.run_folder import RunFolder

LEVEL = 0.25
SIZE = 64  # starts of a block: 200 starts are three blocks and a shorter one
DATASETS = ["initial", "outcome", "time", "final", "peak", "steps", "reason"]


def make(samples=200, block_size=SIZE, seed=None, sweep="horizon = 10.0", level=LEVEL):
    """A plan with a target set as if it were proved."""
    configuration = gallery.ball(2, sweep=sweep)
    loop, equilibrium = configuration.loop, SimpleNamespace(x=np.zeros(2))
    V = Quadratic(loop, equilibrium.x, np.eye(2))
    bounds = Bounds(V, (Bound("norm bound", V, level, Strength.PROVED),))
    target = Target("level", equilibrium.x, loop.half_widths, P=np.eye(2), level=level)
    return make_plan(configuration, equilibrium, bounds, target, samples, seed, block_size)


class ClosedForm:
    """In place of compiled lanes where a test is about anything but the kernel."""

    def run(self, initial):
        start = np.linalg.norm(initial, axis=1)
        inside = start < 1
        end = np.where(inside, np.sqrt(LEVEL), 12.0)
        time = np.maximum(0.5 * np.log((1 / end**2 - 1) / (1 / start**2 - 1)), 0.0)
        cos, sin = np.cos(time), np.sin(time)
        x0, x1 = initial.T
        turned = np.stack([cos * x0 + sin * x1, cos * x1 - sin * x0], axis=1)
        return Trajectories(
            initial=initial,
            outcome=np.where(inside, Outcome.CONVERGED, Outcome.ESCAPED).astype(np.uint8),
            time=time,
            final=turned * np.where(time > 0, end / start, 1.0)[:, None],
            peak=np.abs(initial),
            steps=(10 + 7 * time).astype(np.int32),
            reason=np.zeros(len(initial), np.uint8),
        )


def sweep(path, samples=200, block_size=SIZE, jobs=1, lanes=None, plan=None, deadline=None, **asked):
    """Launch in this process; also the work of child processes that are to be killed."""
    compile_lanes, launching.compile_lanes = launching.compile_lanes, lambda *_: lanes or ClosedForm()
    try:
        folder = RunFolder(path)
        launching.launch(plan or make(samples, block_size, **asked), folder, Means(jobs, deadline=deadline))
    finally:
        launching.compile_lanes = compile_lanes
    return folder


def datasets(path):
    """Every dataset of a merged file, as bytes."""
    with h5py.File(path, "r") as file:
        found = {f"samples/{name}": column[()].tobytes() for name, column in file["samples"].items()}
        return found | {f"bound/{name}": file["bound"][name][()].tobytes() for name in file["bound"]}


def file_identity(path):
    """What changes when a file is written again; not the time of its last reading."""
    status = path.stat()
    return status.st_ino, status.st_mtime_ns, status.st_size
