"""The target set of a sweep: the proved level set if there is one, else a ball with a dwell."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from roa.bound.bounds import Bounds
from roa.bound.contact_level import contact_level
from roa.bound.definite import largest_eigenvalue, smallest_eigenvalue
from roa.bound.equilibrium_enclosure import enclose_equilibrium
from roa.bound.limited_level import LimitProver
from roa.bound.lyapunov_equation import solve_lyapunov, weight_matrix
from roa.bound.lyapunov_function import Quadratic
from roa.bound.norm_bound import norm_bound
from roa.bound.proved_contact_level import prove_contact_level
from roa.bound.statement import Bound, Strength
from roa.bound.ultimate_bound import NAME as ULTIMATE
from roa.bound.volume import half_extents
from roa.kernel.target import Target
from roa.loop.configuration import Configuration
from roa.loop.equilibrium import Equilibrium

Array = NDArray[np.float64]

RESOLVED = 100.0  # a level set is a target only where its half-extents are so many step tolerances
TIME_CONSTANTS = 5.0  # dwell in a ball, in slowest time constants


def target_set(configuration: Configuration, equilibrium: Equilibrium, bounds: Bounds, elsewhere: Array) -> Target:
    """Choose what entering counts as convergence.

    The largest proved ellipsoid is taken, however small it is against the ball: entering it is convergence by
    proof, and a trajectory that converges gets there in a time that grows only like the logarithm of its
    size. It is given up where the integrator's tolerance is not far below its extent, because then a point
    inside may belong to a trajectory outside.

    Parameters
    ----------
    configuration, equilibrium, bounds : what `derive_bounds` takes and gives
    elsewhere : float64 (k, n), other stable equilibria
    """
    loop, sweep = configuration.loop, configuration.sweep
    dwell = sweep.dwell if sweep.dwell is not None else TIME_CONSTANTS * equilibrium.slowest_time_constant
    if configuration.bound.inner is not None:
        return watching(_residual_set(configuration, equilibrium, bounds, dwell), elsewhere)
    best = bounds.largest_ellipsoid or bounds.largest_proved
    note = ""
    if best is None or not isinstance(best.V, Quadratic):
        note = "no level of the configured V is proved" if best is None else "the configured V is no quadratic"
        best = _bound_of_another_shape(configuration, equilibrium)
        note += "" if best is None else '; the V meant here is that of A\'P + PA = -Q with Q = "domain"'
    if best is not None and loop.hold is not None and loop.hold.delay:
        best, note = None, "what is proved with a delay is of the state together with the command that still acts"
    if best is not None and loop.limits:
        best, note = _within_limits(best, note)
    level = 0.0 if best is None else _safe_level(best)
    if best is not None and not _is_resolved(configuration, best.V, level):
        level, note = 0.0, f"the proved level {best.level:.3g} is too small for the integrator's tolerance to resolve"
    if loop.hold is not None:
        note = "; ".join(part for part in (note, "entry is judged at the sampling instants") if part)
    alone = _target(configuration, equilibrium, best, level, dwell, note)
    return watching(alone, elsewhere)


def _residual_set(configuration: Configuration, equilibrium: Equilibrium, bounds: Bounds, dwell: float) -> Target:
    """The inner level set that is asked for, where it is proved to keep what enters it; else a ball."""
    loop, ring = configuration.loop, bounds.named(ULTIMATE)
    inner = float(configuration.bound.inner or 0)
    proved = ring is not None and ring.strength is Strength.PROVED and (ring.inner or np.inf) <= inner < ring.level
    note = "" if proved else "the inner level that is asked for is not proved"
    if proved and ring and loop.limits and not (isinstance(ring.V, Quadratic) and LimitProver(ring.V).holds(inner)):
        proved, note = False, "the inner level that is asked for is not proved to lie within the limits"
    level = _safe_level(replace(ring, level=inner), exact=True) if proved and ring else 0.0
    if ring is not None and proved and not _is_resolved(configuration, ring.V, level):
        level, note = 0.0, "the inner level is proved but cannot be tested by the sweep, which takes only a quadratic V"
        if isinstance(ring.V, Quadratic):
            note = f"the inner level {inner:.3g} is too small for the integrator's tolerance to resolve"
    return _target(configuration, equilibrium, ring, level, dwell, note, residual=level > 0)


def _target(
    configuration: Configuration,
    equilibrium: Equilibrium,
    bound: Bound | None,
    level: float,
    dwell: float,
    note: str,
    residual: bool = False,
) -> Target:
    """The target set of that level of the bound's quadratic V; a ball where the level is 0."""
    sweep = configuration.sweep
    return Target(
        kind="level" if level > 0 else "ball",
        centre=equilibrium.x,
        half_widths=configuration.loop.half_widths,
        P=bound.V.P if level > 0 and bound is not None and isinstance(bound.V, Quadratic) else None,
        level=level,
        radius=sweep.ball_radius,
        dwell=float(min(dwell, sweep.horizon)),
        note=note,
        residual=residual,
    )


