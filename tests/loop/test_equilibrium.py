"""Equilibria: found, refused with their numbers, judged by half-planes; other places of rest."""

import re
from pathlib import Path

import numpy as np
import pytest
from scipy.linalg import solve_continuous_are

import gallery
from roa.errors import UserError
from roa.loop.equilibrium import (
    check_V,
    eigenvalue_text,
    find_equilibrium,
    other_equilibria,
    require_stable,
    require_within_limits,
)
from roa.loop.read import read, read_text

CONFIGS = Path(__file__).parents[2] / "configs"


def configured(dynamics, domain=None, guess=None, more=""):
    """Configuration of a loop given by the time derivative of each state."""
    domain, guess = domain or {}, guess or {}
    lines = ["[states]", *(f'{name} = "m"' for name in dynamics)]
    lines += ["[dynamics]", *(f'{name} = "{formula}"' for name, formula in dynamics.items())]
    lines += ["[domain]", *(f"{name} = {domain.get(name, [-2, 2])}" for name in dynamics)]
    lines += ["[equilibrium]", *(f"{name} = {value}" for name, value in guess.items())]
    return read_text("\n".join([*lines, more]), "a.toml")


def found(*args, **kwargs):
    return find_equilibrium(configured(*args, **kwargs).loop, "a.toml")


def refused(*args, **kwargs):
    with pytest.raises(UserError) as caught:
        found(*args, **kwargs)
    assert caught.value.exit_code == 2
    (sentence,) = caught.value.faults
    assert sentence.startswith("a.toml: [")
    return sentence


def test_limits_that_exclude_the_equilibrium_are_named_all_at_once():
    given = gallery.cubic(signals={"twice": "2*x"}, limits={"x": (0.1, 0.6), "twice": (-1.0, 0.0)})
    with pytest.raises(UserError) as raised:
        require_within_limits(find_equilibrium(given.loop, "a.toml"), given.loop, "a.toml")
    first, second = raised.value.faults
    assert first == (
        "a.toml: [limits] x = [0.1, 0.6]: excludes the equilibrium (x = 0 1), where x = 0, which must lie strictly "
        "inside; widen the limit"
    )
    assert "[limits] twice = [-1.0, 0.0]: excludes" in second


def test_mast():
    loop = read(CONFIGS / "mast.toml").loop
    equilibrium = find_equilibrium(loop, "mast")
    inertia = 8.0 * 1.2**2
    A = [[0, 1], [(8.0 * 9.81 * 1.2 - 320) / inertia, -(75 + 1.5) / inertia]]
    np.testing.assert_array_equal(equilibrium.x, [0, 0])
    np.testing.assert_allclose(equilibrium.A, A, rtol=1e-14)
    np.testing.assert_allclose(equilibrium.eigenvalues.real, A[1][1] / 2, rtol=1e-12)
    assert equilibrium.stability == "stable"
    assert equilibrium.slowest_time_constant == pytest.approx(-2 / A[1][1], rel=1e-12)
    require_stable(equilibrium, loop, "mast")


def test_cart_has_the_published_linearisation_and_the_gains_of_its_design():
    # The plant without feedback: rows as derived independently from the equations of motion; the equations and
    # parameters are those of many texts on the pendulum on a cart.
    text = (CONFIGS / "cart.toml").read_text()
    text = re.sub(r"(?m)^(k_\w+ *= \{ value = )[-\d.]+", r"\g<1>0", text)
    plant = find_equilibrium(read_text(text, "plant").loop, "plant").A
    np.testing.assert_allclose(plant[[1, 3]], [[0, -0.1818, 2.6727, 0], [0, -0.4545, 31.1818, 0]], atol=5e-5)
    np.testing.assert_allclose(np.sort(np.linalg.eigvals(plant).real), [-5.60409, -0.14283, 0, 5.56511], atol=5e-6)

    B = np.array([[0], [1.8181818181818182], [0], [4.545454545454546]])
    P = solve_continuous_are(plant, B, np.eye(4), np.eye(1))
    loop = read(CONFIGS / "cart.toml").loop
    gains = [float(loop.parameters[name].value) for name in ("k_position", "k_speed", "k_tilt", "k_rate")]
    np.testing.assert_allclose(gains, (B.T @ P)[0], rtol=1e-9)


