"""Proved levels of random loops, tried at many points: V̇ < 0 on the set, which lies in the domain."""

import numpy as np
import pytest

import gallery
from roa.bound.lyapunov_equation import solve_lyapunov
from roa.bound.lyapunov_function import Quadratic
from roa.bound.norm_bound import norm_bound
from roa.loop.equilibrium import find_equilibrium

# {0} and {1} vanish at the equilibrium; the last three have a pole, a root and a logarithm near it.
TERMS = (
    "{0}*{1}", "{0}**3", "sin(3*{0})", "(1 - cos({0}))", "tanh(2*{0})*{1}", "clip({0}, -0.1, 0.3)", "abs({0})*{1}",
    "min({0}, {1})", "max({0}, 2*{1})", "deadzone({0}, 0.2)", "where({0} < {1}, {0}, 0.3*{1})", "sign({0} - 0.4)*{1}",
    "atan2({0}, 1 + {1})", "abs({0})**1.3", "(exp({0}) - 1)", "{0}*{1}/(0.6 - {0})",
    "sqrt(0.5 + {0})*{1}", "log(1 + {0})",
)  # fmt: skip


def random_loop(rng, n):
    """A stable linear part about an equilibrium at short decimals, most of them no floats, and a few terms."""
    centre = [str(rng.choice(["0", "0.1", "-0.7", "1.3"])) for _ in range(n)]
    y = [f"(x{i} - ({value}))" for i, value in enumerate(centre)]
    matrix = rng.normal(size=(n, n))
    matrix -= (np.linalg.eigvals(matrix).real.max() + 10 ** rng.uniform(-1, 1)) * np.eye(n)
    formulas = []
    for row in matrix:
        linear = " + ".join(f"({entry:.3f})*{offset}" for entry, offset in zip(row, y, strict=True))
        terms = [str(term).format(*rng.choice(y, 2)) for term in rng.choice(TERMS, 2)]
        formulas.append(f"{linear} + ({0.4 * rng.normal():.3f})*{terms[0]} + ({0.4 * rng.normal():.3f})*{terms[1]}")
    domain = [(float(value) - rng.uniform(0.05, 1), float(value) + rng.uniform(0.05, 1)) for value in centre]
    names = [f"x{i}" for i in range(n)]
    guess = {name: float(value) for name, value in zip(names, centre, strict=True)}
    return gallery.configuration(names, formulas, domain, equilibrium=guess).loop


@pytest.mark.parametrize("n", [1, 2, 3])
def test_v_decreases_all_over_every_proved_set(n, monkeypatch):
    """Seen from outside the proof: V̇ by numpy at points spread over the set, many of them near its boundary."""
    monkeypatch.setattr("roa.bound.grow_ball.WORK", 2e6)  # a smaller ball is as true as a larger one
    proved = 0
    for seed in range(10):
        rng = np.random.default_rng([n, seed])
        loop = random_loop(rng, n)
        equilibrium = find_equilibrium(loop, "random")
        if equilibrium.stability != "stable":
            continue
        shape = rng.normal(size=(n, n)) if seed % 2 else np.zeros((n, n))
        V = Quadratic(loop, equilibrium.x, solve_lyapunov(equilibrium.A, np.eye(n) + shape @ shape.T))
        level = norm_bound(V).level
        if level == 0:
            continue
        proved += 1
        ball = rng.normal(size=(4000, n))
        ball *= (rng.random(4000) ** rng.choice([0.02, 1.0], 4000) / np.linalg.norm(ball, axis=1))[:, None]
        x = V.centre + np.sqrt(level) * (1 - 1e-9) * ball @ np.linalg.inv(np.linalg.cholesky(V.P))
        assert ((x >= loop.box[:, 0]) & (x <= loop.box[:, 1])).all(), seed
        apart = np.linalg.norm(ball, axis=1) > 1e-4  # nearer to the equilibrium, rounding decides the sign
        decrease = V.decrease(x[apart])
        assert (decrease < 0).all(), (seed, x[apart][~(decrease < 0)][0])
    assert proved >= 3
