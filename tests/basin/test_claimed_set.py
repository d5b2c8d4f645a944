"""Starts of a claimed set: on its boundary, uniform inside, connected to the equilibrium."""

import numpy as np
import pytest

import gallery
from roa.basin.claimed_set import ClaimedSet, inside_ball, sphere
from roa.basin.segment import segment_inside
from roa.bound.lyapunov_function import FormulaV, Quadratic
from roa.loop.equilibrium import find_equilibrium

P = np.array([[1.5, -0.5], [-0.5, 1.0]])
ELLIPSE = "1.5*x**2 - x*y + y**2"
# {V <= 1} holds the disc x² + y² <= 1 and, beyond a ridge, everything far out along x.
TWO_PARTS = "(x**2 + y**2)*(4 - x**2)/3"


def quadratic(level):
    return ClaimedSet(Quadratic(gallery.van_der_pol().loop, np.zeros(2), P), level)


def formula(text, level):
    configuration = gallery.van_der_pol(bound=f'V = "{text}"\nlevel = {level!r}')
    V = FormulaV(configuration.loop, np.zeros(2), configuration.bound.V, text)
    return ClaimedSet(V, level)


@pytest.fixture
def rng():
    return np.random.default_rng(20)


@pytest.mark.parametrize("claimed", [quadratic(2.0), formula(ELLIPSE, 2.0)])
def test_sphere_is_mapped_just_inside_the_boundary(claimed, rng):
    starts = claimed.at(sphere(500, 2, rng))
    V = np.einsum("mi,ij,mj->m", starts, P, starts)
    assert V.max() < 2.0
    np.testing.assert_allclose(V, 2.0, rtol=1e-8)
    assert all(claimed.contains(x) for x in starts[:20])


@pytest.mark.parametrize("claimed", [quadratic(2.0), formula(ELLIPSE, 2.0)])
def test_a_radius_of_the_ball_is_a_straight_line(claimed, rng):
    direction = sphere(50, 2, rng)
    np.testing.assert_allclose(claimed.at(0.3 * direction), 0.3 * claimed.at(direction), rtol=1e-9)


@pytest.mark.parametrize("claimed", [quadratic(2.0), formula(ELLIPSE, 2.0), formula(ELLIPSE, 1e-3)])
def test_draws_are_uniform(claimed, rng):
    draws = claimed.draw(4000, rng)
    # In two states V/level of a uniform point of an ellipse is uniform: Kolmogorov and Smirnov's test at 1 %.
    V = np.sort(np.einsum("mi,ij,mj->m", draws, P, draws)) / claimed.level
    assert np.abs(V - (np.arange(4000) + 0.5) / 4000).max() < 1.63 / np.sqrt(4000)
    np.testing.assert_allclose(draws.T @ draws / 4000, claimed.level * np.linalg.inv(P) / 4, rtol=0.15)


def test_set_too_thin_to_draw_from_is_told(rng):
    # A sliver along the diagonal: its box is a square a thousand times as wide.
    assert formula("1e8*(x - y)**2 + x**2 + y**2", 1.0).draw(4603, rng) is None


def test_draws_reach_what_no_straight_line_does(rng):
    # The banana |y - x²| < .3 about the parabola, |x| < 1.5: its ends are hidden from the equilibrium.
    claimed = formula("(y - x**2)**2/0.09 + (x/1.5)**8", 1.0)
    draws = claimed.draw(4000, rng)
    assert np.abs(draws[:, 0]).max() > 1.3
    assert draws[:, 1].max() > 1.7
    assert claimed.at(sphere(4000, 2, rng))[:, 1].max() < 1.5


@pytest.mark.parametrize("claimed", [quadratic(1.0), formula(ELLIPSE, 1.0)])
def test_largest_level_inside_the_domain(claimed):
    # The ellipse reaches sqrt(level (P^-1)_ii): 9/.8 = 11.25 for x = ±3 and 12.25/1.2 = 10.208 for y = ±3.5.
    assert claimed.largest_level_inside == pytest.approx(12.25 / 1.2, rel=1e-4)
    assert claimed.is_inside
    assert not ClaimedSet(claimed.V, 10.3).is_inside


def test_equilibrium_off_the_centre_and_off_the_origin():
    loop = gallery.parabola().loop
    claimed = ClaimedSet(Quadratic(loop, find_equilibrium(loop, "gallery.toml").x, np.eye(2)), 0.5)
    assert claimed.largest_level_inside == pytest.approx(1.0)
    starts = claimed.at(np.array([[1.0, 0.0], [0.0, 0.0]]))
    np.testing.assert_allclose(starts, [[1 + np.sqrt(0.5), 0.0], [1.0, 0.0]], rtol=1e-9)


def test_part_apart_from_the_equilibrium_does_not_belong_to_the_claim(rng):
    claimed = formula(TWO_PARTS, 0.9)
    apart = np.array([2.5, 0.0])
    assert claimed.V.value(apart) < 0.9
    assert not claimed.contains(apart)
    assert claimed.contains(np.array([0.5, 0.3]))
    # Starts stay this side of the ridge, and what they reach is verified.
    starts = claimed.at(inside_ball(300, 2, rng))
    assert np.abs(starts[:, 0]).max() < 1.5
    assert all(claimed.contains(x) for x in starts)


def test_segment_is_verified_to_its_end_and_not_beyond():
    V = formula(ELLIPSE, 2.0).V
    edge = np.array([np.sqrt(2.0 / 1.5), 0.0])
    assert segment_inside(V, 2.0, edge * (1 - 1e-12))
    assert not segment_inside(V, 2.0, edge * (1 + 1e-12))


def test_segment_through_a_pole_is_not_verified():
    configuration = gallery.van_der_pol(bound='V = "x**2 + y**2 + 0*log(y + 1)"\nlevel = 4.0')
    V = FormulaV(configuration.loop, np.zeros(2), configuration.bound.V, configuration.bound.V_text)
    assert not segment_inside(V, 4.0, np.array([0.0, -1.5]))
    assert segment_inside(V, 4.0, np.array([0.0, -0.5]))


@pytest.mark.parametrize("n", [1, 3])
def test_uniform_directions_and_points(n, rng):
    np.testing.assert_allclose(np.linalg.norm(sphere(200, n, rng), axis=1), 1.0)
    size = np.sort(np.linalg.norm(inside_ball(4000, n, rng), axis=1) ** n)
    assert np.abs(size - (np.arange(4000) + 0.5) / 4000).max() < 1.63 / np.sqrt(4000)