def test_newton_is_exact_to_rounding():
    # x = cos(x): the Dottie number, 0.739085133215160641655 (from memory)
    equilibrium = found({"x": "cos(x) - x"}, guess={"x": 0.1})
    assert equilibrium.x[0] == pytest.approx(0.739085133215160641655, abs=2e-16)
    # two states of very different units
    far = {"p": "1000000 - p - T/1000", "T": "0.001*(2 + sin(T) - T)"}
    equilibrium = found(far, {"p": [0, 2e6], "T": [0, 5]}, {"p": 1, "T": 1})
    T = equilibrium.x[1]
    assert np.sin(T) + 2 - T == pytest.approx(0, abs=1e-15)
    assert equilibrium.x[0] == pytest.approx(1e6 - T / 1000, rel=1e-15)


def test_damping_brings_back_what_plain_newton_throws_out():
    # Plain Newton on atan diverges from beyond 1.3917452 (from memory).
    assert found({"x": "-atan(x)"}, {"x": [-20, 20]}, {"x": 12}).x[0] == 0


def test_an_equilibrium_on_a_face_and_at_a_root():
    equilibrium = found({"x": "0.3 - x"}, {"x": [0.3, 2]}, {"x": 1})
    assert equilibrium.x[0] == 0.3
    equilibrium = found({"x": "-x"}, {"x": [0, 2]}, {"x": 1})
    assert equilibrium.x[0] == 0


def test_a_root_of_higher_order_is_marginal():
    assert found({"x": "-x**3"}).stability == "marginal"
    equilibrium = found({"x": "-x**3"}, guess={"x": 1})
    assert abs(equilibrium.x[0]) < 1e-6


@pytest.mark.parametrize(
    ("dynamics", "stability", "time_constant"),
    [
        ({"x": "-2*x"}, "stable", 0.5),
        ({"x": "y", "y": "-x"}, "marginal", np.inf),
        ({"x": "y", "y": "0*x"}, "marginal", np.inf),
        ({"x": "y", "y": "-x + 0.000001*y"}, "unstable", np.inf),
        ({"x": "y", "y": "x"}, "unstable", np.inf),
        ({"x": "-1e6*x + y", "y": "-0.001*y"}, "stable", 1000.0),  # stiff: slow against the norm, yet stable
    ],
)
def test_half_planes(dynamics, stability, time_constant):
    equilibrium = found(dynamics)
    assert equilibrium.stability == stability
    assert equilibrium.slowest_time_constant == pytest.approx(time_constant, rel=1e-9)


def test_stability_does_not_depend_on_units():
    slow = {"x": "1e9*y", "y": "-1e-9*x - 0.001*y"}  # the oscillator in units 1e9 apart
    assert found(slow, {"x": [-1e9, 1e9], "y": [-1, 1]}).stability == "stable"


def test_an_unstable_loop_is_refused_with_its_eigenvalues():
    configuration = configured({"x": "y", "y": "4*x"})
    equilibrium = find_equilibrium(configuration.loop, "a.toml")
    with pytest.raises(UserError) as caught:
        require_stable(equilibrium, configuration.loop, "a.toml")
    assert "(x = 0 m, y = 0 m) is unstable, with eigenvalues 2, -2 1/s" in str(caught.value)
    marginal = configured({"x": "y", "y": "-x"})
    require_stable(find_equilibrium(marginal.loop, "a.toml"), marginal.loop, "a.toml")


def test_eigenvalues_in_words():
    assert eigenvalue_text(np.array([0.5, -1 + 2j, -1 - 2j, -3.00004])) == "0.5, -1 ± 2i, -3"


def test_no_equilibrium():
    sentence = refused({"x": "1 + x**2"}, guess={"x": 0.7})
    assert "[equilibrium]: no equilibrium found from the guess: no step along Newton's direction" in sentence
    assert "where f = (1); give a guess" in sentence
    assert "the Jacobian is singular at (x = 0 m)" in refused({"x": "1 + x**2"})
    assert "the Jacobian is singular at (x = 0 m, y = 0 m)" in refused({"x": "1 - x - y", "y": "2 - x - y"})
    assert "the Jacobian is singular" in refused({"x": "clip(1 - x, -0.2, 0.2)"})