def watching(target: Target, elsewhere: Array) -> Target:
    """Watch other equilibria, float64 (k, n), by balls so small that none comes near another equilibrium.

    A ball that held two of them would call rest what is a passage from the one to the other.
    """
    rests = np.concatenate([target.centre[None], elsewhere]) / target.half_widths
    apart = np.linalg.norm(rests[:, None] - rests, axis=2)[~np.eye(len(rests), dtype=bool)]
    radius = min(target.radius, float(apart.min(initial=np.inf)) / 3)
    return replace(target, elsewhere=elsewhere, radius=radius)


def _bound_of_another_shape(configuration: Configuration, equilibrium: Equilibrium) -> Bound | None:
    """A proved level of the V of the Lyapunov equation, where the configured V is of no use.

    Any proved set about the equilibrium serves as a target, and the smallest one is better than a ball: a limit
    cycle inside the ball would count as convergence.
    """
    loop = configuration.loop
    if equilibrium.stability != "stable" or loop.hold is not None:  # a continuous V̇ says nothing of a sampled loop
        return None
    V = Quadratic(loop, equilibrium.x, solve_lyapunov(equilibrium.A, weight_matrix("domain", loop)))
    norm = norm_bound(V)
    contact = prove_contact_level(contact_level(V), norm.level)
    best = contact if contact.strength is Strength.PROVED else norm
    return best if best.level > 0 else None


def _within_limits(best: Bound, note: str) -> tuple[Bound | None, str]:
    """Lower a proved bound until its set is proved to lie within the limits, and say so."""
    if best.V.loop.hold is not None:
        return None, "; ".join(words for words in (note, "between samples nothing is proved about the limits") if words)
    if not isinstance(best.V, Quadratic):
        return best, note
    level = LimitProver(best.V).largest(best.level)
    if level == best.level:
        return best, note
    lowered = replace(best, level=level) if level > 0 else None
    found = "no level is proved to lie within the limits" if lowered is None else "lowered until within the limits"
    return lowered, "; ".join(words for words in (note, found) if words)


def _safe_level(bound: Bound, exact: bool = False) -> float:
    """Lower a proved level to one that the sweep may test with floats.

    The proof is about the true equilibrium x* and the true P; the sweep tests fl((x - c)'P(x - c)) <= level
    with the float equilibrium c and P in floats. With d >= |x* - c| the triangle inequality in the norm of P,
    sqrt(V*(x)) <= sqrt(V(x)) + sqrt(λ_max(P)) d, takes care of the centre. Evaluating the form errs by at
    most some n^2 2^-53 |y|'|P||y| <= n^3 2^-53 λ_max |y|^2 and rounding P to floats by less, both relative to
    V >= λ_min |y|^2: hence the condition number in the margin. Where no equilibrium is proved, a ring (`exact`) is
    about the float centre itself.
    """
    V = bound.V
    if not isinstance(V, Quadratic):
        return 0.0
    root = enclose_equilibrium(V.loop, V.centre)
    smallest, largest = smallest_eigenvalue(V.enclosed_P)[0], largest_eigenvalue(V.enclosed_P)[1]
    if (root is None and not exact) or not smallest > 0:
        return 0.0
    n = V.loop.n
    margin = max(1e-12, 4 * n**3 * 2.3e-16 * largest / smallest)
    away = 0.0 if root is None else root.distance(V.centre)
    reach = np.sqrt(bound.level) - np.sqrt(largest) * away
    return float(reach**2 * (1 - margin)) if reach > 0 and margin < 1 else 0.0


def _is_resolved(configuration: Configuration, V: object, level: float) -> bool:
    """Whether the level set is many step tolerances wide in every state."""
    if not isinstance(V, Quadratic) or not level > 0:
        return False
    sweep = configuration.sweep
    return bool(np.all(half_extents(V.P, level) > RESOLVED * (sweep.atol + sweep.rtol * np.abs(V.centre))))
