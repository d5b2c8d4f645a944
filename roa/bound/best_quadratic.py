"""The best quadratic: the P of the largest ellipsoid over all P, searched for in floats and then proved.

P is rounded to decimals, and these are what the proof is about, so that it can be written into a configuration
and proved again.
"""

from __future__ import annotations

from dataclasses import replace
from decimal import Context
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.contact_level import contact_level
from roa.bound.lyapunov_equation import solve_lyapunov, weight_matrix
from roa.bound.lyapunov_function import Quadratic
from roa.bound.proved_contact_level import prove_contact_level
from roa.bound.shape_search import search_shape
from roa.bound.statement import Bound, Strength
from roa.bound.volume import ellipsoid_volume
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium
from roa.loop.model import Loop

Array = NDArray[np.float64]

NAME = "best quadratic"
DIGITS = 12  # of the entries of P
DRAWN = 1  # start from weights Q that are drawn, beside those that have a reason


def best_quadratic(configuration: Configuration, equilibrium: Equilibrium, known: Bound | None) -> Bound:
    """Search for the P of the largest volume, and prove its contact level.

    It is never smaller than the proved level of `known`, if that is quadratic, nor than that of Q = identity.
    Level 0 with the reason in the note where nothing could be proved.

    Parameters
    ----------
    configuration, equilibrium : of the loop
    known : the largest proved bound so far
    """
    loop, boxes = configuration.loop, configuration.bound.boxes
    starts = _starts(loop, equilibrium)
    identity = Quadratic(loop, equilibrium.x, starts[0])
    rivals = [prove_contact_level(contact_level(identity), 0.0, boxes)]
    if known is not None and isinstance(known.V, Quadratic):
        starts.append(known.V.P)
        rivals.append(known)
    found = search_shape(loop, equilibrium.x, starts)
    if found is not None:
        rivals.insert(0, prove_contact_level(contact_level(_in_decimals(loop, equilibrium.x, found)), 0.0, boxes))
    proved = [(_volume(bound), bound) for bound in rivals if bound.strength is Strength.PROVED]
    if not proved:
        return Bound(NAME, identity, 0.0, Strength.ESTIMATED, "no level of any P could be proved")
    best = max(proved, key=lambda pair: pair[0])[1]
    note = best.note if best is rivals[0] and found is not None else f"no better P was found; {best.note}"
    return replace(best, name=NAME, note=note)


def _volume(bound: Bound) -> float:
    assert isinstance(bound.V, Quadratic)
    return ellipsoid_volume(bound.V.P, bound.level)


def _starts(loop: Loop, equilibrium: Equilibrium) -> list[Array]:
    """P of Q = identity first, then of the domain's weights and of a few drawn ones, always the same."""
    domain = weight_matrix("domain", loop)
    drawn = 10 ** np.random.default_rng(3).uniform(-1.5, 1.5, size=(DRAWN, loop.n))
    weights = [np.eye(loop.n), domain, *(domain * scale for scale in drawn)]
    return [solve_lyapunov(equilibrium.A, Q) for Q in weights]


def _in_decimals(loop: Loop, centre: Array, P: Array) -> Quadratic:
    """V of P rounded to decimals, symmetric, which it then stands for exactly."""
    rounding = Context(prec=DIGITS)
    decimals = [[rounding.create_decimal(repr(float(entry))) for entry in row] for row in (P + P.T) / 2]
    for i in range(loop.n):
        for j in range(i):
            decimals[i][j] = decimals[j][i]
    floats = np.array([[float(entry) for entry in row] for row in decimals])
    return Quadratic(loop, centre, floats, tuple(tuple(Fraction(entry) for entry in row) for row in decimals))
