"""The norm bound never exceeds the truth, and comes close to it."""

import numpy as np
import pytest

from gallery import ball, configuration, cubic, product, saturated_integrator, van_der_pol
from roa.bound import grow_ball
from roa.bound.bounds import derive_bounds, lyapunov_function
from roa.bound.lyapunov_function import Quadratic
from roa.bound.norm_bound import norm_bound
from roa.bound.statement import Strength
from roa.loop.equilibrium import find_equilibrium


def bound_of(configuration):
    V = lyapunov_function(configuration, find_equilibrium(configuration.loop, "test"))
    assert isinstance(V, Quadratic)
    return norm_bound(V)


def sampled_slack(bound):
    """Largest |2P g(y)|/|y| against λ_min(-(A'P + PA)), and distance to the faces against r, on the proved ball."""
    V = bound.V
    loop, P = V.loop, V.P
    A = loop.jacobian(V.centre)
    r = np.sqrt(bound.level / np.linalg.eigvalsh(P)[0])
    random = np.random.default_rng(0)
    direction = random.normal(size=(40000, loop.n))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    y = r * direction * random.random((40000, 1)) ** 0.2
    g = loop.rhs(V.centre + y) - y @ A.T
    ratio = np.linalg.norm(2 * g @ P, axis=1) / np.linalg.norm(y, axis=1)
    room = np.abs(loop.box - V.centre[:, None]).min()
    return ratio.max() / np.linalg.eigvalsh(-(A.T @ P + P @ A))[0], r / room


def test_one_state_has_a_closed_form():
    """x' = -x + x^3, P = 1/2: γ(r) = r^2 against 1, so r = 1 and the level is 1/2."""
    bound = bound_of(cubic())
    assert bound.strength is Strength.PROVED
    assert 0.5 * (1 - 1e-4) < bound.level < 0.5


def test_saturated_integrator_stops_at_its_kink_and_beyond():
    """x' = x/2 + sat(-2x): g = 0 up to 1/2, then 2x - 1; P = 1/3, γ = (2/3)(2 - 1/r) = 1 at r = 2, the basin's edge."""
    bound = bound_of(saturated_integrator())
    assert 4 / 3 * (1 - 1e-4) < bound.level < 4 / 3


@pytest.mark.parametrize(("n", "least"), [(2, 0.499), (3, 0.48), (6, 0.04)])
def test_ball(n, least, monkeypatch):
    """x' = Sx - (1 - |x|^2) x with P = 1/2: γ(r) = r^2, reached on a whole sphere, the worst case for boxes.

    Where the budget does not suffice, the answer is a smaller ball.
    """
    monkeypatch.setattr(grow_ball, "BOXES", 20_000)
    assert least < bound_of(ball(n)).level < 0.5


def random_loop(seed):
    random = np.random.default_rng(seed)
    c = np.round(random.normal(size=12), 3).tolist()
    x = f"-x + {c[0]}*y + {c[1]}*x**2 + {c[2]}*x*y + {c[3]}*y**2 + {c[4]}*x**3 + {c[5]}*y**2*x"
    y = f"{-c[0]}*x - 0.7*y + {c[6]}*x**2 + {c[7]}*x*y + {c[8]}*y**2 + {c[9]}*y**3 + {c[10]}*x**2*y"
    return configuration(["x", "y"], [x, y], [(-2.0, 3.0), (-2.5, 2.0)])


@pytest.mark.parametrize("seed", range(8))
def test_sampling_finds_no_point_that_breaks_the_proof_but_nearly_does(seed):
    bound = bound_of(random_loop(seed))
    slope, room = sampled_slack(bound)
    assert slope < 1
    assert room < 1
    assert max(slope, room) > 0.99


TRIGONOMETRIC = (
    ["x", "y"],
    ["y", "2*sin(x) - 0.3*y - clip(4*x + 1.5*y, -0.9, 0.9) + 0.1*x*exp(-y)*tanh(x)/(1 + x**2)"],
    [(-1.0, 1.0), (-3.0, 3.0)],
)


def test_functions_kinks_and_quotients():
    bound = bound_of(configuration(*TRIGONOMETRIC))
    slope, _ = sampled_slack(bound)
    assert 0.99 < slope < 1


def test_ball_stays_in_a_small_domain():
    small = configuration(["x", "y"], ["-y", "x + (x**2 - 1)*y"], [(-0.5, 3.0), (-3.0, 3.0)])
    bound = bound_of(small)
    assert bound.level == pytest.approx(0.690983006 * 0.25, rel=1e-6)
    assert "x = -0.5" in bound.note


def test_equilibrium_that_is_no_float():
    """x' = (2 - x^2)(1 + x): about s = sqrt(2), A = -k with k = 4 + 2s, P = 1/(2k), g = -(3s + 1) y^2 - y^3."""
    bound = bound_of(configuration(["x"], ["2 + 2*x - x**2 - x**3"], [(0.0, 3.0)], equilibrium={"x": 1.4}))
    s = np.sqrt(2)
    k = 4 + 2 * s
    r = (-(3 * s + 1) + np.sqrt((3 * s + 1) ** 2 + 4 * k)) / 2
    assert r < s
    level = r**2 / (2 * k)
    assert level * (1 - 1e-4) < bound.level < level


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("P = [[1, 2], [2, 1]]", "P is not positive definite"),
        ("P = [[1, 0], [0, 1]]", "-(A'P + PA) is not positive definite"),
    ],
)
def test_no_bound_where_P_does_not_serve(text, reason):
    bound = bound_of(van_der_pol(bound=text))
    assert bound.level == 0
    assert reason in bound.note


def test_no_bound_at_a_face_of_the_domain():
    bound = bound_of(configuration(["x", "y"], ["-x", "-y"], [(0.0, 1.0), (-1.0, 1.0)]))
    assert bound.level == 0
    assert "face" in bound.note


def test_no_bound_over_a_dead_zone():
    """Inside the dead zone the loop is unstable: no ball exists, however small."""
    loop = configuration(["x"], ["0.1*x - 2*deadzone(x, 0.001)"], [(-1.0, 1.0)])
    V = Quadratic(loop.loop, np.zeros(1), np.eye(1))
    assert norm_bound(V).level == 0


def test_a_linear_loop_is_bounded_by_its_domain_alone():
    bound = bound_of(configuration(["x", "y"], ["-x + y", "-2*y"], [(-1.0, 1.0), (-2.0, 2.0)]))
    assert bound.level == pytest.approx(np.linalg.eigvalsh(bound.V.P)[0], rel=1e-9)


def test_many_states_do_not_hang():
    n = 40
    states = [f"s{i}" for i in range(n)]
    dynamics = [f"-{states[i]} + 0.1*{states[(i + 1) % n]}**2" for i in range(n)]
    bound = bound_of(configuration(states, dynamics, [(-1.0, 1.0)] * n))
    assert bound.level > 0


def test_same_answer_every_time():
    first, second = bound_of(random_loop(3)), bound_of(random_loop(3))
    assert first.level == second.level


def test_disguised_quadratic_is_bounded_and_other_formulas_are_not():
    for text, proved in (("x1**2 + x2**2", True), ("x1**2 + x2**2 + x1**4", False)):
        given = product(bound=f'V = "{text}"')
        bounds = derive_bounds(given, find_equilibrium(given.loop, "test"))
        assert (bounds.named("norm bound") is not None) == proved
        assert bounds.named("contact level") is not None
