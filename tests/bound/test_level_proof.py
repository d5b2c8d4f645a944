"""Proofs that V̇ < 0 on a level set: what must be proved, and above all what never may be.

Contact levels named here are exact or follow from a closed form, computed independently.
"""

from decimal import Decimal
from fractions import Fraction
from math import pi, sqrt
from pathlib import Path

import numpy as np
import pytest

from gallery import ball, configuration, product, van_der_pol
from roa.bound.bounds import derive_bounds, lyapunov_function
from roa.bound.contact_level import contact_level
from roa.bound.level_proof import LevelProver
from roa.bound.lyapunov_function import Quadratic
from roa.bound.point_checks import decrease_witness, member
from roa.bound.proved_contact_level import _search
from roa.bound.statement import Strength
from roa.kernel.branch_and_bound import Answer, negative_on_levels
from roa.kernel.tape import Tape
from roa.loop.equilibrium import find_equilibrium
from roa.loop.expression import Call, Name, Negate, Number
from roa.loop.read import read

CONFIGS = Path(__file__).parents[2] / "configs"
ABOVE = (1e-6, 1e-3, 1e-2)
UNIT = "P = [[1, 0], [0, 1]]"


def prover_of(given):
    return LevelProver(lyapunov_function(given, find_equilibrium(given.loop, "test")))


def attempt(given, level, budget=20_000):
    return prover_of(given).prove(level, budget)


@pytest.mark.parametrize(
    ("given", "level", "boxes"),
    [
        (van_der_pol(), 2.304478, 400),  # Khalil's example; level computed independently
        (product(bound=UNIT), 8 / (3 * sqrt(3)), 400),  # B02 of Hahn and of Vannelli and Vidyasagar
        (read(CONFIGS / "mast.toml"), 0.0777856, 500),
    ],
)
def test_plane_loops_are_proved_just_below_their_contact_level(given, level, boxes):
    found = attempt(given, 0.9999 * level)
    assert (found.answer, found.left) == (Answer.PROVED, 0.0)
    assert found.boxes < boxes
    for above in (1e-4, 1e-2):
        found = attempt(given, (1 + above) * level)
        assert found.answer is not Answer.PROVED
        if found.witness is not None:
            V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
            assert V.value(found.witness) <= (1 + above) * level
            assert decrease_witness(V, found.witness)


def test_cart_with_four_states_and_a_clipped_force():
    given = read(CONFIGS / "cart.toml")
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    level = contact_level(V).level
    assert level == pytest.approx(0.0476, rel=1e-3)
    assert LevelProver(V).prove(0.99 * level, 60_000).answer is Answer.PROVED
    assert LevelProver(V).prove(1.001 * level, 10_000).answer is not Answer.PROVED


@pytest.mark.parametrize(("n", "budget"), [(3, 8000), (4, 90_000)])
def test_ball_whose_decrease_touches_zero_on_the_whole_sphere(n, budget):
    assert attempt(ball(n), 0.45, budget).answer is Answer.PROVED
    assert attempt(ball(n), 0.5000001, 5000).answer is not Answer.PROVED


def test_equal_arguments_give_equal_answers_and_the_budget_is_kept():
    prover = prover_of(van_der_pol())
    assert prover.prove(2.3, 1000) == prover.prove(2.3, 1000)
    short = prover.prove(2.3, 50)
    assert (short.answer, short.boxes) == (Answer.UNDECIDED, 50)
    assert 0 < short.left < 1
    assert "50 boxes" in short.reason


def test_level_is_taken_exactly():
    """V = x^2 on a domain that ends at 0.3: the set of level 0.09 reaches the face, those below do not."""
    given = configuration(["x"], ["-x + x**3"], [(-0.3, 0.3)], bound="P = [[1]]")
    assert attempt(given, Decimal("0.0899999999999")).answer is Answer.PROVED
    for level in (Decimal("0.09"), Fraction(9, 100), Decimal("0.0900000000001")):
        found = attempt(given, level)
        assert found.answer is Answer.UNDECIDED
        assert "domain" in found.reason


