"""The bounds of a configuration: its Lyapunov function, and what can be said about levels of it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np

from roa.bound.best_quadratic import best_quadratic
from roa.bound.contact_level import contact_level
from roa.bound.exact_quadratic import exact_quadratic
from roa.bound.lyapunov_equation import solve_lyapunov, weight_matrix
from roa.bound.lyapunov_function import FormulaV, LyapunovFunction, Quadratic
from roa.bound.norm_bound import norm_bound
from roa.bound.point_checks import positive_definite
from roa.bound.proved_contact_level import prove_contact_level
from roa.bound.statement import Bound, Strength
from roa.bound.volume import ellipsoid_volume
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium

Say = Callable[[str], None]


def silent(sentence: str) -> None:
    """Tell nobody."""


@dataclass(frozen=True)
class Bounds:
    """Everything that is stated about level sets of one V.

    Attributes
    ----------
    V : LyapunovFunction
    stated : the bounds with a level above zero
    searched : bounds of other V that were searched for, with a level above zero
    note : why a bound that one would expect is not there, one sentence each; empty where all are
    """

    V: LyapunovFunction
    stated: tuple[Bound, ...]
    note: str = ""
    searched: tuple[Bound, ...] = ()

    def named(self, name: str) -> Bound | None:
        """The bound of that name, or None."""
        return next((bound for bound in self.stated if bound.name == name), None)

    @property
    def largest_proved(self) -> Bound | None:
        """The proved bound of V of the largest level, or None where nothing is proved."""
        proved = [bound for bound in self.stated if bound.strength is Strength.PROVED]
        return max(proved, key=lambda bound: bound.level, default=None)

    @property
    def largest_ellipsoid(self) -> Bound | None:
        """The proved bound with a quadratic V of the largest volume, or None where nothing of the kind is proved."""
        found = [
            (ellipsoid_volume(bound.V.P, bound.level), bound)
            for bound in (*self.stated, *self.searched)
            if bound.strength is Strength.PROVED and isinstance(bound.V, Quadratic)
        ]
        return max(found, key=lambda pair: pair[0], default=(0.0, None))[1]


def lyapunov_function(configuration: Configuration, equilibrium: Equilibrium) -> LyapunovFunction:
    """V as configured: P from the Lyapunov equation, or P, or a formula; a formula that is a quadratic becomes one."""
    loop, table = configuration.loop, configuration.bound
    if table.V is not None:
        formula = FormulaV(loop, equilibrium.x, table.V, table.V_text or "")
        return exact_quadratic(formula) or formula
    if table.P is not None:
        exact = tuple(tuple(Fraction(entry) for entry in row) for row in table.P)
        return Quadratic(loop, equilibrium.x, np.array([[float(entry) for entry in row] for row in exact]), exact)
    if equilibrium.stability == "marginal":
        return Quadratic(loop, equilibrium.x, np.diag(loop.half_widths**-2.0))
    Q = weight_matrix(table.Q or "identity", loop)
    return Quadratic(loop, equilibrium.x, solve_lyapunov(equilibrium.A, Q))


def derive_bounds(configuration: Configuration, equilibrium: Equilibrium, say: Say = silent) -> Bounds:
    """Derive the norm bound and the contact level of the configured V, and the best quadratic, where it is asked for.

    Each is proved as far as that can be done.

    Parameters
    ----------
    configuration, equilibrium : of the loop
    say : told in a sentence what takes a while
    """
    bounds = _of_the_configured(configuration, equilibrium)
    if "quadratic" not in configuration.searches or equilibrium.stability == "marginal":
        return bounds
    say("searching for the best quadratic V")
    best = best_quadratic(configuration, equilibrium, bounds.largest_proved)
    if not best.level > 0:
        return replace(bounds, note=f"{bounds.note} No best quadratic: {best.note}.".strip())
    return replace(bounds, searched=(*bounds.searched, best))


def _of_the_configured(configuration: Configuration, equilibrium: Equilibrium) -> Bounds:
    V = lyapunov_function(configuration, equilibrium)
    if equilibrium.stability == "marginal":
        return Bounds(V, (), "The equilibrium has an eigenvalue on the imaginary axis: there is no certificate.")
    if isinstance(V, Quadratic) and positive_definite(V.enclosed_P) != "proved":
        return Bounds(V, (), "P is not positive definite by proof: it bounds nothing.")
    contact = contact_level(V)
    derived = [contact]
    if isinstance(V, Quadratic):
        norm = norm_bound(V)
        derived = [norm, prove_contact_level(contact, norm.level)]
    missing = [f"No {bound.name}: {bound.note}." for bound in derived if not bound.level > 0]
    if not isinstance(V, Quadratic):
        missing.insert(0, "A V that is not quadratic has no norm bound, and its contact level is not proved.")
    return Bounds(V, tuple(bound for bound in derived if bound.level > 0), " ".join(missing))
