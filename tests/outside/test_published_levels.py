"""Levels and areas of Lyapunov estimates from elsewhere."""

from math import pi, sqrt
from pathlib import Path

import numpy as np
import pytest

from gallery import product, van_der_pol
from roa.bound.bounds import derive_bounds
from roa.bound.definite import largest_eigenvalue, smallest_eigenvalue
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Strength
from roa.bound.volume import ball_volume, ellipsoid_volume, volume_inside
from roa.kernel.interval_arrays import IntervalArray
from roa.loop.equilibrium import find_equilibrium
from roa.loop.read import read

CONFIGS = Path(__file__).parents[2] / "configs"


def bounds_of(given):
    return derive_bounds(given, find_equilibrium(given.loop, "test"))


@pytest.fixture(scope="module")
def reversed_oscillator():
    """Reversed Van der Pol, Q = I: Khalil, Nonlinear Systems, 3rd ed. 2002 (from memory); computed independently."""
    return bounds_of(van_der_pol())


def test_shape_of_the_reversed_oscillator(reversed_oscillator):
    P = reversed_oscillator.V.P
    np.testing.assert_allclose(P, [[1.5, -0.5], [-0.5, 1]], atol=1e-14)
    low, high = smallest_eigenvalue(IntervalArray.exact(P))[0], largest_eigenvalue(IntervalArray.exact(P))[1]
    assert low == pytest.approx((5 - sqrt(5)) / 4, abs=1e-9)
    assert low <= (5 - sqrt(5)) / 4 + 1e-15
    assert high == pytest.approx(1.809016994, abs=1e-9)


def test_norm_bound_lies_between_the_two_hand_calculations(reversed_oscillator):
    """Khalil bounds |cos^2 sin| by 1 for a level of 0.618034, and by 2/(3 sqrt 3) for one of 0.802850."""
    smallest = (5 - sqrt(5)) / 4
    cartesian = smallest * 2 / sqrt(5)
    polar = smallest * 3 * sqrt(3) / (2 * sqrt(5))
    assert cartesian == pytest.approx(0.618033989, abs=1e-9)
    assert polar == pytest.approx(0.802850, abs=1e-6)
    bound = reversed_oscillator.named("norm bound")
    assert bound.strength is Strength.PROVED
    assert cartesian < 0.8020 < bound.level < polar


def test_contact_level_of_the_reversed_oscillator(reversed_oscillator):
    """Largest level with V̇ < 0: 2.304478, area 6.475411 (computed independently); 2.25 is drawn (from memory)."""
    bound = reversed_oscillator.named("contact level")
    assert bound.level_estimated == pytest.approx(2.304478, rel=1e-6)
    assert volume_inside(bound.V, bound.level_estimated) == pytest.approx(6.475411, rel=1e-6)
    assert bound.strength is Strength.PROVED
    assert 0.999 * 2.304478 < bound.level < 2.304478
    assert bound.level > 2.25


@pytest.mark.parametrize(("level", "area"), [(2.304478, 6.475411), (2.25, 6.322333), (0.8, 2.247941)])
def test_areas_of_ellipses(level, area):
    """π c / sqrt(det P), computed independently."""
    P = np.array([[1.5, -0.5], [-0.5, 1]])
    assert ellipsoid_volume(P, level) == pytest.approx(area, abs=1e-5)
    assert ellipsoid_volume(P, level) == pytest.approx(pi * level / sqrt(1.25), rel=1e-12)


def test_best_published_ellipse_is_valid_and_larger():
    """Area 6.63699 for P = [[.6310, -.2136], [-.2136, .4274]] at level 1 (computed independently, to four digits)."""
    given = van_der_pol(bound="P = [[0.6310, -0.2136], [-0.2136, 0.4274]]")
    bound = bounds_of(given).named("contact level")
    assert bound.strength is Strength.PROVED
    assert bound.level == pytest.approx(1, abs=1e-3)
    assert volume_inside(bound.V, bound.level) == pytest.approx(6.637, rel=1e-3)


def test_circle_of_the_product_loop():
    """x1' = -x1 + 2 x1^2 x2, V = x'x: level 8/(3 sqrt 3) (computed independently)."""
    for text in ('V = "x1**2 + x2**2"', "P = [[1, 0], [0, 1]]"):
        bounds = bounds_of(product(bound=text))
        assert isinstance(bounds.V, Quadratic)
        contact = bounds.named("contact level")
        assert contact.level_estimated == pytest.approx(8 / (3 * sqrt(3)), rel=1e-6)
        assert contact.strength is Strength.PROVED
        assert 0.9998 * 8 / (3 * sqrt(3)) < contact.level < 8 / (3 * sqrt(3))
        assert 0 < bounds.named("norm bound").level < 8 / (3 * sqrt(3))


def test_norm_bound_of_the_product_loop_in_closed_form():
    """V = x'x, Q = 2I: |2g| = 4 x1^2 |x2| <= 4 r^3 2/(3 sqrt 3) against 2 r, so that r^2 = 3 sqrt(3)/4."""
    bound = bounds_of(product(bound="P = [[1, 0], [0, 1]]")).named("norm bound")
    assert 3 * sqrt(3) / 4 * (1 - 3e-5) < bound.level < 3 * sqrt(3) / 4


def test_maximal_function_of_the_product_loop():
    """V = x2^2/2 + x1^2/(2 (1 - x1 x2)) has V̇ = -x1^2 - x2^2 (Vannelli and Vidyasagar 1985; Hahn; from memory)."""
    V = bounds_of(product(bound='V = "x2**2/2 + x1**2/(2*(1 - x1*x2))"')).V
    x = np.random.default_rng(1).uniform(-1.9, 1.9, (2000, 2))
    x = x[x[:, 0] * x[:, 1] < 0.9]
    np.testing.assert_allclose(V.decrease(x), -np.sum(x**2, axis=1), rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize(
    ("name", "contact", "norm"), [("mast", 0.077786, (0.0041, 0.0043)), ("cart", 0.0476, (1e-4, 1e-3))]
)
def test_loops_of_the_configurations(name, contact, norm):
    """Contact levels of the two plants, computed independently of this project."""
    bounds = bounds_of(read(CONFIGS / f"{name}.toml"))
    assert bounds.named("contact level").level_estimated == pytest.approx(contact, rel=1e-3)
    assert bounds.named("contact level").strength is Strength.PROVED
    assert norm[0] < bounds.named("norm bound").level < norm[1]


def test_volumes_of_unit_balls():
    """n = 1..8, computed independently."""
    expected = [2, 3.141593, 4.188790, 4.934802, 5.263789, 5.167713, 4.724766, 4.058712]
    np.testing.assert_allclose([ball_volume(n) for n in range(1, 9)], expected, atol=1e-6)
