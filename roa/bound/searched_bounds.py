"""The bounds that need the simulated edge of the basin as a guide: best polynomial and no-return set."""

from __future__ import annotations

from dataclasses import replace
from math import comb

from roa.bound.best_polynomial import best_polynomial
from roa.bound.bounds import Bounds, Say
from roa.bound.lyapunov_function import Quadratic
from roa.bound.no_return import no_return_set
from roa.bound.search_guide import Guide
from roa.bound.simulated_edge import Run
from roa.bound.statement import Bound
from roa.loop.configuration import SEARCHES, Configuration
from roa.loop.equilibrium import Equilibrium

MOST_COEFFICIENTS = 500  # of a polynomial: beyond, a linear programme of its thousands of rows takes hours
LOWEST_DEGREE = 4


def search_bounds(configuration: Configuration, equilibrium: Equilibrium, bounds: Bounds, run: Run, say: Say) -> Bounds:
    """Add the best polynomial and the no-return set, where they are asked for and can be had.

    Parameters
    ----------
    configuration, equilibrium : of the loop
    bounds : what was derived without simulation
    run : simulates starts (m, n) until they leave the domain
    say : told in a sentence what takes a while
    """
    table = configuration.bound
    wanted = [name for name in configuration.searches if name != "quadratic"]
    skipped = [] if table.search is not None or "quadratic" not in configuration.searches else _unasked(configuration)
    if not wanted or equilibrium.stability != "stable":
        return replace(bounds, note=" ".join([bounds.note, *skipped]).strip())
    reason = _reason_against(configuration, bounds)
    ellipsoid = bounds.largest_ellipsoid
    if reason or ellipsoid is None or not isinstance(ellipsoid.V, Quadratic):
        what = " and ".join(_NAMES[name] for name in wanted)
        return replace(
            bounds, note=f"{bounds.note} No {what}: {reason or 'no ellipsoid is proved to start from'}.".strip()
        )
    guide = Guide.about(configuration.loop, equilibrium.x, ellipsoid.V.P / ellipsoid.level, run)
    found: list[Bound] = []
    if "polynomial" in wanted:
        say("searching for the best polynomial V")
        found.append(best_polynomial(guide, table.degree, table.boxes, say))
    if "no_return" in wanted:
        say("searching for the no-return set")
        found.append(no_return_set(guide, table.degree, table.boxes, say))
    missing = [f"No {bound.name}: {bound.note}." for bound in found if not bound.level > 0]
    note = " ".join([bounds.note, *missing, *skipped]).strip()
    return replace(bounds, searched=(*bounds.searched, *(bound for bound in found if bound.level > 0)), note=note)


_NAMES = {"quadratic": "best quadratic", "polynomial": "best polynomial", "no_return": "no-return set"}


def _unasked(configuration: Configuration) -> list[str]:
    left = [_NAMES[name] for name in SEARCHES if name not in configuration.searches]
    if not left:
        return []
    return [
        f"With {configuration.loop.n} states no {' and no '.join(left)} is searched for unless `search` asks for it."
    ]


def _reason_against(configuration: Configuration, bounds: Bounds) -> str:
    """Why no polynomial is searched for, empty where one is."""
    loop = configuration.loop
    if loop.hold is not None:
        return "V̇ says nothing of a loop with [hold]"
    if configuration.bound.inner is not None:
        return "trajectories are to end in a residual set, not at the equilibrium"
    if loop.disturbances:
        return "it would hold for the nominal disturbance alone"
    degree = configuration.bound.degree or LOWEST_DEGREE
    count = comb(loop.n + degree, degree) - 1
    if count > MOST_COEFFICIENTS:
        return (
            f"{loop.n} states and degree {degree} make {count} coefficients, at most {MOST_COEFFICIENTS} are accepted "
            f"(each linear programme would take about {(count / 65) ** 2.5 * 10:.0f} s)"
        )
    return ""
