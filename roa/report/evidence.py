"""What the figures are drawn from: the run as its folder holds it, and further simulations for their planes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from roa.bound.lyapunov_function import LyapunovFunction
from roa.loop.configuration import Configuration
from roa.loop.model import Loop
from roa.report.level_sets import LevelSet, level_sets_of, lyapunov_function
from roa.report.plane import Plane, Simulate, Slice
from roa.report.traces import Trace, counterexample_trace, sample_traces

if TYPE_CHECKING:
    from roa.sweep.samples import Samples

Array = NDArray[np.float64]

# Cells of the raster in a plane, in each direction: of a figure that shows one plane, and of one that shows several.
ONE, SEVERAL = 400, 160


@dataclass(frozen=True)
class Evidence:
    """A run, and how its figures shall look at it.

    Attributes
    ----------
    configuration : of the run
    verdict : as in `verdict.json`, of a run with a sweep
    samples : as stored
    simulate : runs further starts by the lanes of the same plan, float64 (m, n) -> Trajectories
    tighter : the same with tolerances ten times tighter
    pair : indices of the two states that are shown; every pair where None
    at : float64 (n,), where the other states are held; the equilibrium where None
    rising : whether the region in which V̇ >= 0 is hatched
    window : float64 (2, 2), the part of the first pair's plane that is shown; the domain where None
    """

    configuration: Configuration
    verdict: Mapping[str, Any]
    samples: Samples
    simulate: Simulate
    tighter: Simulate
    pair: tuple[int, int] | None = None
    at: Array | None = None
    rising: bool = False
    window: Array | None = None
    _slices: dict[tuple[int, int, int], Slice] = field(default_factory=dict)

    def seen(self, pair: tuple[int, int] | None = None, at: Array | None = None, rising: bool = False) -> Evidence:
        """Return the same run looked at in another way."""
        return replace(self, pair=pair, at=at, rising=rising, _slices={})

    def magnified(self, window: Array) -> Evidence:
        """Return the same view of a small window in the plane of the first pair, simulated for itself."""
        return replace(self, window=window, _slices={})

    @property
    def loop(self) -> Loop:
        """The loop of the run."""
        return self.configuration.loop

    @property
    def title(self) -> str:
        """Title of the configuration."""
        return self.loop.title

    @cached_property
    def equilibrium(self) -> Array:
        """The equilibrium, float64 (n,), state units."""
        return np.array(self.verdict["equilibrium"])

    @cached_property
    def level_sets(self) -> tuple[LevelSet, ...]:
        """Level sets of bounds and claim."""
        return level_sets_of(self.verdict, self.loop)

    @cached_property
    def sensitive(self) -> NDArray[np.bool_]:
        """Which starts of the first pair's raster end differently at tolerances ten times tighter."""
        found = self.slice(*self.first_pair).found
        return np.asarray(self.tighter(found.initial).outcome != found.outcome)

    @cached_property
    def traces(self) -> list[Trace]:
        """A few trajectories of each outcome, and that of the counterexample."""
        rates = [-real for real, _ in self.verdict["eigenvalues"] if real < 0]
        slowest = 1 / min(rates) if self.verdict["stability"] == "stable" and rates else 0.0
        stored = sample_traces(self.configuration, self.samples, slowest)
        return [*stored, *counterexample_trace(self.configuration, self.verdict)]

    @cached_property
    def rests(self) -> list[Array]:
        """Other stable equilibria, each (n,)."""
        found = (self.verdict.get("attractors") or [])[1:]
        return [np.array(one["at"]) for one in found if one["at"] is not None and one["stability"] == "stable"]

    @property
    def limits(self) -> Mapping[str, tuple[float, float]]:
        """Limits by the name of the state or signal."""
        return {name: (float(low), float(high)) for name, (low, high) in self.loop.limits.items()}

    def limit_distances(self, state: int) -> list[float]:
        """Distances from the equilibrium to the limits on one state, state units."""
        ends = self.limits.get(self.loop.states[state], ())
        return [abs(end - float(self.equilibrium[state])) for end in ends]

    @property
    def witness(self) -> list[float] | None:
        """The point at which V̇ >= 0 refutes the decrease that is claimed."""
        claim = self.verdict["claim"]
        return claim["witness"] if claim else None

    @property
    def has_field(self) -> bool:
        """Whether a plane shows where each state goes: with two states, and no command that a controller holds."""
        return self.loop.n == 2 and self.loop.hold is None

    @property
    def first_pair(self) -> tuple[int, int]:
        """The pair of states that a figure of one plane shows."""
        return self.pair or (0, 1)

    def plane(self, i: int, j: int) -> Plane:
        """The plane in which states i and j vary over the domain."""
        loop = self.loop
        box = loop.box.copy()
        if self.window is not None:
            box[list(self.first_pair)] = self.window
        return Plane(loop.states, loop.units, box, self.equilibrium, i, j, self.at)

    def slice(self, i: int, j: int, cells: int = ONE) -> Slice:
        """A raster of starts in that plane, simulated once however many figures show it."""
        key = (i, j, cells)
        if key not in self._slices:
            self._slices[key] = Slice(self.plane(i, j), self.simulate, cells)
        return self._slices[key]

    @cached_property
    def V(self) -> LyapunovFunction | None:
        """The Lyapunov function of the claim, or else of the first bound; None where there is none."""
        found = self.verdict["claim"] or next(iter(self.verdict["bounds"]), None)
        if not found:
            return None
        return lyapunov_function(found, self.loop, self.equilibrium)
