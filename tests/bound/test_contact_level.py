"""The contact level against loops whose answer is known in closed form, and its witness."""

import numpy as np
import pytest

from gallery import ball, configuration, cubic, product, van_der_pol
from roa.bound.bounds import lyapunov_function
from roa.bound.contact_level import contact_level
from roa.bound.lyapunov_function import FormulaV, Quadratic
from roa.bound.statement import Strength
from roa.loop.equilibrium import find_equilibrium


def contact_of(configuration):
    return contact_level(lyapunov_function(configuration, find_equilibrium(configuration.loop, "test")))


def with_formula(configuration, text):
    loop = configuration.loop
    return FormulaV(loop, find_equilibrium(loop, "test").x, parsed(text, loop), text)


def parsed(text, loop):
    return configuration(
        list(loop.states), ["-" + s for s in loop.states], [(-1.0, 1.0)] * loop.n, bound=f'V = "{text}"'
    ).bound.V


def test_one_state():
    """x' = -x + x^3 with V = x^2/2: V̇ = -x^2 (1 - x^2), so the level is 1/2."""
    bound = contact_of(cubic())
    assert bound.level == pytest.approx(0.5, rel=1e-9)
    assert bound.strength is Strength.ESTIMATED
    assert abs(bound.contact[0]) == pytest.approx(1)


@pytest.mark.parametrize("n", [2, 4])
def test_ball(n):
    """V = |x|^2/2 decreases exactly on the unit ball."""
    assert contact_of(ball(n)).level == pytest.approx(0.5, rel=1e-9)


def test_witness_lies_on_the_level_set_where_the_decrease_ends():
    bound = contact_of(van_der_pol())
    assert bound.V.value(bound.contact) == pytest.approx(bound.level, rel=1e-9)
    assert abs(bound.V.decrease(bound.contact)) < 1e-9
    assert bound.V.decrease(bound.contact * 1.001) > 0
    assert "V̇ reaches zero at x = 0.85592" in bound.note or "x = -0.85592" in bound.note


def test_a_face_can_be_what_limits_it():
    """A linear loop decreases everywhere: the level is that of the touched face, dist^2 / (P^-1)_ii."""
    given = configuration(["x", "y"], ["-x + y", "-2*y"], [(-1.0, 2.0), (-3.0, 3.0)])
    bound = contact_of(given)
    inverse = np.linalg.inv(bound.V.P)
    assert bound.level == pytest.approx(1 / inverse[0, 0], rel=1e-12)
    assert bound.contact[0] == pytest.approx(-1)
    assert "face x = -1" in bound.note


def test_formula_agrees_with_the_quadratic_that_it_is():
    given = product()
    quadratic = Quadratic(given.loop, np.zeros(2), np.diag([1.0, 2.0]))
    formula = with_formula(given, "x1**2 + 2*x2**2")
    assert contact_level(formula).level == pytest.approx(contact_level(quadratic).level, rel=1e-6)


def test_formula_stops_at_a_face():
    """V = 1 - exp(-x^2 - y^2) on a linear loop, box of half-widths 1 and 2: the level is 1 - 1/e."""
    given = configuration(["x", "y"], ["-x", "-y"], [(-1.0, 1.0), (-2.0, 2.0)])
    bound = contact_level(with_formula(given, "1 - exp(-x**2 - y**2)"))
    assert bound.level == pytest.approx(1 - np.exp(-1), rel=1e-9)
    assert "face x =" in bound.note


def test_formula_that_rises_and_falls_is_followed_to_its_first_end():
    """V = x^2 (x - 2)^2 rises to 1 at x = 1, where V̇ = V' f vanishes, and must not be entered from its far well."""
    given = configuration(["x"], ["-x"], [(-0.5, 3.0)])
    bound = contact_level(with_formula(given, "x**2*(x - 2)**2"))
    assert bound.level == pytest.approx(1, rel=1e-6)


@pytest.mark.parametrize("P", [np.eye(2), np.array([[1.0, 0.4], [0.4, 1.0]])])
def test_no_level_where_the_decrease_fails_next_to_the_equilibrium(P):
    """With A = [[0, -1], [1, -1]] the matrix -(A'P + PA) is semidefinite for P = I, and indefinite for the other."""
    bound = contact_level(Quadratic(van_der_pol().loop, np.zeros(2), P))
    assert bound.level == 0
    assert "fails next to the equilibrium" in bound.note


def test_no_level_for_a_shape_that_is_not_positive_definite():
    assert contact_level(Quadratic(van_der_pol().loop, np.zeros(2), np.diag([1.0, -1.0]))).level == 0


def test_a_pole_ends_a_ray():
    given = configuration(["x", "y"], ["-x/(1 - x)", "-y"], [(-3.0, 3.0)] * 2)
    level = contact_level(Quadratic(given.loop, np.zeros(2), np.eye(2))).level
    assert level == pytest.approx(1, rel=1e-9)


def test_same_answer_every_time():
    assert contact_of(van_der_pol()).level == contact_of(van_der_pol()).level
