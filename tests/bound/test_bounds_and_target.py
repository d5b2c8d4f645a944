"""What a configuration leads to: V, its bounds, the target set of its sweep, volumes, facts about points."""

from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest

from gallery import ball, configuration, double_well, product, van_der_pol
from roa.bound.bounds import derive_bounds, lyapunov_function
from roa.bound.lyapunov_function import FormulaV, Quadratic
from roa.bound.point_checks import decrease_witness, member
from roa.bound.target_set import target_set, watching
from roa.bound.volume import ellipsoid_volume, fits_domain, volume_inside
from roa.loop.equilibrium import find_equilibrium


def prepared(given):
    equilibrium = find_equilibrium(given.loop, "test")
    bounds = derive_bounds(given, equilibrium)
    return equilibrium, bounds, target_set(given, equilibrium, bounds, np.empty((0, given.loop.n)))


def test_given_matrix_is_kept_exactly():
    given = van_der_pol(bound="P = [[1.5, -0.1], [-0.1, 1]]")
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    assert V.exact[0][1] == Fraction(-1, 10)
    assert Fraction(float(V.enclosed_P.low[0, 1])) < Fraction(-1, 10) < Fraction(float(V.enclosed_P.high[0, 1]))


def test_weights_of_the_domain():
    given = van_der_pol(bound='Q = "domain"')
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    A = given.loop.jacobian(np.zeros(2))
    np.testing.assert_allclose(A.T @ V.P + V.P @ A, -np.diag([1 / 9, 1 / 12.25]), atol=1e-14)


@pytest.mark.parametrize(
    ("text", "P"),
    [
        ("x1**2 + x2**2", [[1, 0], [0, 1]]),
        ("(x1 + x2)*x1 + 3*x2*x2/4", [[1, 0.5], [0.5, 0.75]]),
        ("2*x1**2 - (x1 - 0.5*x2)**2 + x2**2", [[1, 0.5], [0.5, 0.75]]),
        ("x1**2 + x2**2 + x1**3*0", None),
        ("x1**2 + x2**2 + sin(x1)**2", None),
        ("x1**2/(1 + x2**2)", None),
    ],
)
def test_quadratic_formulas_are_recognised(text, P):
    given = product(bound=f'V = "{text}"')
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    if P is None:
        assert isinstance(V, FormulaV)
    else:
        np.testing.assert_array_equal(V.P, P)


def test_quadratic_beside_the_equilibrium_is_not_taken_for_one_about_it():
    """At an equilibrium that is no float, the centre of the formula cannot be proved to be the equilibrium."""
    given = configuration(
        ["x"], ["2 - x**2"], [(0.0, 3.0)], equilibrium={"x": 1.4}, bound='V = "(x - 1.4142135623730951)**2"'
    )
    assert isinstance(lyapunov_function(given, find_equilibrium(given.loop, "test")), FormulaV)
    moved = double_well(bound='V = "(x - 1)**2 + v**2"')
    assert isinstance(lyapunov_function(moved, find_equilibrium(moved.loop, "test")), Quadratic)


def test_formula_gradient_and_decrease_against_differences():
    given = product(bound='V = "exp(x1*x2)*x1**2 + log(1 + x2**2)"')
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    x = np.random.default_rng(0).uniform(-1, 1, (20, 2))
    h = 1e-6
    slope = np.stack([(V.value(x + h * e) - V.value(x - h * e)) / (2 * h) for e in np.eye(2)], axis=-1)
    np.testing.assert_allclose(V.gradient(x), slope, rtol=1e-6, atol=1e-8)
    np.testing.assert_allclose(V.decrease(x), np.sum(slope * given.loop.rhs(x), axis=1), rtol=1e-5, atol=1e-7)


def test_target_is_the_proved_level_set_a_little_smaller():
    _, bounds, target = prepared(van_der_pol())
    proved = bounds.named("contact level").level
    assert bounds.named("norm bound").level < proved
    assert target.kind == "level"
    assert proved * (1 - 1e-10) < target.level < proved


def test_target_lies_in_the_proved_set_about_the_true_equilibrium():
    """About sqrt(2), with the widest members of the target in exact arithmetic, to 40 digits of the root."""
    given = configuration(["x"], ["2 + 2*x - x**2 - x**3"], [(0.0, 3.0)], equilibrium={"x": 1.4})
    _, bounds, target = prepared(given)
    root = Fraction("1.4142135623730950488016887242096980785697")
    p = Fraction(float(target.P[0, 0]))
    for side in (-1, 1):
        x = float(target.centre[0] + side * np.sqrt(target.level / target.P[0, 0]))
        for _ in range(4):
            if target.P[0, 0] * (x - target.centre[0]) ** 2 <= target.level:
                assert p * (Fraction(x) - root) ** 2 <= Fraction(max(bound.level for bound in bounds.stated))
            x = float(np.nextafter(x, side * np.inf))


