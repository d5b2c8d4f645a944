"""Proofs for V as a formula: contact levels in closed form, other parts of the set, and what must never be proved.

Contact levels named here were computed independently unless a source is named.
"""

from decimal import Decimal
from math import pi, sqrt

import numpy as np
import pytest

from gallery import configuration, parabola, product, van_der_pol
from roa.bound.bounds import derive_bounds
from roa.bound.level_set_proof import LevelSetProver
from roa.bound.lyapunov_function import FormulaV
from roa.bound.statement import Strength
from roa.kernel.branch_and_bound import Answer
from roa.loop.equilibrium import find_equilibrium
from roa.loop.formula import Vocabulary, parse


def formula(given, text, from_equilibrium=False):
    tree = parse(text, Vocabulary(list(given.loop.states), {}, {}))
    return FormulaV(given.loop, find_equilibrium(given.loop, "test").x, tree, text, from_equilibrium)


def attempt(given, text, level, budget=20_000, **keywords):
    return LevelSetProver(formula(given, text), **keywords).prove(level, budget)


def pendulum(width, pull=0.0):
    return configuration("tw", ["w", f"-sin(t) + {pull!r} - 0.5*w"], [(-width, width), (-3.0, 3.0)])


ENERGY = "0.5*w**2 + 1 - cos(t) + 0.1*t*w"
ABOVE = (1e-6, 1e-3, 1e-2, 0.5)


@pytest.mark.parametrize(
    ("given", "text", "level"),
    [
        # B02 of Hahn and of Vannelli and Vidyasagar
        (product(), "x1**2 + x2**2", 8 / (3 * sqrt(3))),
        # x' = -x + x^3: V̇ = -2 x V'(x²)(1 - x²) changes sign at |x| = 1, whatever the function of x² is
        (configuration(["x"], ["-x + x**3"], [(-2.0, 2.0)]), "x**2 + x**4 + 0.3*sin(x)**2", 2 + 0.3 * np.sin(1) ** 2),
        (configuration("xy", ["-x*(1 - x**2 - y**2) + y", "-y*(1 - x**2 - y**2) - x"], [(-2.0, 2.0)] * 2),
         "1 - cos(x**2 + y**2) + (x**2 + y**2)/4", 1.25 - np.cos(1)),
        # x' = -sin x: V̇ < 0 as long as |x| < π, for any even V that grows
        (configuration("xy", ["-sin(x)", "-y"], [(-4.0, 4.0)] * 2), "exp(x**2/9) - 1 + y**2", np.exp(pi**2 / 9) - 1),
    ],
)  # fmt: skip
def test_levels_are_proved_below_the_contact_level_and_never_above(given, text, level):
    prover = LevelSetProver(formula(given, text))
    for share in (0.5, 0.99, 0.9999):
        found = prover.prove(share * level, 20_000)
        assert (found.answer, found.left) == (Answer.PROVED, 0.0)
    for above in ABOVE:
        assert prover.prove((1 + above) * level, 5000).answer is not Answer.PROVED


def test_other_wells_of_the_same_formula_are_left_alone():
    """In eight radians either way the pendulum's V has wells at ±2π as low as its own."""
    given = pendulum(8.0)
    for level in (0.5, 1.5):
        assert attempt(given, ENERGY, level).answer is Answer.PROVED
    # V at the saddle is 2 at least where w = 0; V̇ there is zero, and beyond it the next well begins.
    assert attempt(given, ENERGY, 2.3).answer is not Answer.PROVED


def test_a_set_that_reaches_a_face_of_the_domain_is_not_proved():
    given = configuration("xy", ["-x", "-y"], [(-1.0, 1.0), (-3.0, 3.0)])
    text = "x**2 + y**2 + x**4"
    assert attempt(given, text, Decimal("1.9999")).answer is Answer.PROVED
    for level in (Decimal(2), Decimal("2.0001"), Decimal(5)):
        found = attempt(given, text, level)
        assert found.answer is Answer.UNDECIDED
        assert "domain" in found.reason


def test_limits_cut_the_level():
    given = configuration("xy", ["-x", "-y"], [(-4.0, 4.0)] * 2, signals={"u": "x + y"})
    text = "x**2 + y**2 + 0.1*x**2*y**2"
    limits = (("u", Decimal("-1"), Decimal("1")),)
    # On x + y = 1 the formula is least at x = y = 1/2: 1/2 + 0.1/16.
    least = 0.5 + 0.1 / 16
    assert attempt(given, text, 0.9999 * least, limits=limits).answer is Answer.PROVED
    assert attempt(given, text, 1.0001 * least, limits=limits).answer is not Answer.PROVED
    assert attempt(given, text, 1.0001 * least).answer is Answer.PROVED


