"""The best quadratic against published and exact values."""

import dataclasses

import numpy as np
import pytest

import gallery
from roa.bound.bounds import Bounds, derive_bounds
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Strength
from roa.bound.target_set import target_set
from roa.bound.volume import ellipsoid_volume
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import find_equilibrium

SEARCH = 'search = ["quadratic"]'


def derived(configuration: Configuration) -> Bounds:
    return derive_bounds(configuration, find_equilibrium(configuration.loop, configuration.source))


@pytest.fixture(scope="module")
def van_der_pol() -> tuple[Configuration, Bounds]:
    configuration = gallery.van_der_pol(bound=SEARCH)
    return configuration, derived(configuration)


def volume(bounds: Bounds) -> float:
    (best,) = bounds.searched
    assert best.name == "best quadratic"
    assert best.strength is Strength.PROVED
    assert isinstance(best.V, Quadratic)
    return ellipsoid_volume(best.V.P, best.level)


def test_reaches_and_never_exceeds_the_best_area_of_the_van_der_pol_loop(
    van_der_pol: tuple[Configuration, Bounds],
) -> None:
    # 6.63699 is the largest area of any quadratic estimate, from an independent optimisation (eight of eight starts);
    # 13.722219668 is the area of the basin.
    area = volume(van_der_pol[1])
    assert 6.635 < area < 6.63699
    assert area > 0.48 * 13.722219668


def test_the_proof_is_about_decimals_that_a_configuration_can_hold(van_der_pol: tuple[Configuration, Bounds]) -> None:
    best = van_der_pol[1].searched[0]
    assert isinstance(best.V, Quadratic)
    claim = f"P = {best.V.P.tolist()}\nlevel = {best.level!r}"
    again = derived(gallery.van_der_pol(bound=claim)).V
    assert isinstance(again, Quadratic)
    assert again.exact == best.V.exact


def test_the_largest_ellipsoid_becomes_the_target(van_der_pol: tuple[Configuration, Bounds]) -> None:
    configuration, bounds = van_der_pol
    equilibrium = find_equilibrium(configuration.loop, configuration.source)
    target = target_set(configuration, equilibrium, bounds, np.empty((0, 2)))
    best = bounds.searched[0].V
    assert isinstance(best, Quadratic)
    assert target.P is not None
    np.testing.assert_array_equal(target.P, best.P)


def test_is_never_worse_than_what_is_known() -> None:
    # The basin is the unit ball itself, which the norm bound of Q = identity proves but for some 5e-6 of its radius.
    assert (1 - 1.1e-5) * np.pi < volume(derived(gallery.ball(2, bound=SEARCH))) < np.pi


def test_stays_inside_a_basin_that_is_a_narrow_strip() -> None:
    # |w x1 + x2| < U/w by hand; the ellipsoid's extent along (w, 1) must not exceed it.
    bounds = derived(gallery.capture_point(bound=SEARCH))
    best = bounds.searched[0]
    assert isinstance(best.V, Quadratic)
    row = np.array([3.0, 1.0])
    assert np.sqrt(best.level * row @ np.linalg.inv(best.V.P) @ row) < 2 / 3
    contact = bounds.named("contact level")
    assert contact is not None
    assert isinstance(contact.V, Quadratic)
    assert volume(bounds) > ellipsoid_volume(contact.V.P, contact.level)


def test_nothing_is_searched_for_where_nothing_is_asked() -> None:
    configuration = gallery.van_der_pol()
    assert derived(configuration).searched == ()
    table = configuration.bound.model_copy(update={"search": None})
    assert dataclasses.replace(configuration, bound=table).searches == ("quadratic", "polynomial", "no_return")
    assert dataclasses.replace(configuration, bound=table).quick().searches == ()