def polynomial(rng, n):
    """r' = -r (1 - |r|²/c) about zero and a skew part: V = |x|² decreases exactly below c."""
    c = float(rng.uniform(0.2, 3))
    names = [f"x{i}" for i in range(n)]
    size = " + ".join(f"{x}**2" for x in names)
    turn = [""] * n
    if n > 1:
        w = float(rng.uniform(-3, 3))
        turn[0], turn[1] = f" + {w!r}*x1*(1 + x0**2)", f" - {w!r}*x0*(1 + x0**2)"
    # c as a decimal number is known exactly; the level set is |x|² <= c.
    return names, [f"-{x}*(1 - ({size})/{c!r}){turn[i]}" for i, x in enumerate(names)], c


def trigonometric(rng, n):
    """x0' = -sin(k x0), others linear and stable: V = |x|² decreases as long as |k x0| < π."""
    k = float(rng.uniform(1, 3))
    names = [f"x{i}" for i in range(n)]
    return names, [f"-sin({k!r}*x0)", *(f"-{x}" for x in names[1:])], (pi / k) ** 2


def clipped(rng, n):
    """x0' = x0 - clip(k x0, -u, u), others linear: V = |x|² decreases as long as |x0| < u."""
    k, u = float(rng.uniform(1.5, 4)), float(rng.uniform(0.3, 1.5))
    names = [f"x{i}" for i in range(n)]
    return names, [f"x0 - clip({k!r}*x0, -{u!r}, {u!r})", *(f"-{x}" for x in names[1:])], u * u


@pytest.mark.parametrize("kind", [polynomial, trigonometric, clipped])
@pytest.mark.parametrize("n", [1, 2, 3])
def test_no_level_above_the_contact_level_is_ever_proved(kind, n):
    rng = np.random.default_rng(100 * n + len(kind.__name__))
    shape = str(np.eye(n, dtype=int).tolist())
    for _ in range(5):
        names, dynamics, c = kind(rng, n)
        prover = prover_of(configuration(names, dynamics, [(-4.0, 4.0)] * n, bound=f"P = {shape}"))
        assert prover.prove(0.9 * c, 20_000).answer is Answer.PROVED
        for above in ABOVE:
            assert prover.prove(c * (1 + above), 2000).answer is not Answer.PROVED


@pytest.mark.parametrize(
    ("dynamics", "proved"),
    [
        ("-x - 0.5*abs(x)", True),  # slopes -1.5 and -0.5
        ("-max(x, 1.5*x)", True),
        ("-x - 1.5*abs(x)", False),  # slope +0.5 on the left
        ("-x - sign(x)", False),  # true, but no derivative is bounded: undecided
        ("-x + 0.1*sqrt(abs(x))", False),
    ],
)
def test_kink_at_the_equilibrium(dynamics, proved):
    given = configuration(["x"], [dynamics], [(-2.0, 2.0)], bound="P = [[1]]")
    V = Quadratic(given.loop, np.zeros(1), np.eye(1))
    assert (LevelProver(V).prove(1.0, 2000).answer is Answer.PROVED) is proved


def test_saturation_inside_the_set_is_taken_apart():
    """Two clips in one box: each side is tried, so that the number of boxes stays that of a smooth loop."""
    given = configuration(
        ["x", "y"], ["-x - clip(3*x + y, -0.5, 0.5)", "-y + clip(x - y, -0.2, 0.2)"], [(-3.0, 3.0)] * 2, bound=UNIT
    )
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    found = LevelProver(V).prove(0.99 * contact_level(V).level, 5000)
    assert found.answer is Answer.PROVED


def test_equilibrium_that_is_no_float():
    """About sqrt(2): f = -(x² - 2)(x + 1) and V = (x - sqrt 2)², whose contact level is the distance to 0 or -1."""
    given = configuration(["x"], ["2 + 2*x - x**2 - x**3"], [(-0.5, 4.0)], equilibrium={"x": 1.4}, bound="P = [[1]]")
    edge = (sqrt(2) + 0.5) ** 2  # the face comes before the root at -1
    assert attempt(given, 0.999 * edge).answer is Answer.PROVED
    assert attempt(given, 1.000001 * edge).answer is Answer.UNDECIDED


@pytest.mark.parametrize(
    "dynamics",
    [
        "-x + 0.001*(x/(0.5 - x))",  # a pole at 0.5
        "-x*(1 + 0*sqrt(0.5 - x))",  # undefined beyond 0.5, whatever multiplies it
        "-x - clip(log(0.5 - x), 0, 0)",  # a clip must not hide it
        "-x + min(0*x, 1/(x - 0.5)**2)",
    ],
)
def test_poles_and_undefined_points_in_the_set_are_never_proved_away(dynamics):
    given = configuration(["x"], [dynamics], [(-2.0, 2.0)], bound="P = [[1]]")
    assert attempt(given, 0.24).answer is Answer.PROVED
    for level in (0.2500001, 0.36, 1.0):
        assert attempt(given, level).answer is not Answer.PROVED


