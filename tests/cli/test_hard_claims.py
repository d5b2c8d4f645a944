"""Claims that were once judged wrongly: each is a trap that a plausible rule falls into."""

import pytest

import gallery
from roa.preparation import Preparation


def judged(*arguments, **keywords):
    return Preparation(gallery.configuration(*arguments, **keywords), None, None).claim()


def test_dynamics_undefined_in_part_of_the_set():
    # The bound of the clip is no number for y > 0.01, and then neither is x'.
    claim = judged(
        "xy", ["-x + 0*clip(x, -sqrt(0.01 - y), 5)", "-y"], [(-1.0, 1.0)] * 2,
        bound='V = "x**2 + y**2 + 0.001*x**4"\nlevel = 0.5',
    )  # fmt: skip
    assert claim.result == "not_settled"


def test_equilibria_nearer_to_each_other_than_a_ball():
    # Rest at -0.3 has a ball of radius 1 by default; x > -0.15 never gets there.
    claim = judged(
        "xy", ["-x*(x + 0.15)*(x + 0.3)/0.045/(1 + x**2)", "-0.05*y"], [(-1000.0, 1000.0)] * 2,
        bound="P = [[20, 0], [0, 1]]\nlevel = 0.4",
    )  # fmt: skip
    assert claim.result != "refuted"


def test_limit_cycle_smaller_than_a_ball():
    # Every start with a radius above 0.2 goes to a cycle of radius 0.4, which a ball of radius 1 would swallow.
    claim = judged(
        "xy", ["y - x*g", "-x - y*g"], [(-1000.0, 1000.0)] * 2,
        signals={"r": "x**2 + y**2", "g": "30*(r - 0.04)*(r - 0.16)/(1 + r)**2"},
        bound='V = "x**2 + y**2 + 1e-9*x**4"\nlevel = 250000',
        sweep="horizon = 200\nlongest = 400",
    )  # fmt: skip
    assert claim.result == "not_settled"


def test_draws_that_a_part_apart_would_dilute():
    k = "where(abs(x - y) < 0.001, where(x + y > 0.3, 0, 1), 1)"
    claim = judged(
        "xy", ["-x*k", "-y*k"], [(-1.0, 1.0)] * 2, signals={"k": k},
        bound='V = "min(((x - y)/0.0002)**2 + (x + y)**2, 0.1 + 4*((x - 0.3)**2 + (y + 0.3)**2))"\nlevel = 0.5',
        sweep="horizon = 20\nlongest = 50",
    )  # fmt: skip
    assert claim.result == "not_settled"


@pytest.mark.parametrize("escape", [10, 100])
def test_excursion_out_of_the_escape_box(escape):
    # Linear and stable, but on the way back x grows fortyfold: the reason names the box that it left.
    claim = judged(
        "xy", ["-x + 100*y", "-y"], [(-1.0, 1.0)] * 2, bound="P = [[1, 0], [0, 1]]\nlevel = 0.9",
        sweep=f"escape = {escape}\nlongest = 400",
    )  # fmt: skip
    if escape == 10:
        assert claim.result == "refuted"
        assert "left the escape box" in claim.reason
    else:
        assert claim.result == "supported"


@pytest.mark.parametrize(
    ("signal", "limit"),
    [
        ("clip(x, -0.5, 0.2 + y)", (-0.5, 2.0)),  # min(max(x, -0.5), 0.2 + y) is -0.75 at (0, -0.95)
        ("clip(sqrt(0.2 - x), -5, 5)", (-5.0, 5.0)),  # no number for x > 0.2
    ],
)
def test_limits_that_a_clip_does_not_keep(signal, limit):
    claim = judged(
        "xy", ["-x", "-y"], [(-2.0, 2.0)] * 2, signals={"u": signal}, limits={"u": limit},
        bound="P = [[1, 0], [0, 1]]\nlevel = 1",
    )  # fmt: skip
    assert claim.result == "not_settled"
    assert "limit on u" in claim.reason


def test_trajectories_that_end_within_a_residual_set():
    # x' is no number for 0.02 < x < 0.05: what comes from above does not stay in |x| <= 0.1, it ends there.
    claim = judged(
        "x", ["-x + 0*sqrt((x - 0.02)*(x - 0.05))"], [(-2.0, 2.0)], bound="P = [[1]]\nlevel = 1\ninner = 0.01"
    )
    assert claim.result != "proved"
