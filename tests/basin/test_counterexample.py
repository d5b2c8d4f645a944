"""What may count as a counterexample: a start that verifiably lies in the claimed set, whatever it does."""

from dataclasses import replace

import numpy as np

import gallery
from roa.basin.claimed_set import ClaimedSet
from roa.basin.counterexample import confirm
from roa.basin.independent import decide
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=200.0, escape=10.0)


def test_start_outside_the_claimed_set_is_none():
    # Every start beyond the unit circle escapes; (1.05, 0) has V = 1.1025.
    loop = gallery.ball(2).loop
    V = Quadratic(loop, np.zeros(2), np.eye(2))
    target = Target("level", np.zeros(2), loop.half_widths, P=np.eye(2), level=0.0625)
    starts = np.array([[1.05, 0.0]])
    assert confirm(ClaimedSet(V, 1.1), starts, target, SETTINGS) is None
    found = confirm(ClaimedSet(V, 1.2), starts, target, SETTINGS)
    assert found is not None
    assert (found.decision.outcome, found.initial.tolist()) == (Outcome.ESCAPED, [1.05, 0.0])


def test_start_that_is_still_moving_is_none():
    loop = gallery.ball(2).loop
    V = Quadratic(loop, np.zeros(2), np.eye(2))
    target = Target("level", np.zeros(2), loop.half_widths, P=np.eye(2), level=0.0625)
    soon = replace(SETTINGS, horizon=0.5, longest=0.5)
    # From |x| = .99 the target |x| = .25 is reached after 3.3 s, the escape box never (computed independently).
    start = np.array([0.99, 0.0])
    assert decide(loop, target, soon, start, 1e-7, 1e-10).outcome is Outcome.UNRESOLVED
    assert confirm(ClaimedSet(V, 1.1), start[None], target, soon) is None
