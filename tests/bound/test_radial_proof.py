"""Cubic loops of many states, whose radius is eliminated: closed forms, and random ones against dense samples."""

from decimal import Decimal

import numpy as np
import pytest
import sympy

from gallery import ball, configuration
from roa.bound.bounds import lyapunov_function
from roa.bound.contact_level import contact_level
from roa.bound.level_proof import LevelProver
from roa.bound.lyapunov_function import Quadratic
from roa.bound.radial_proof import radial
from roa.kernel.branch_and_bound import Answer
from roa.loop.equilibrium import find_equilibrium

ABOVE = (1e-9, 1e-6, 1e-3, 1e-2, 1.0)


def prover_of(given):
    return LevelProver(lyapunov_function(given, find_equilibrium(given.loop, "test")))


def decimal_text(value):
    """A sympy number with a finite decimal expansion, written out."""
    exact = Decimal(int(value.p)) / Decimal(int(value.q))
    assert sympy.Rational(str(exact)) == value
    return format(exact, "f")


def image_of_ball(n):
    """x' = L⁻¹SL x - (1 - x'L'Lx) x, B04 with a full L: the basin is x'L'Lx < 1, V = x'L'Lx falls just there."""
    rng = np.random.default_rng(n)
    L = sympy.eye(n) + sympy.Matrix(n, n, lambda i, j: sympy.Rational(int(rng.integers(-5, 6)), 10) if j > i else 0)
    S = sympy.Matrix(n, n, lambda i, j: (1 + i) * (j == i + 1) - (1 + j) * (i == j + 1))
    A, P = L.inv() * S * L, L.T * L
    x = [f"x{i}" for i in range(n)]
    form = " + ".join(f"({decimal_text(P[i, j])})*x{i}*x{j}" for i in range(n) for j in range(n) if P[i, j] != 0)
    linear = [" + ".join(f"({decimal_text(A[i, j])})*x{j}" for j in range(n) if A[i, j] != 0) for i in range(n)]
    matrix = "[" + ", ".join("[" + ", ".join(decimal_text(p) for p in P.row(i)) + "]" for i in range(n)) + "]"
    dynamics = [f"{linear[i]} - (1 - size)*x{i}" for i in range(n)]
    return configuration(x, dynamics, [(-9.0, 9.0)] * n, signals={"size": form}, bound=f"P = {matrix}")


@pytest.mark.parametrize(
    ("given", "level", "boxes"),
    [(ball(4), 0.5, 100), (ball(6), 0.5, 100), (image_of_ball(4), 1.0, 500), (image_of_ball(6), 1.0, 5000)],
)
def test_ball_and_its_linear_image_are_proved_up_to_their_contact_level(given, level, boxes):
    prover = prover_of(given)
    for share in (0.5, 0.99, 0.9999):
        found = prover.prove(share * level, 20_000)
        assert found.answer is Answer.PROVED
        assert found.boxes <= boxes
    for above in ABOVE:
        assert prover.prove((1 + above) * level, 2000).answer is not Answer.PROVED


def test_equilibrium_that_is_no_float_is_left_to_the_other_proof():
    names = ["x", "y", "z"]
    dynamics = [f"-({s} - 0.1) + ({s} - 0.1)**3" for s in names]
    given = configuration(names, dynamics, [(-2.0, 2.0)] * 3, equilibrium=dict.fromkeys(names, 0.1))
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    # The decimal 0.1 is none of the floats: at the nearest one f does not vanish.
    assert radial(V, V.centre, np.eye(3)) is None


@pytest.mark.parametrize("n", [3])
def test_random_cubic_loops_are_proved_below_and_never_above_what_rays_find(n):
    """Quadratic and cubic terms of all kinds; the estimate errs upwards only, and a dense sample has the last word."""
    rng = np.random.default_rng(n)
    names = [f"x{i}" for i in range(n)]
    proved = 0
    for _ in range(3):

        def terms():
            picked = [rng.choice(names, rng.integers(2, 4)) for _ in range(4)]
            return " + ".join(f"({rng.normal():.3f})*" + "*".join(factors) for factors in picked)

        given = configuration(
            names, [f"-({rng.uniform(0.5, 2):.2f})*{x} + {terms()}" for x in names], [(-9.0, 9.0)] * n
        )
        factor = rng.normal(size=(n, n)) * 0.2 + np.eye(n)
        V = Quadratic(given.loop, np.zeros(n), factor @ factor.T)
        level = contact_level(V).level
        by_direction = radial(V, np.zeros(n), np.linalg.inv(np.linalg.cholesky(V.P)).T)
        whitened = np.linalg.inv(np.linalg.cholesky(V.P)).T
        sphere = rng.normal(size=(20_000, n))
        sphere *= rng.uniform(size=(20_000, 1)) ** (1 / n) / np.linalg.norm(sphere, axis=1, keepdims=True)
        for share in (0.9, 1.001, 1.2):
            if by_direction.prove(share * level, 3000).answer is not Answer.PROVED:
                continue
            assert share < 1
            assert np.all(V.decrease(np.sqrt(share * level) * sphere @ whitened.T) < 0)
            proved += 1
    assert proved == 3
