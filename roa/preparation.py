"""What a configuration leads to before anything is simulated at length.

The chain of the first four rooms, each link made when it is asked for: equilibrium, bounds, pilot,
target set, plan, lanes. No mathematics of its own.
"""

from __future__ import annotations

from functools import cached_property
from typing import TYPE_CHECKING, Any

from roa.errors import UserError

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    import numpy as np
    from numpy.typing import NDArray

    from roa.basin.claim import Claim
    from roa.basin.findings import Findings
    from roa.bound.bounds import Bounds
    from roa.kernel.integration import Integration
    from roa.kernel.lanes import Lanes
    from roa.kernel.target import Target
    from roa.kernel.trajectories import Trajectories
    from roa.loop.configuration import Configuration
    from roa.loop.equilibrium import Equilibrium
    from roa.report.evidence import Evidence
    from roa.sweep.choice import Choice
    from roa.sweep.pilot import Pilot
    from roa.sweep.plan import Plan
    from roa.sweep.progress import Progress
    from roa.sweep.samples import Samples


class Preparation:
    """What a configuration leads to before anything is simulated at length; each part is made when it is needed.

    Parameters
    ----------
    configuration : Configuration
    samples, seed : in place of the configuration's, where given
    progress : told what takes a while
    jobs : threads for what is simulated beside the sweep; None for as many as this process may use processors
    target, block_size, method : those of a stored run, which are then not derived again
    quick : leave out the search for better bounds

    Raises
    ------
    UserError
        There is no such method or design, no equilibrium, or one that is not stable.
    """

    def __init__(
        self,
        configuration: Configuration,
        samples: int | None,
        seed: int | None,
        progress: Progress | None = None,
        target: Target | None = None,
        jobs: int | None = None,
        block_size: int | None = None,
        quick: bool = False,
        method: str | None = None,
    ) -> None:
        from roa.loop.equilibrium import (
            check_V,
            find_equilibrium,
            require_given_V,
            require_stable,
            require_within_limits,
        )
        from roa.sweep.progress import Progress

        _require_files(configuration)
        self.configuration = configuration.quick() if quick else configuration
        self.progress = progress or Progress()
        self._samples, self._seed, self._stored_target, self._jobs = samples, seed, target, jobs
        self._block_size, self._method = block_size, method
        self.equilibrium: Equilibrium = find_equilibrium(configuration.loop, configuration.source)
        if configuration.bound.inner is None:
            require_stable(self.equilibrium, configuration.loop, configuration.source)
        else:
            require_given_V(configuration, self.equilibrium)
        require_within_limits(self.equilibrium, configuration.loop, configuration.source)
        check_V(configuration, self.equilibrium)

    @cached_property
    def bounds(self) -> Bounds:
        """Lyapunov function and the bounds that are derived from it."""
        from roa.bound.bounds import derive_bounds
        from roa.kernel.machine_code import is_kept

        if not is_kept():
            self.progress.say("compiling the prover (once on this machine, about half a minute)")
        return derive_bounds(self.configuration, self.equilibrium, self.progress.say)

    @cached_property
    def all_bounds(self) -> Bounds:
        """The bounds, with those that are searched for by means of simulation."""
        from dataclasses import replace

        from roa.bound.searched_bounds import search_bounds
        from roa.kernel.lanes import compile_lanes

        if not self.configuration.searches or self.configuration.loop.hold is not None:
            return self.bounds
        within = replace(self.integration, escape=1.0)
        lanes = compile_lanes(self.configuration.loop, self.target, within)
        return search_bounds(self.configuration, self.equilibrium, self.bounds, lanes.run, self.progress.say)

    @cached_property
    def pilot(self) -> Pilot:
        """A few trajectories that show where else the loop comes to rest."""
        from roa.kernel.lanes import are_compiled
        from roa.sweep.pilot import run_pilot

        loop = self.configuration.loop
        if not are_compiled(loop, self._target_alone, self.integration):
            self.progress.say("compiling the loop (once for its formulas, about 5 s)")
        return run_pilot(loop, self.equilibrium, self._target_alone, self.integration)

    @cached_property
    def _target_alone(self) -> Target:
        import numpy as np

        from roa.bound.target_set import target_set

        return target_set(self.configuration, self.equilibrium, self.bounds, np.empty((0, self.configuration.loop.n)))

    @cached_property
    def target(self) -> Target:
        """The target set, other equilibria included."""
        from roa.bound.target_set import watching

        if self._stored_target is not None:
            return self._stored_target
        return watching(self._target_alone, self.pilot.elsewhere)

    @cached_property
    def integration(self) -> Integration:
        """How every trajectory is integrated."""
        from roa.sweep.plan import integration_of

        return integration_of(self.configuration.sweep, self.choice.method)

    @cached_property
    def choice(self) -> Choice:
        """The integration method, and why this one."""
        from roa.sweep.choice import CONFIGURED, Choice, choose
        from roa.sweep.plan import integration_of

        sweep = self.configuration.sweep
        if sweep.method != "auto":
            return Choice(sweep.method, CONFIGURED)
        if self._method is not None:
            return Choice(self._method, "chosen when the run was begun")
        return choose(self.configuration.loop, self.equilibrium, self._target_alone, integration_of(sweep))

    @cached_property
    def plan(self) -> Plan:
        """The plan of the sweep."""
        from roa.basin.goal import goal_samples, stopping
        from roa.sweep.plan import make_plan

        samples, wanted = self._samples, goal_samples(self.configuration)
        if wanted is not None and samples not in (None, wanted):
            raise UserError(f"--samples {samples}: contradicts the goal in [sweep], which picks the number of samples")
        return stopping(
            make_plan(
                self.configuration,
                self.equilibrium,
                self.bounds,
                self.target,
                samples or wanted,
                self._seed,
                steps=0.0 if self._block_size else self.pilot.steps,
                block_size=self._block_size,
                choice=self.choice,
            )
        )

    @cached_property
    def lanes(self) -> Lanes:
        """The compiled lanes."""
        from roa.kernel.lanes import compile_lanes

        return compile_lanes(self.configuration.loop, self.target, self.integration)

    @cached_property
    def simulate(self) -> Callable[[NDArray[np.float64]], Trajectories]:
        """Integrate any starts, float64 (m, n), on all jobs, by kernel calls of about a second."""
        return self._on_all_jobs(self.lanes)

    def _on_all_jobs(self, lanes: Lanes) -> Callable[[NDArray[np.float64]], Trajectories]:
        from roa.sweep.executors.threads import cpu_count
        from roa.sweep.portions import Portions, side_by_side

        return side_by_side(Portions(lanes.run).all, self._jobs or cpu_count())

    @property
    def seed(self) -> int:
        """Seed of the design and of every search."""
        return self.configuration.sweep.seed if self._seed is None else self._seed

    def evidence(self, verdict: Mapping[str, Any], samples: Samples) -> Evidence:
        """What the figures of a run are drawn from."""
        from roa.report.evidence import Evidence

        return Evidence(self.configuration, verdict, samples, self.simulate, self.simulate_tighter)

    @cached_property
    def simulate_tighter(self) -> Callable[[NDArray[np.float64]], Trajectories]:
        """What turns starts into outcomes at tolerances ten times tighter; the code is the same."""
        from dataclasses import replace

        from roa.kernel.lanes import compile_lanes

        loose = self.integration
        tight = replace(loose, rtol=loose.rtol / 10, atol=loose.atol / 10)
        return self._on_all_jobs(compile_lanes(self.configuration.loop, self.target, tight))

    def findings(self, samples: Samples) -> Findings:
        """Look for what the sweep alone does not say: weak starts, attractors, an audit."""
        from roa.basin.findings import look_further

        self.progress.say("looking for the weakest starts, and integrating some again")
        return look_further(
            self.configuration, self.equilibrium, self.bounds.V, self.target, self.integration, samples,
            self.lanes.run, self.seed,
        )  # fmt: skip

    def claim(self) -> Claim | None:
        """Judge the claimed level, where there is one."""
        if self.configuration.bound.claimed_level is None:
            return None
        from roa.basin.claim import judge

        return judge(self.configuration, self.bounds, self.target, self.integration, self.simulate, self.seed)


def _require_files(configuration: Configuration) -> None:
    """Look for the method and the design that the configuration names, before anything takes long."""
    from roa.kernel import methods
    from roa.sweep import designs

    faults = []
    for look_up, name in ((methods.load, configuration.sweep.method), (designs.load, configuration.sweep.design)):
        try:
            look_up(name)
        except UserError as error:
            faults += [f"{configuration.source}: {fault}" for fault in error.faults]
    if faults:
        raise UserError(faults)
