"""Random loops with kinks: wherever a level is proved, no point of a dense sample contradicts it."""

import numpy as np
import pytest

from gallery import configuration
from roa.bound.contact_level import contact_level
from roa.bound.level_proof import LevelProver
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.branch_and_bound import Answer

TERMS = (
    "{a}*{x}*{y}",
    "{a}*{x}**2",
    "{a}*{x}**3",
    "{a}*sin({x})*{y}",
    "clip({a}*{x} + {b}*{y}, -0.3, 0.4)",
    "{a}*{x}*abs({y})",
    "{a}*min({x}, {y}**2)",
    "{a}*max({b}*{x}, {x}*{y})",
    "{a}*abs({x} - 0.2)*{y}",
    "{a}*(exp({x}) - 1)*{y}",
)


def random_loop(rng, n):
    names = [f"x{i}" for i in range(n)]

    def term():
        x, y = rng.choice(names, 2)
        a, b = (round(float(value), 3) for value in rng.uniform(-1.5, 1.5, 2))
        return str(rng.choice(TERMS)).format(a=f"({a})", b=f"({b})", x=x, y=y)

    dynamics = [f"-2*{x} + {term()} + {term()}" for x in names]
    return configuration(names, dynamics, [(-2.5, 2.5)] * n)


@pytest.mark.parametrize("n", [1, 2, 3])
def test_no_point_contradicts_a_proof(n):
    rng = np.random.default_rng(n)
    proved = 0
    for _ in range(5):
        loop = random_loop(rng, n).loop
        factor = rng.normal(size=(n, n)) * 0.3 + np.eye(n)
        V = Quadratic(loop, np.zeros(n), factor @ factor.T)
        prover, level = LevelProver(V), contact_level(V).level
        directions = rng.normal(size=(5000, n))
        whitened = np.linalg.inv(np.linalg.cholesky(V.P)).T
        radius = rng.uniform(size=(5000, 1)) ** (1 / n)
        ball = radius * directions / np.linalg.norm(directions, axis=1, keepdims=True) @ whitened.T
        for share in (1.01, 0.99, 0.7):
            if level == 0 or prover.prove(share * level, 1500).answer is not Answer.PROVED:
                continue
            assert share < 1.001
            assert np.all(V.decrease(np.sqrt(share * level) * ball) < 0)
            proved += 1
    assert proved >= 2