def test_equilibrium_that_is_no_float():
    """sin t* = 0.3: distances from the true equilibrium, and a formula about the float nearest to it."""
    given = pendulum(3.0, 0.3)
    t = float(find_equilibrium(given.loop, "test").x[0])
    distances = formula(given, "0.5*w**2 + 0.45*t**2 + 0.1*t*w + 0.01*t**4", from_equilibrium=True)
    assert LevelSetProver(distances).is_exact
    assert LevelSetProver(distances).prove(0.6, 2000).answer is Answer.PROVED
    nearly = formula(given, f"0.5*w**2 + 0.45*(t - {t!r})**2 + 0.1*(t - {t!r})*w + 0.01*(t - {t!r})**4")
    assert not LevelSetProver(nearly).is_exact
    assert LevelSetProver(nearly).prove(0.6, 2000).answer is Answer.PROVED
    for V in (distances, nearly):
        x = np.array([pi - 0.2, 0.0])  # beyond the saddle at π - t*
        assert LevelSetProver(V).prove(float(V.value(x)) * 1.3, 5000).answer is not Answer.PROVED


def test_minimum_without_curvature():
    given = configuration("xy", ["-x + x**3", "-y"], [(-2.0, 2.0)] * 2)
    assert attempt(given, "x**4 + y**2", 0.999).answer is Answer.PROVED
    assert attempt(given, "x**4 + y**2", 1.001).answer is not Answer.PROVED


def test_set_that_is_not_convex():
    """The basin of (1, 0) is x1 > x2²; V = (x1 - x2² - 1)² + 4 x2² has bent level sets."""
    given = parabola()
    V = formula(given, "(x1 - x2**2 - 1)**2 + 4*x2**2")
    proved = [level for level in (0.1, 0.3, 0.6, 0.9) if LevelSetProver(V).prove(level, 20_000).answer is Answer.PROVED]
    assert 0.3 in proved
    random = np.random.default_rng(1).uniform(-2, 2, (200_000, 2))
    inside = random[V.value(random) <= max(proved)]
    assert np.all(inside[:, 0] > inside[:, 1] ** 2)
    assert np.all(V.decrease(inside) < 0)
    assert LevelSetProver(V).prove(1.0, 20_000).answer is not Answer.PROVED


@pytest.mark.parametrize("text", ["abs(x) + y**2", "max(x, -2*x) + y**2", "where(x < 0, 2*x**2, x**2) + y**2"])
def test_kinks_in_v_are_not_decided(text):
    given = configuration("xy", ["-x", "-y"], [(-1.0, 1.0)] * 2)
    found = attempt(given, text, 0.1)
    assert found.answer is Answer.UNDECIDED
    assert "not smooth" in found.reason


def test_formula_without_a_minimum_at_the_equilibrium_is_not_proved():
    given = van_der_pol()
    for text in ("x**2 - y**2", "x*y + 0.1*x**4 + 0.1*y**4", "-(x**2 + y**2)", "x**2 + 0*y"):
        for level in (0.01, 0.3, 2.0):
            assert attempt(given, text, level, budget=3000).answer is not Answer.PROVED


def test_rise_on_a_level_is_proved_and_refused():
    """On |x| = r the ball loop has V̇ = -2 r² (1 - r²): rising outside the unit circle, falling inside."""
    given = configuration("xy", ["-x*(1 - x**2 - y**2) + y", "-y*(1 - x**2 - y**2) - x"], [(-2.0, 2.0)] * 2)
    prover = LevelSetProver(formula(given, "x**2 + y**2 + 0.05*(x**2 + y**2)**2"))

    def level(square):
        return square + 0.05 * square**2

    for square in (1.001, 1.2, 3.0, 5.0):  # the last ones leave the domain: what is outside does not count
        assert prover.prove_rising_on(level(square), 20_000).answer is Answer.PROVED
    assert prover.prove_rising_on(level(0.999), 5000).answer is not Answer.PROVED
    assert prover.prove_between((level(0.2), level(0.9)), 20_000).answer is Answer.PROVED
    found = prover.prove_between((level(0.2), level(1.1)), 20_000)
    assert found.answer is Answer.REFUTED
    assert 0.999 <= np.sum(found.witness**2) <= 1.101


def test_contact_level_of_a_formula_is_proved_with_the_estimate_beside_it():
    given = product(bound='V = "x1**2 + x2**2 + x1**4"')
    bound = derive_bounds(given, find_equilibrium(given.loop, "test")).named("contact level")
    assert bound.strength is Strength.PROVED
    assert 0.999 * bound.level_estimated < bound.level < bound.level_estimated
