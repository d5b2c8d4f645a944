"""Best polynomial and no-return set against exact basins: no point of either is on the wrong side."""

from dataclasses import replace

import numpy as np
import pytest

import gallery
from roa.bound.monomials import Monomials, formula, substituted
from roa.bound.searched_bounds import search_bounds
from roa.bound.statement import OUTER, Strength
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.loop.configuration import Configuration
from roa.loop.evaluate import evaluate
from roa.loop.expression import Name
from roa.preparation import Preparation

DRAWS = 200_000


def searched(configuration: Configuration) -> Preparation:
    prepared = Preparation(configuration, None, None)
    assert prepared.all_bounds.V is prepared.bounds.V
    return prepared


@pytest.mark.long
def test_the_basin_below_a_hyperbola_is_bracketed() -> None:
    # x1' = -x1 + 2 x1² x2, x2' = -x2: the basin is x1 x2 < 1, of area 10 + 4 ln 2 in [-2, 2]² (Vannelli and
    # Vidyasagar 1985, from memory; the area by hand).
    prepared = searched(gallery.product(bound='search = ["quadratic", "polynomial", "no_return"]'))
    found = {bound.name: bound for bound in prepared.all_bounds.searched}
    points = np.random.default_rng(1).uniform(-2, 2, size=(DRAWS, 2))
    inside = points[:, 0] * points[:, 1] < 1
    for name in ("best quadratic", "best polynomial"):
        assert found[name].strength is Strength.PROVED
        assert not np.any(found[name].holds(points) & ~inside)
    # Part of the basin converges only after an excursion beyond the box, of which the no-return set says nothing.
    within = compile_lanes(prepared.configuration.loop, prepared.target, replace(prepared.integration, escape=1.0))
    beyond = points[inside & ~found[OUTER].holds(points)]
    assert not np.any(np.isin(within.run(beyond).outcome, (Outcome.CONVERGED, Outcome.CONVERGED_OVER_LIMIT)))
    exact = (10 + 4 * np.log(2)) / 16
    assert np.mean(found["best polynomial"].holds(points)) / exact > 0.84
    assert np.mean(found[OUTER].holds(points)) / exact < 1.005


def test_features_are_those_of_the_formula_in_other_coordinates() -> None:
    random = np.random.default_rng(4)
    monomials = Monomials.up_to(3, 4)
    coefficients, S, y = (
        random.normal(size=len(monomials.exponents)),
        random.normal(size=(3, 3)),
        random.normal(size=(5, 3)),
    )
    tree = formula(substituted(monomials, coefficients, S, 4), [Name(name) for name in "abc"])
    values = evaluate(tree, dict(zip("abc", y.T, strict=True)))
    np.testing.assert_allclose(values, monomials.values(y @ S.T) @ coefficients, rtol=1e-10, atol=1e-10)


def test_derivatives_of_features_are_those_of_differences() -> None:
    random = np.random.default_rng(5)
    monomials, z, along, h = (
        Monomials.up_to(2, 6, lowest=1),
        random.normal(size=(4, 2)),
        random.normal(size=(4, 2)),
        1e-6,
    )
    differences = (monomials.values(z + h * along) - monomials.values(z - h * along)) / (2 * h)
    np.testing.assert_allclose(monomials.derivatives(z, along), differences, rtol=1e-6, atol=1e-6)


def test_nothing_is_searched_for_where_there_is_no_ellipsoid_to_start_from() -> None:
    configuration = gallery.van_der_pol(bound='search = ["polynomial"]')
    prepared = Preparation(configuration, None, None)
    without = replace(prepared.bounds, stated=(), searched=())
    found = search_bounds(configuration, prepared.equilibrium, without, never, lambda sentence: None)
    assert found.searched == ()
    assert "No best polynomial: no ellipsoid is proved to start from." in found.note


def never(points: object) -> object:
    raise AssertionError(points)
