"""What trajectories end at, each with its share: the equilibrium, others, cycles, and what is none of these."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from roa.basin.intervals import Interval
from roa.basin.recurrence import Cycle, cycle_from
from roa.basin.share import Share
from roa.basin.tally import in_rounds
from roa.bound.statement import Strength
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.loop.equilibrium import Equilibrium, equilibria_beside
from roa.loop.model import Loop
from roa.sweep.designs.sobol import Sobol
from roa.sweep.samples import Samples

Array = NDArray[np.float64]

# Unresolved starts that are followed further, and time that they are followed for, in horizons.
FOLLOWED, HORIZONS = 3, 4.0
# Two cycles are one where their periods agree so well, relative.
SAME_PERIOD = 0.01
# Coordinates of an unstable equilibrium that are smaller are zero to Newton, in half-widths.
NEWTON = 1e-12
# Starts of the search for equilibria that attract nothing; of no sweep: a seed of their own.
STARTS, SEED = 1024, 2**61 - 5


@dataclass(frozen=True)
class Attractor:
    """Something that trajectories end at.

    Attributes
    ----------
    name : in words
    kind : "equilibrium", "cycle" or "none"
    at : float64 (n,), state units; None but for an equilibrium
    stability : of an equilibrium
    count : starts that end there
    share : of the samples; NaN where these are not spread evenly over the domain
    interval : of the share, None where there is no share
    period : s, of a cycle
    """

    name: str
    kind: str
    at: Array | None
    stability: str
    count: int
    share: float
    interval: Interval | None
    period: float | None = None

    @property
    def document(self) -> dict[str, Any]:
        """As plain values."""
        return {
            "name": self.name,
            "kind": self.kind,
            "at": self.at,
            "stability": self.stability,
            "count": self.count,
            "share": self.share,
            "interval": None if self.interval is None else [self.interval.low, self.interval.high],
            "period": self.period,
            "strength": Strength.SIMULATED,
        }


def attractors(
    samples: Samples, loop: Loop, equilibrium: Equilibrium, target: Target, integration: Integration, confidence: float
) -> tuple[Attractor, ...]:
    """Count in one pass over the samples where they end, and look for what the unresolved ones do."""
    places = np.concatenate([equilibrium.x[None], target.elsewhere.reshape(-1, loop.n)])
    shares = [Share(samples.design, samples.replicates) for _ in range(len(places) + 1)]
    lingering: list[Array] = []
    for first, trajectories in samples.chunks():
        settled = trajectories.outcome == Outcome.SETTLED_ELSEWHERE
        offset = (trajectories.final[:, None] - places[1:]) / loop.half_widths
        nearest = np.linalg.norm(offset, axis=2).argmin(axis=1) if len(places) > 1 else np.zeros(len(settled), int)
        unresolved = trajectories.outcome == Outcome.UNRESOLVED
        shares[0].add(first, trajectories.in_basin)
        for k in range(len(places) - 1):
            shares[1 + k].add(first, settled & (nearest == k))
        shares[-1].add(first, unresolved)
        lingering += list(trajectories.final[unresolved][: FOLLOWED - len(lingering)])
    evenly = not in_rounds(samples)

    def one(name: str, kind: str, share: Share, at: Array | None, stability: str, period: float | None) -> Attractor:
        interval = share.interval(loop.n, confidence) if evenly else None
        value = share.fraction if evenly else float("nan")
        return Attractor(name, kind, at, stability, int(share.hits.sum()), value, interval, period)

    found = [one("the equilibrium", "equilibrium", shares[0], equilibrium.x, equilibrium.stability, None)]
    found += [
        one("another equilibrium", "equilibrium", share, place, "stable", None)
        for place, share in zip(places[1:], shares[1:-1], strict=True)
    ]
    if shares[-1].hits.sum():
        name, kind, period = _of_the_unresolved(lingering, loop, integration)
        found.append(one(name, kind, shares[-1], None, "", period))
    return tuple(found) + _that_attract_nothing(loop, equilibrium)


def _of_the_unresolved(lingering: list[Array], loop: Loop, integration: Integration) -> tuple[str, str, float | None]:
    """What the unresolved starts are called, by those of them that were followed further."""
    duration = HORIZONS * integration.horizon
    cycles = [cycle_from(loop, end, duration, integration.escape) for end in lingering]
    known: list[Cycle] = [cycle for cycle in cycles if cycle is not None]
    if not known:
        return f"unresolved: none of {len(cycles)} followed further comes back to where it was", "none", None
    periods: list[float] = []
    for cycle in known:
        if all(abs(cycle.period - period) > SAME_PERIOD * period for period in periods):
            periods.append(cycle.period)
    words = " or ".join(f"{period:.4g} s" for period in periods)
    name = f"unresolved: periodic, period {words}"
    if len(known) < len(cycles):
        name += f" ({len(known)} of {len(cycles)} followed further)"
    return name, "cycle", periods[0] if len(periods) == 1 else None


def _that_attract_nothing(loop: Loop, equilibrium: Equilibrium) -> tuple[Attractor, ...]:
    """Equilibria inside the domain that are not stable: no attractors, but where edges run."""
    if loop.hold:
        return ()
    starts = Sobol(loop.box, SEED, 1, STARTS).points(0, STARTS)
    others = [one for one in equilibria_beside(loop, equilibrium, starts) if one.stability != "stable"]
    others.sort(key=lambda one: tuple(one.x))
    return tuple(
        Attractor(
            f"an equilibrium that is {one.stability}",
            "equilibrium",
            np.where(np.abs(one.x) < NEWTON * loop.half_widths, 0.0, one.x),
            one.stability,
            0,
            0.0,
            None,
        )
        for one in others
    )