def test_isolated_rest_in_the_set_is_found():
    """x' = -x (x - 1)²: V̇ touches zero at x = 1 only, which is a witness of V̇ >= 0 and no proof."""
    given = configuration(["x"], ["-x*(x - 1)**2"], [(-2.0, 2.0)], bound="P = [[1]]")
    assert attempt(given, 0.98).answer is Answer.PROVED
    assert attempt(given, 1.02).answer is not Answer.PROVED


def test_wrong_shapes_are_not_proved():
    for bound in ("P = [[1, 2], [2, 1]]", "P = [[-1.5, 0.5], [0.5, -1]]", "P = [[1.5, 0.5], [0.5, 1]]"):
        assert attempt(van_der_pol(bound=bound), 0.01).answer is not Answer.PROVED


def test_ring_and_witness_of_the_search_itself():
    """W = |z|² - 2 is negative on 1 <= |z|² <= c below 2, and its witnesses lie in the ring."""
    tape = Tape(2)
    size = tape.add(tape.multiply(0, 0), tape.multiply(1, 1))
    program = tape.program([tape.subtract(size, tape.number(2)), size])
    box, none = np.full(2, 3.0), np.full(2, -1.0)
    assert negative_on_levels(program, -box, box, (1.0, 1.999), none, 1000).answer is Answer.PROVED
    found = negative_on_levels(program, -box, box, (1.0, 2.5), none, 1000)
    assert found.answer is Answer.REFUTED
    assert 2 <= found.witness @ found.witness <= 2.5
    assert negative_on_levels(program, -box, box, (2.0, 2.0), none, 1000).answer is not Answer.PROVED


def test_derived_contact_level_says_what_is_proved_and_what_is_estimated():
    given = van_der_pol()
    bound = derive_bounds(given, find_equilibrium(given.loop, "test")).named("contact level")
    assert bound.strength is Strength.PROVED
    assert bound.level_estimated == pytest.approx(2.304478, rel=1e-6)
    assert 0.999 * 2.304478 < bound.level < bound.level_estimated
    assert "boxes" in bound.note
    assert member(bound.V, bound.level_estimated * (1 + 1e-9), bound.contact)


def test_what_cannot_be_proved_at_the_top_is_proved_further_down():
    """A ball, with functions in place of the numbers: the attempts near the top run out of boxes."""
    given = configuration(
        ["x", "y", "z"],
        [
            "y - (cos(0) - x**2 - y**2 - z**2)*x",
            "-x - (cos(0) - x**2 - y**2 - z**2)*y",
            "-(cos(0) - x**2 - y**2 - z**2)*z",
        ],
        [(-1.2, 1.2)] * 3,
        bound="P = [[1, 0, 0], [0, 1, 0], [0, 0, 1]]",
    )
    V = lyapunov_function(given, find_equilibrium(given.loop, "test"))
    assert isinstance(V, Quadratic)
    level, proof = _search(LevelProver(V), 1.0, 12_000)
    assert proof.answer is Answer.PROVED
    assert 0.8 <= level < 0.9999


def test_minimum_of_two_functions_that_meet_in_one_point_has_no_slope_of_the_wrong_one_there():
    """W = min(|z|, -z²) - z - 0.1 is -z² - z - 0.1, positive at -1/2; at zero |z|, here a maximum, meets -z²."""
    tape, z = Tape(1), Name("z")
    size = tape.expression(Call("max", (Call("max", (z, Negate(z))), Number(Decimal(0)))), {"z": 0})
    square = tape.multiply(0, 0)
    lower = tape.expression(Call("min", (Name("a"), Negate(Name("b")))), {"a": size, "b": square})
    W = tape.subtract(tape.subtract(lower, 0), tape.number(Decimal("0.1")))
    found = negative_on_levels(tape.program([W, square]), -np.ones(1), np.ones(1), (-np.inf, np.inf), -np.ones(1), 1000)
    assert found.answer is Answer.REFUTED