def test_marginal_equilibrium_has_no_certificate_and_a_ball():
    given = configuration(["x", "v"], ["v", "-x - v**3"], [(-1.0, 1.0)] * 2, sweep="horizon = 40.0")
    _, bounds, target = prepared(given)
    assert bounds.stated == ()
    assert "imaginary axis" in bounds.note
    assert (target.kind, target.dwell, target.radius) == ("ball", 40.0, 1e-3)
    assert "no level of the configured V is proved" in target.words


def test_shape_that_is_not_positive_definite_bounds_nothing():
    _, bounds, target = prepared(van_der_pol(bound="P = [[1, 2], [2, 1]]\nlevel = 1"))
    assert bounds.stated == ()
    # The target is a proved set all the same, of another shape, and says so.
    assert target.kind == "level"
    assert target.level > 0
    assert (np.linalg.eigvalsh(target.P) > 0).all()
    assert "no level of the configured V is proved" in target.words


def test_balls_stay_apart():
    given = van_der_pol()
    *_, target = prepared(given)
    assert watching(target, np.array([[2.0, 0.0]])).radius == target.radius
    near = watching(target, np.array([[3e-4, 0.0], [0.0, 1.0]]))
    assert near.radius == pytest.approx(1e-4 / 3)
    assert len(near.elsewhere) == 2


def test_dwell_is_five_slowest_time_constants_unless_given():
    equilibrium, _, target = prepared(van_der_pol())
    assert target.dwell == pytest.approx(5 * equilibrium.slowest_time_constant)
    assert prepared(van_der_pol(sweep="dwell = 3.5"))[2].dwell == 3.5
    assert prepared(van_der_pol(sweep="horizon = 2.0"))[2].dwell == 2.0


def test_a_level_below_the_integrators_tolerance_is_no_target():
    given = van_der_pol(sweep="atol = 0.1")
    _, bounds, target = prepared(given)
    assert bounds.named("norm bound").level > 0
    assert target.kind == "ball"
    assert "too small" in target.words


def test_volumes_of_ellipsoids():
    given = ball(3)
    V = Quadratic(given.loop, np.zeros(3), np.diag([1.0, 4.0, 9.0]))
    assert ellipsoid_volume(V.P, 1.0) == pytest.approx(0.698131701)  # ball(3)/3!
    assert fits_domain(V, 1.44)
    assert not fits_domain(V, 1.45)
    assert volume_inside(V, 1.0) == ellipsoid_volume(V.P, 1.0)
    assert ellipsoid_volume(V.P, 0.0) == 0


def test_volume_of_the_part_inside_the_domain():
    """The disc of radius sqrt(2) about the centre of a square of side 2 leaves the square whole."""
    given = configuration(["x", "y"], ["-x", "-y"], [(-1.0, 1.0)] * 2)
    V = Quadratic(given.loop, np.zeros(2), np.eye(2))
    assert volume_inside(V, 2.0) == pytest.approx(4, rel=2e-3)
    formula = lyapunov_function(
        configuration(["x", "y"], ["-x", "-y"], [(-1.0, 1.0)] * 2, bound='V = "abs(x) + abs(y)"'),
        find_equilibrium(given.loop, "test"),
    )
    assert volume_inside(formula, 1.0) == pytest.approx(2, rel=2e-3)


def test_membership_is_verified_to_the_last_bit():
    V = Quadratic(configuration(["x"], ["-x"], [(-1.0, 1.0)]).loop, np.zeros(1), np.eye(1))
    x = np.array([0.3])
    exact = Fraction(0.3) ** 2
    assert member(V, exact + Fraction(1, 10**15), x)
    assert not member(V, exact - Fraction(1, 10**15), x)
    assert not member(V, Decimal("0.09"), np.array([0.30000000000000004]))
    assert not member(V, 1.0, np.array([np.nan]))


def test_witness_of_growth_is_verified():
    given = van_der_pol()
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    contact = derive_bounds(given, find_equilibrium(given.loop, "test")).named("contact level").contact
    assert decrease_witness(V, contact * (1 + 1e-9))
    assert not decrease_witness(V, contact * (1 - 1e-9))
    assert not decrease_witness(V, np.zeros(2))
    assert not decrease_witness(V, np.array([np.nan, 1.0]))
    formula = lyapunov_function(
        van_der_pol(bound='V = "1.5*x**2 - x*y + y**2 + 0*x**4"'), find_equilibrium(given.loop, "test")
    )
    assert isinstance(formula, FormulaV)
    assert decrease_witness(formula, contact * (1 + 1e-9))
    assert not decrease_witness(formula, contact * (1 - 1e-9))
