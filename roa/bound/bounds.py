"""The bounds of a configuration: its Lyapunov function, and what can be said about levels of it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from roa.bound.best_quadratic import best_quadratic
from roa.bound.contact_level import contact_level
from roa.bound.exact_quadratic import exact_quadratic
from roa.bound.lyapunov_equation import solve_lyapunov, solve_sampled_lyapunov, weight_matrix
from roa.bound.lyapunov_function import FormulaV, LyapunovFunction, Quadratic
from roa.bound.norm_bound import norm_bound
from roa.bound.point_checks import positive_definite
from roa.bound.proved_contact_level import prove_contact_level
from roa.bound.sampled_function import SampledQuadratic
from roa.bound.sampled_level import sampled_contact_level
from roa.bound.statement import Bound, Strength
from roa.bound.ultimate_bound import BEST, best_ring_shape, ultimate_bound
from roa.bound.volume import ellipsoid_volume
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium
from roa.loop.sampled import SampledLinearisation

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
        """The proved bound of V of the largest level from which all starts converge; None where nothing is proved."""
        proved = [bound for bound in self.stated if bound.strength is Strength.PROVED and bound.inner is None]
        return max(proved, key=lambda bound: bound.level, default=None)

    @property
    def largest_ellipsoid(self) -> Bound | None:
        """The proved bound with a quadratic V of the largest volume, or None where nothing of the kind is proved."""
        found = [
            (ellipsoid_volume(bound.V.P, bound.level), bound)
            for bound in (*self.stated, *self.searched)
            if bound.strength is Strength.PROVED and bound.inner is None and isinstance(bound.V, Quadratic)
        ]
        return max(found, key=lambda pair: pair[0], default=(0.0, None))[1]


def lyapunov_function(configuration: Configuration, equilibrium: Equilibrium) -> LyapunovFunction:
    """V as configured: P from the Lyapunov equation, or P, or a formula; a formula that is a quadratic becomes one.

    With a hold the equation is that of the sampled map, and a quadratic is judged from sample to sample.
    """
    V = _configured(configuration, equilibrium)
    if equilibrium.sampled is None or not isinstance(V, Quadratic):
        return V
    joint = _joint(configuration, equilibrium, equilibrium.sampled)
    P = V.P if joint is None else joint[: V.loop.n, : V.loop.n]
    return SampledQuadratic(V.loop, V.centre, P, V.exact, sampled=equilibrium.sampled, joint=joint)


def _joint(
    configuration: Configuration, equilibrium: Equilibrium, sampled: SampledLinearisation
) -> NDArray[np.float64] | None:
    """P of the state with the command that still acts, where there is a delay and P is derived."""
    loop, table = configuration.loop, configuration.bound
    assert loop.hold is not None
    if not loop.hold.delay or table.P is not None or table.V is not None or equilibrium.stability != "stable":
        return None
    return solve_sampled_lyapunov(sampled, weight_matrix(table.Q or "identity", loop))


def _configured(configuration: Configuration, equilibrium: Equilibrium) -> LyapunovFunction:
    """V as configured, whether there is a hold or not; of a derived P with a delay what concerns the state alone."""
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
    if equilibrium.sampled is not None:
        return Quadratic(loop, equilibrium.x, solve_sampled_lyapunov(equilibrium.sampled, Q)[: loop.n, : loop.n])
    return Quadratic(loop, equilibrium.x, solve_lyapunov(equilibrium.A, Q))


def derive_bounds(configuration: Configuration, equilibrium: Equilibrium, say: Say = silent) -> Bounds:
    """Derive norm bound, contact level and ultimate bounds of the configured V, and the best quadratic if asked for.

    Each is proved as far as that can be done.

    Parameters
    ----------
    configuration, equilibrium : of the loop
    say : told in a sentence what takes a while
    """
    bounds = _of_the_configured(configuration, equilibrium)
    wanted = "quadratic" in configuration.searches and configuration.bound.inner is None
    if not wanted or equilibrium.stability != "stable" or configuration.loop.hold is not None:
        return bounds
    say("searching for the best quadratic V")
    best = best_quadratic(configuration, equilibrium, bounds.largest_proved)
    if not best.level > 0:
        return replace(bounds, note=f"{bounds.note} No best quadratic: {best.note}.".strip())
    nominal = " The best quadratic too is that of the nominal loop." if configuration.loop.disturbances else ""
    return replace(bounds, searched=(*bounds.searched, best), note=f"{bounds.note}{nominal}".strip())


def _of_the_configured(configuration: Configuration, equilibrium: Equilibrium) -> Bounds:
    """The norm bound, contact level and ultimate bounds of the configured V."""
    V = lyapunov_function(configuration, equilibrium)
    rings = _rings(V, configuration, equilibrium)
    bounds = _convergence(V, equilibrium)
    missing = [f"No {ring.name}: {ring.note}." for ring in rings if not ring.level > 0]
    scope = [*_nominal(configuration, bounds), *_of_convergence(configuration, bounds)]
    note = " ".join([bounds.note, *missing, *scope]).strip()
    return Bounds(V, (*bounds.stated, *(ring for ring in rings if ring.level > 0)), note)


def _rings(V: LyapunovFunction, configuration: Configuration, equilibrium: Equilibrium) -> list[Bound]:
    """The ultimate bounds, where there are disturbances or a residual set is asked for."""
    inner = configuration.bound.inner
    if (inner is None and not V.loop.disturbances) or V.loop.hold is not None or not _may_bound(V):
        return []
    ring = ultimate_bound(V, inner)
    if inner is not None and ring.strength is not Strength.PROVED:
        ring = ultimate_bound(V, None)  # what can be had in place of what was asked for
    shape = best_ring_shape(V, equilibrium)
    return [ring, *([] if shape is None else [ultimate_bound(shape, None, BEST)])]


def _may_bound(V: LyapunovFunction) -> bool:
    return not isinstance(V, Quadratic) or positive_definite(V.enclosed_P) == "proved"


def _nominal(configuration: Configuration, bounds: Bounds) -> list[str]:
    """Say of which loop the bounds are where there are disturbances."""
    varying = configuration.loop.disturbances
    if not varying or not bounds.stated:
        return []
    values = ", ".join(f"{name} = {configuration.loop.parameters[name].value}" for name in varying)
    which = " and ".join(bound.name for bound in bounds.stated)
    return [f"The {which} hold for the nominal {values} alone."]


def _of_convergence(configuration: Configuration, bounds: Bounds) -> list[str]:
    """Say that a bound is none of safe starts, where there are limits."""
    if not configuration.loop.limits or not bounds.stated:
        return []
    return ["The bounds are of convergence alone: their sets may cross a limit; whether one does is judged of a claim."]


def _of_samples(V: LyapunovFunction) -> Bounds:
    """The contact level of a loop with a hold, from sample to sample; a continuous V̇ says nothing of it."""
    if not isinstance(V, SampledQuadratic):
        return Bounds(V, (), "No bound is derived: for a loop with [hold] that takes a quadratic V.")
    contact = sampled_contact_level(V)
    if contact.level > 0:
        return Bounds(V, (contact,))
    return Bounds(V, (), f"No contact level: {contact.note}.")


def _convergence(V: LyapunovFunction, equilibrium: Equilibrium) -> Bounds:
    """The bounds within which all starts converge to the equilibrium."""
    if equilibrium.stability == "marginal":
        where = "a multiplier on the unit circle" if V.loop.hold else "an eigenvalue on the imaginary axis"
        return Bounds(V, (), f"The equilibrium has {where}: there is no certificate.")
    if equilibrium.stability == "unstable":
        return Bounds(V, (), "The equilibrium is unstable: nothing converges to it.")
    if isinstance(V, Quadratic) and positive_definite(V.enclosed_P) != "proved":
        return Bounds(V, (), "P is not positive definite by proof: it bounds nothing.")
    if V.loop.hold is not None:
        return _of_samples(V)
    contact = contact_level(V)
    if isinstance(V, Quadratic):
        norm = norm_bound(V)
        derived = [norm, prove_contact_level(contact, norm.level)]
    else:
        derived = [prove_contact_level(contact, 0.0)]
    missing = [f"No {bound.name}: {bound.note}." for bound in derived if not bound.level > 0]
    if not isinstance(V, Quadratic):
        missing.insert(0, "A V that is not quadratic has no norm bound.")
    return Bounds(V, tuple(bound for bound in derived if bound.level > 0), " ".join(missing))
