"""The lanes against scipy's DOP853 at tight tolerance, on loops that use every function of the formula language."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import gallery
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target

SETTINGS = Integration("tsitouras5", rtol=1e-8, atol=1e-11, horizon=20.0, longest=4.0, escape=1.2)
LEVEL = 1e-4
# {0} and {1} vanish at the equilibrium; all are defined in the escape box.
TERMS = (
    "sin({0})*{1}", "cos({0})*{1}", "tan(0.3*{0})", "asin({0}/5)*{1}", "acos({0}/5)*{1}", "atan({0})*{1}",
    "atan2({1}, 5 + {0})", "sinh({0})", "(cosh({0}) - 1)", "tanh({0})*{1}", "(exp(0.5*{0}) - 1)", "log(5 + {0})*{1}",
    "sqrt(5 + {0})*{1}", "abs({0})*{1}", "sign({0})*{0}", "min({0}, {1})", "max({0}, 2*{1})",
    "clip({0}, -0.5, 0.7)", "deadzone({0}, 0.2)", "where({0} < {1}, {1}, {0})", "{0}**3", "(5 + {0})**1.5*{1}",
    "(5 + {0})**-0.5*{1}", "(5 + {0})**0.3*{1}", "{1}/(5 + {0})", "{0}*{1}",
)  # fmt: skip


def loop_of(terms, rng, centre):
    """One term of every kind, dealt out to the states; weak decay, so that every outcome is there."""
    n = len(centre)
    names = [f"x{i}" for i in range(n)]
    y = [f"({name} - ({value!r}))" for name, value in zip(names, centre, strict=True)]
    formulas = [f"-{rng.uniform(1.0, 2.0):.2f}*{offset}" for offset in y]
    for k, term in enumerate(terms):
        formulas[k % n] += f" + ({rng.uniform(-0.7, 0.7):.2f})*" + term.format(*rng.permutation(y)[:2])
    domain = [(value - 4.0, value + 4.0) for value in centre]
    return gallery.configuration(names, formulas, domain, equilibrium=dict(zip(names, centre, strict=True))).loop


def follow(loop, start, duration, **options):
    """A first step of our own: scipy's never ends where the dynamics stop next to the start."""
    first = min(1e-6, duration)
    settings = {"method": "DOP853", "rtol": 1e-9, "atol": 1e-12, "first_step": first, **options}
    with np.errstate(all="ignore"):
        return solve_ivp(lambda _, x: loop.rhs(x), (0, duration), start, **settings)


def by_scipy(loop, centre, start):
    """Outcome and time of one start, from events that scipy locates on its own interpolant."""
    low, high = (loop.centre + sign * SETTINGS.escape * loop.half_widths for sign in (-1, 1))

    def level(_, x):
        return ((x - centre) ** 2).sum() - LEVEL

    def face(_, x):
        return np.minimum(x - low, high - x).min()

    level.terminal = face.terminal = True
    path = follow(loop, start, SETTINGS.longest, events=[level, face])
    ended = [Outcome.CONVERGED] * len(path.t_events[0]) + [Outcome.ESCAPED] * len(path.t_events[1])
    return (ended or [Outcome.UNRESOLVED if path.status == 0 else Outcome.FAILED])[0], path.t[-1]


@pytest.mark.parametrize("part", [0, 1])
def test_outcomes_and_times_are_those_of_scipy(part):
    rng = np.random.default_rng(part)
    centre = np.array([[0.3, -0.7, 0.0, 1.1], [0.0, 0.2, 0.0, 0.0]][part])
    loop = loop_of(TERMS[part::2], rng, centre.tolist())
    target = Target("level", centre, loop.half_widths, P=np.eye(4), level=LEVEL)
    result = compile_lanes(loop, target, SETTINGS).run(centre + rng.uniform(-3.9, 3.9, (8, 4)))
    assert (result.peak >= np.abs(result.initial - centre)).all()
    assert (result.peak >= np.abs(result.final - centre)).all()
    for i in range(8):
        outcome, start = Outcome(int(result.outcome[i])), result.initial[i]
        if not np.isfinite(loop.rhs(start)).all():
            assert outcome is Outcome.FAILED, i
            continue
        expected, time = by_scipy(loop, centre, start)
        if Outcome.FAILED in (outcome, expected):  # where the formulas end, either may see it first
            assert {outcome, expected} <= {Outcome.FAILED, Outcome.ESCAPED}, i
            continue
        assert outcome is expected, i
        assert result.time[i] >= time - 1e-6, i  # the lanes look at the ends of their steps alone
        if result.time[i] == 0:
            continue
        path = follow(loop, start, result.time[i])
        np.testing.assert_allclose(result.final[i], path.y[:, -1], rtol=1e-5, atol=1e-6)
