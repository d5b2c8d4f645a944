"""Claims in the form of a ball, judged on loops whose basin is known in closed form."""

from decimal import Decimal
from math import sqrt

import numpy as np
import pytest

import gallery
from roa.bound.ball import ball_function, holds_ellipsoid
from roa.bound.lyapunov_function import Quadratic
from roa.errors import UserError
from roa.loop.equilibrium import find_equilibrium
from roa.preparation import Preparation


def judged(given):
    return Preparation(given, None, None).claim()


def test_ball_is_proved_by_the_squared_distance_up_to_the_edge_of_the_basin():
    """The unit disc is the basin, and V = |x|² falls all over it: radius 0.999, which no Lyapunov ellipsoid needs."""
    claim = judged(gallery.ball(2, bound="ball = 0.999"))
    assert (claim.result, claim.decrease) == ("proved", "proved")
    assert claim.level == pytest.approx(0.999**2)


def test_ball_that_reaches_out_of_the_basin_is_refuted():
    claim = judged(gallery.ball(2, bound="ball = 1.05"))
    assert claim.result == "refuted"
    assert np.linalg.norm(claim.counterexample.initial) > 1


def test_ball_in_scaled_units_is_proved_by_a_set_that_holds_it():
    """B02 with V = |x|²: c* = 8/(3√3). The ellipse (x1/0.4)² + (x2/1)² <= 1.2² reaches to 1.2 < √c*."""
    claim = judged(gallery.product(bound="P = [[1, 0], [0, 1]]\nball = 1.2\nscale = [0.4, 1.0]"))
    assert claim.result == "proved"
    assert "contact level" in claim.reason


def test_ball_that_leaves_the_domain_is_not_settled():
    claim = judged(gallery.configuration(["x"], ["-x"], [(-0.5, 1.0)], bound="ball = 0.6"))
    assert claim.result == "not_settled"
    assert "largest radius that stays inside is 0.5" in claim.reason


def test_ellipsoid_in_ellipsoid():
    loop = gallery.product().loop
    x = find_equilibrium(loop, "test").x
    outer = Quadratic(loop, x, np.array([[2.0, 1.0], [1.0, 3.0]]))
    inner = ball_function(outer, (Decimal("0.5"), Decimal(2)))
    # Largest u'B^(1/2) P B^(1/2) u for B = diag(1/4, 4): of [[0.5, 1], [1, 12]].
    largest = 6.25 + sqrt(5.75**2 + 1)
    assert holds_ellipsoid(outer, largest * (1 + 1e-12), inner, Decimal(1))
    assert not holds_ellipsoid(outer, largest * (1 - 1e-12), inner, Decimal(1))


@pytest.mark.parametrize(
    ("bound", "words"),
    [
        ("ball = -1", "greater than 0"),
        ("ball = 1\nlevel = 1", "two claims"),
        ("scale = [1, 1]", "belongs to a claimed ball"),
        ("ball = 1\nscale = [1]", "must have 2 numbers"),
        ("ball = 1\nscale = [1, 0]", "greater than 0"),
        ("ball = 1\nscale = 2", "list of numbers"),
    ],
)
def test_bad_balls_are_refused_with_a_sentence(bound, words):
    with pytest.raises(UserError, match=words):
        gallery.product(bound=bound)