def test_dynamics_that_are_not_finite_at_the_guess():
    assert "the time derivative of y is not a finite number at the guess" in refused({"x": "-x", "y": "1/x - y"})
    assert "the slopes of the dynamics are not finite" in refused({"x": "-sqrt(x)"}, {"x": [0, 1]})


def test_an_equilibrium_outside_the_domain_is_named_with_its_numbers():
    sentence = refused({"x": "3 - x", "y": "-y"})
    assert "the equilibrium found, (x = 3 m, y = 0 m), lies outside the domain (x must be within [-2, 2])" in sentence
    # the nearer root is inside, the guess leads to the far one
    assert "(x = 5 m)" in refused({"x": "(x - 1)*(x - 5)"}, {"x": [0, 4]}, {"x": 3.9})


def test_other_equilibria_of_the_damped_double_well():
    loop = configured({"x": "v", "v": "x - x**3 - 0.25*v"}, guess={"x": 0.9}).loop
    equilibrium = find_equilibrium(loop, "a.toml")
    np.testing.assert_allclose(equilibrium.x, [1, 0], atol=1e-15)
    starts = np.random.default_rng(4).uniform(-2, 2, (500, 2))
    others = other_equilibria(loop, equilibrium, starts)
    np.testing.assert_allclose(others, [[-1, 0]], atol=1e-12)  # and not the saddle at the origin
    assert other_equilibria(loop, equilibrium, np.empty((0, 2))).shape == (0, 2)
    np.testing.assert_array_equal(other_equilibria(loop, equilibrium, starts), others)


def test_other_equilibria_come_once_each_in_order_and_inside_the_domain():
    # x_i' = x_i - x_i^3 has a stable equilibrium in every corner (+-1, +-1); y = 3 is cut off
    loop = configured({"x": "x - x**3", "y": "(y - y**3)*(1 - y/3)"}, {"y": [-2, 2.9]}, {"x": 1, "y": 1}).loop
    starts = np.random.default_rng(5).uniform(-2, 2, (800, 2))
    others = other_equilibria(loop, find_equilibrium(loop, "a.toml"), starts)
    np.testing.assert_allclose(others, [[-1, -1], [-1, 1], [1, -1]], atol=1e-12)


def test_other_equilibria_where_starts_saturate_or_leave_the_numbers():
    mast = read(CONFIGS / "mast.toml").loop
    starts = np.random.default_rng(6).uniform(mast.box[:, 0], mast.box[:, 1], (300, 2))
    assert len(other_equilibria(mast, find_equilibrium(mast, ""), starts)) == 0
    saturated = configured({"x": "clip(-x, -0.5, 0.5)"}).loop  # flat beyond 0.5: no slope, yet no rest
    assert len(other_equilibria(saturated, find_equilibrium(saturated, ""), np.linspace(-2, 2, 50)[:, None])) == 0
    logarithm = configured({"x": "-log(x)"}, {"x": [0, 4]}, {"x": 2}).loop
    assert len(other_equilibria(logarithm, find_equilibrium(logarithm, ""), np.linspace(0, 4, 50)[:, None])) == 0


@pytest.mark.parametrize(
    ("V", "words"),
    [
        ("x**2 + y**2", None),
        ("(x - 1)**2 + y**2", "V is 1 at the equilibrium (x = 0 m, y = 0 m), and must be zero there"),
        ("x**2 + y**2 + 0.001", "V is 0.001 at the equilibrium"),
        ("log(x)", "V is -inf at the equilibrium"),
        ("3", "the formula uses no state"),
        ("-x**2", None),  # not positive definite: for the verdict to refute
    ],
)
def test_V_is_zero_at_the_equilibrium(V, words):
    configuration = configured({"x": "-x", "y": "-y"}, more=f'[bound]\nV = "{V}"')
    equilibrium = find_equilibrium(configuration.loop, "a.toml")
    if words is None:
        check_V(configuration, equilibrium)
    else:
        with pytest.raises(UserError) as caught:
            check_V(configuration, equilibrium)
        assert words in str(caught.value)
        assert str(caught.value).startswith("a.toml: [bound] V")


def test_V_may_miss_zero_by_rounding():
    configuration = configured({"x": "cos(x) - x"}, more='[bound]\nV = "(x - 0.739085133215)**2"')
    check_V(configuration, find_equilibrium(configuration.loop, "a.toml"))
