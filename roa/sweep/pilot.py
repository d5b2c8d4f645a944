"""A few trajectories before the sweep: where else the loop comes to rest, and how much work a start is.

The pilot is a function of the configuration alone, never of the machine's speed, because what it finds (the other
equilibria, the size of a block) decides what is stored.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from decimal import Decimal

import numpy as np
from numpy.typing import NDArray

from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.loop.equilibrium import Equilibrium, other_equilibria
from roa.loop.model import Loop
from roa.sweep.designs.sobol import Sobol

Array = NDArray[np.float64]

STARTS = 256
# The pilot's points are not those of any sweep: a seed of its own.
SEED = 2**61 - 1
# Each watched equilibrium costs every step of every lane; what settles at one more is left unresolved.
MOST_WATCHED = 16


@dataclass(frozen=True)
class Pilot:
    """What the pilot saw.

    Attributes
    ----------
    elsewhere : float64 (k, n), other stable equilibria: in the domain by Newton from the starts, in the escape
        box by Newton from where unresolved trajectories linger
    steps : mean of accepted steps a start
    """

    elsewhere: Array
    steps: float


def run_pilot(loop: Loop, equilibrium: Equilibrium, target: Target, integration: Integration) -> Pilot:
    """Run the pilot for a target set without other equilibria."""
    starts = Sobol(loop.box, SEED, 1, STARTS).points(0, STARTS)
    trajectories = compile_lanes(loop, target, integration).run(starts)
    lingering = trajectories.final[trajectories.outcome == Outcome.UNRESOLVED]
    inside = other_equilibria(loop, equilibrium, starts)
    reached = other_equilibria(_on_escape_box(loop, integration.escape), equilibrium, lingering)
    outside = reached[(np.abs(reached - loop.centre) > loop.half_widths).any(axis=1)]
    return Pilot(np.concatenate([inside, outside])[:MOST_WATCHED], float(trajectories.steps.mean()))


def _on_escape_box(loop: Loop, escape: float) -> Loop:
    centre, half = loop.centre, loop.half_widths * escape
    box = tuple(
        (Decimal(float(low)), Decimal(float(high))) for low, high in zip(centre - half, centre + half, strict=True)
    )
    return replace(loop, domain=box)
