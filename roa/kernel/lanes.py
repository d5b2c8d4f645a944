"""Many trajectories at once: the compiled lanes of one loop, ready to run starts."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.kernel import generated, methods
from roa.kernel.integration import Integration
from roa.kernel.lane_source import lane_source
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.evaluate import evaluate
from roa.loop.model import Loop
from roa.loop.sampled import SampledLoop

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Lanes:
    """The compiled lane loop with everything that it needs but the starts.

    Attributes
    ----------
    loop, target, integration : what is simulated, until when, and how accurately
    constants : float64 (k,), values of the subtrees over parameters and numbers; with a hold also its period and
        delay, and the held signals at the equilibrium
    """

    loop: Loop
    target: Target
    integration: Integration
    constants: Array
    _advance: Callable[..., None]

    def run(self, initial: Array) -> Trajectories:
        """Integrate starts to their decisions; releases the interpreter lock.

        A start's result depends on that start alone: not on its lane, its neighbours or their number.

        Parameters
        ----------
        initial : float64 (m, n), state units
        """
        points = np.ascontiguousarray(initial, dtype=np.float64)
        m, n = points.shape
        result = Trajectories(
            initial=points,
            outcome=np.zeros(m, np.uint8),
            time=np.empty(m),
            final=np.empty((m, n)),
            peak=np.empty((m, n)),
            steps=np.empty(m, np.int32),
            reason=np.empty(m, np.uint8),
        )
        loop, target, integration = self.loop, self.target, self.integration
        self._advance(
            points,
            self.constants,
            np.ascontiguousarray(target.centre),
            np.ascontiguousarray(target.half_widths),
            loop.centre,
            loop.half_widths * integration.escape,
            np.array([[float(low), float(high)] for low, high in loop.limits.values()]).reshape(-1, 2),
            np.zeros((n, n)) if target.P is None else np.ascontiguousarray(target.P),
            target.level,
            np.ascontiguousarray(target.elsewhere, dtype=np.float64).reshape(-1, n),
            target.radius,
            target.dwell,
            integration.rtol,
            integration.atol,
            integration.longest,
            integration.step_cap,
            result.outcome,
            result.time,
            result.final,
            result.peak,
            result.steps,
            result.reason,
        )
        return result


def are_compiled(loop: Loop, target: Target, integration: Integration) -> bool:
    """Whether `compile_lanes` will find its machine code in the cache."""
    return generated.is_cached(lane_source(loop, methods.load(integration.method), target).text)


def code_digest(loop: Loop, target: Target, integration: Integration) -> str:
    """SHA-256 of the generated module, hexadecimal: another one may give other bits for the same start."""
    text = lane_source(loop, methods.load(integration.method), target).text
    return hashlib.sha256(text.encode()).hexdigest()


def compile_lanes(loop: Loop, target: Target, integration: Integration) -> Lanes:
    """Generate and compile the lane loop, or take it from the cache (seconds cold, a moment warm)."""
    source = lane_source(loop, methods.load(integration.method), target)
    values = loop.values_of(loop.centre)
    constants = np.array([float(evaluate(tree, values)) for tree in source.constants], dtype=np.float64)
    if loop.hold is not None:
        rest = SampledLoop(loop).command(target.centre)
        constants = np.concatenate([constants, [loop.hold.T, loop.hold.tau], rest])
    return Lanes(loop, target, integration, constants, generated.load(source.text).advance)
