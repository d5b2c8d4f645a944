"""What `method = "auto"` stands for: the method whose steps cost least for some starts, in right-hand sides.

The rule counts, and looks at no clock, so that one configuration has one answer. Nothing is compiled for it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from roa.kernel import methods
from roa.kernel.integration import Integration
from roa.kernel.step_count import count_attempts, right_hand_sides
from roa.kernel.target import Target
from roa.loop.equilibrium import Equilibrium
from roa.loop.expression import Call, Lookup, walk
from roa.loop.model import Loop
from roa.sweep.designs.sobol import Sobol

Array = NDArray[np.float64]

STARTS = 64
# The pilot's points are not those of any sweep, nor of the pilot that looks for other equilibria.
SEED = 2**61 - 2
# Attempts a start: a stiff loop shows long before, and one that never comes to rest costs no more.
MOST = 1000
# A loop whose quickest decay is this many times quicker than the slowest may be stiff: an explicit method, stable to
# about three times the quickest time constant, then takes some thirty steps over the slowest one, as it would anyway.
SUSPECT = 100.0
# What another method must cost of the usual one: a start that is quicker by less is not worth a longer compilation.
WORTH = 0.7
# Down to what tolerance the higher order is tried.
HIGH_ORDER, HIGH_ORDER_RTOL = "dormand_prince8", 1e-6
STIFF = "rodas4"
CONFIGURED = "as configured"
KINKED = {"abs", "sign", "min", "max", "clip", "deadzone", "where"}


@dataclass(frozen=True)
class Choice:
    """A method and why it was taken, in words."""

    method: str
    why: str

    @property
    def document(self) -> dict[str, str]:
        """Both as they stand in `verdict.json`."""
        return {"method": self.method, "why": self.why}


def choose(loop: Loop, equilibrium: Equilibrium, target: Target, integration: Integration) -> Choice:
    """Choose the method for a loop; a function of the configuration alone.

    Parameters
    ----------
    target : without other equilibria
    integration : tolerances and ends; its method has no say
    """
    usual = methods.AUTO
    if loop.hold is not None:
        return Choice(usual, "steps end at every sample of the hold")
    starts = Sobol(loop.box, SEED, 1, STARTS).points(0, STARTS)
    suspected = _may_be_stiff(loop, equilibrium, starts, integration.horizon)
    others = [HIGH_ORDER] if _has_high_order(loop, integration.rtol) else []
    others += [STIFF] if suspected else []
    if not others:
        return Choice(usual, "not stiff, and with kinks, limits or a loose tolerance no higher order pays")
    costs = _costs(loop, target, replace(integration, method=usual), [usual, *others], starts)
    best = min(costs, key=lambda name: costs[name])
    chosen = best if costs[best] <= WORTH * costs[usual] else usual
    counted = ", ".join(f"{name} {cost:,.0f}" for name, cost in costs.items())
    return Choice(chosen, f"right-hand sides a start in a pilot (estimated): {counted}")


def is_smooth(loop: Loop) -> bool:
    """Whether no formula of the loop has a kink, a jump or a look-up table."""
    parts = (part for tree in (*loop.signals.values(), *loop.dynamics) for part in walk(tree))
    return not any(isinstance(part, Lookup) or (isinstance(part, Call) and part.function in KINKED) for part in parts)


def _has_high_order(loop: Loop, rtol: float) -> bool:
    """Long steps of high order are for smooth loops; with limits the curve between the ends of a step counts too."""
    return rtol <= HIGH_ORDER_RTOL and not loop.limits and is_smooth(loop)


def _may_be_stiff(loop: Loop, equilibrium: Equilibrium, starts: Array, horizon: float) -> bool:
    """Whether somewhere some mode decays very much quicker than the slowest one at the equilibrium."""
    with np.errstate(all="ignore"):
        slopes = loop.jacobian(np.concatenate([equilibrium.x[None], starts]))
    finite = np.isfinite(slopes).all(axis=(1, 2))
    quickest = float(np.max(-np.linalg.eigvals(slopes[finite]).real, initial=0.0))
    return bool(quickest * min(equilibrium.slowest_time_constant, horizon) > SUSPECT)


def _costs(loop: Loop, target: Target, integration: Integration, names: list[str], starts: Array) -> dict[str, float]:
    """Right-hand sides a start of each method, over the stretch that the first of them covers; else inf."""
    until = np.full(len(starts), integration.longest)
    costs = {}
    for name in names:
        tableau = methods.load(name)
        counted = count_attempts(loop, tableau, starts, target, integration, MOST, until)
        behind = name != names[0] and bool((counted.attempts >= MOST).any() and (counted.time < until * 0.999).any())
        costs[name] = np.inf if behind else float(counted.attempts.mean()) * right_hand_sides(tableau, loop.n)
        until = counted.time if name == names[0] else until
    return costs
