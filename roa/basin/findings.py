"""What is looked for beside the sweep, by trajectories of its own: weak starts, attractors, an audit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from roa.basin import frontier
from roa.basin.attractors import Attractor, attractors
from roa.basin.audit import BY_DEFAULT, Audit, audit
from roa.basin.claim import replay_command
from roa.basin.frontier import Height, Lowest, Run
from roa.bound.lyapunov_function import LyapunovFunction
from roa.bound.statement import Bound, Strength
from roa.kernel.integration import Integration
from roa.kernel.outcomes import IN_BASIN, Outcome
from roa.kernel.target import Target
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium
from roa.sweep.samples import Samples

# Trajectories that each search may run.
BUDGET = 1000
STREAM = (1, 8)
# Of a verdict without a sweep.
NOTHING_FOUND: dict[str, Any] = {
    "weakest": None,
    "nearest": None,
    "over_limit": None,
    "attractors": [],
    "audit": None,
}


@dataclass(frozen=True)
class Findings:
    """What was found.

    Attributes
    ----------
    weakest : the start of lowest V that does not converge; None where none was found
    nearest : the start nearest to the equilibrium, in half-widths of the domain, that does not converge
    over_limit : the start of lowest V that converges over a limit
    attractors : what trajectories end at
    audit : stored starts integrated again
    """

    weakest: Lowest | None
    nearest: Lowest | None
    over_limit: Lowest | None
    attractors: tuple[Attractor, ...]
    audit: Audit

    def lower(self, bound: Bound | None, V: LyapunovFunction) -> Bound | None:
        """The unfalsified level by the samples, or by the weakest start where that lies lower."""
        if self.weakest is None or (bound is not None and bound.level <= self.weakest.height):
            return bound
        note = "A start that a directed search found lies on this level and does not converge, by two integrators."
        return Bound("unfalsified level", V, self.weakest.height, Strength.SIMULATED, note)

    def document(self, configuration: Configuration) -> dict[str, Any]:
        """As plain values, for the verdict."""
        nearest = _start(configuration, self.nearest)
        if nearest is not None and self.nearest is not None:
            nearest |= {"distance": float(np.sqrt(self.nearest.height)), "norm": "half-widths of the domain"}
        return {
            "weakest": _start(configuration, self.weakest),
            "nearest": nearest,
            "over_limit": _start(configuration, self.over_limit),
            "attractors": [one.document for one in self.attractors],
            "audit": self.audit.document,
        }


def look_further(
    configuration: Configuration,
    equilibrium: Equilibrium,
    V: LyapunovFunction,
    target: Target,
    integration: Integration,
    samples: Samples,
    run: Run,
    seed: int,
) -> Findings:
    """Look for what the sweep alone does not say; equal arguments give equal findings.

    `run` is the lanes, starts float64 (m, n) -> Trajectories; `seed` that of the searches.
    """
    loop, confidence = configuration.loop, configuration.verdict.confidence

    def lowest(height: Height, key: int, against: tuple[Outcome, ...]) -> Lowest | None:
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(*STREAM, key)))
        found = frontier.lowest(height, run, lambda rows: np.isin(rows.outcome, against), BUDGET, rng)
        if found is None:
            return None
        return frontier.confirmed(height, found, target, integration, lambda one: one.outcome in against)

    outside = tuple(outcome for outcome in Outcome if outcome not in IN_BASIN)
    over_limit = (Outcome.CONVERGED_OVER_LIMIT,)

    return Findings(
        weakest=lowest(Height(loop, equilibrium.x, V), 0, outside),
        nearest=lowest(Height(loop, equilibrium.x), 1, outside),
        over_limit=lowest(Height(loop, equilibrium.x, V), 2, over_limit) if loop.limits else None,
        attractors=attractors(samples, loop, equilibrium, target, integration, confidence),
        audit=audit(samples, loop, target, integration, BY_DEFAULT, seed, confidence),
    )


def _start(configuration: Configuration, found: Lowest | None) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "initial": found.start,
        "height": found.height,
        "outcome": found.decision.outcome.word,
        "time": found.decision.time,
        "trajectories": found.trajectories,
        "replay": replay_command(configuration, found.start),
        "strength": Strength.SIMULATED,
    }
