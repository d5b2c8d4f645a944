"""Where the loop rests: Newton with the exact Jacobian, eigenvalues, and other places of rest."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.errors import UserError
from roa.loop.configuration import Configuration
from roa.loop.evaluate import evaluate
from roa.loop.expression import names_in
from roa.loop.model import Loop
from roa.loop.sampled import SampledLinearisation, linearise
from roa.loop.wording import point_text

Array = NDArray[np.float64]

MOST_ITERATIONS = 200  # a root of order k converges linearly, by (k - 1)/k a step
ARRIVED = 1e-9  # half-widths; a Newton step below this is the last but one
SMALLEST_DAMPING = 2.0**-20
ON_A_FACE = 1e-12  # half-widths; nearer to a face than this, an equilibrium lies on it
SAME_PLACE = 1e-6  # half-widths; nearer to each other than this, two equilibria are one
AXIS = 1e-12  # relative to the norm of A: real parts below this are zero (rounding moves them by about 1e-15)
ZERO_OF_V = 1e-9  # relative to the largest V on the faces of the domain


@dataclass(frozen=True)
class Equilibrium:
    """A point with f(x) = 0, and the linearisation there.

    Attributes
    ----------
    x : float64 (n,), state units
    A : float64 (n, n), df/dx at x
    eigenvalues : complex128 (n,), 1/s, by falling real part
    stability : "stable", "marginal" (one on the imaginary axis, none to its right) or "unstable"; with a hold that
        of the sampled loop, whatever the eigenvalues are
    slowest_time_constant : s, one over the smallest decay rate; inf unless stable; with a hold that of the sampled loop
    sampled : the linearisation over one sampled period, where the loop has a hold; A and the eigenvalues are then
        those that the loop would have without it
    """

    x: Array
    A: Array
    eigenvalues: NDArray[np.complex128]
    stability: str
    slowest_time_constant: float
    sampled: SampledLinearisation | None = None


def find_equilibrium(loop: Loop, source: str) -> Equilibrium:
    """Find the equilibrium of the loop from its guess.

    Raises
    ------
    UserError
        Where f is not finite at the guess, Newton finds no equilibrium, or one outside the domain.
    """
    guess = np.array([float(value) for value in loop.guess])
    if not np.isfinite(loop.rhs(guess)).all():
        raise UserError(_not_finite(loop, guess, source))
    with np.errstate(all="ignore"):
        x = _within_faces(loop, _newton(loop, guess, source))
    for i, (low, high) in enumerate(loop.box):
        if not low <= x[i] <= high:
            raise UserError(
                f"{source}: [equilibrium]: the equilibrium found, {_point(loop, x)}, lies outside the domain "
                f"({loop.states[i]} must be within [{low:g}, {high:g}]); enlarge the domain or give a nearer guess"
            )
    if not np.isfinite(loop.jacobian(x)).all():
        raise UserError(
            f"{source}: [dynamics]: the slopes of the dynamics are not finite at the equilibrium {_point(loop, x)}; "
            "without a linearisation its stability cannot be judged"
        )
    return _linearised(loop, x)


def require_stable(equilibrium: Equilibrium, loop: Loop, source: str) -> None:
    """Raise `UserError` with the eigenvalues, or those over one sampled period, where the equilibrium is unstable."""
    if equilibrium.stability == "unstable" and equilibrium.sampled is not None:
        raise UserError(_unstable_sampled(equilibrium, equilibrium.sampled, loop, source))
    if equilibrium.stability == "unstable":
        raise UserError(
            f"{source}: [dynamics]: the equilibrium {_point(loop, equilibrium.x)} is unstable, with eigenvalues "
            f"{eigenvalue_text(equilibrium.eigenvalues)} 1/s; no real part may be positive: "
            "check the signs and gains of the feedback"
        )


def require_within_limits(equilibrium: Equilibrium, loop: Loop, source: str) -> None:
    """Raise `UserError` with every limit that does not hold the equilibrium strictly inside."""
    values = loop.values_of(equilibrium.x)
    faults = [
        f"{source}: [limits] {name} = [{low}, {high}]: excludes the equilibrium {_point(loop, equilibrium.x)}, where "
        f"{name} = {float(values[name]):.6g}, which must lie strictly inside; widen the limit"
        for name, (low, high) in loop.limits.items()
        if not float(low) < float(values[name]) < float(high)
    ]
    if faults:
        raise UserError(faults)


def require_given_V(configuration: Configuration, equilibrium: Equilibrium) -> None:
    """Raise `UserError` where a residual set is asked for about an equilibrium that gives no V by itself."""
    table = configuration.bound
    if equilibrium.stability != "stable" and table.P is None and table.V is None:
        raise UserError(
            f"{configuration.source}: [bound]: the equilibrium {_point(configuration.loop, equilibrium.x)} is "
            f"{equilibrium.stability}, with eigenvalues {eigenvalue_text(equilibrium.eigenvalues)} 1/s, so that no V "
            "follows from Q; give P or V for the residual set that `inner` asks for"
        )


def eigenvalue_text(eigenvalues: NDArray[np.complex128]) -> str:
    """Write eigenvalues for a sentence, a conjugate pair as one: -0.5 ± 2i, -3."""
    words = []
    for value in eigenvalues:
        if value.imag == 0:
            words.append(f"{value.real:.4g}")
        elif value.imag > 0:
            words.append(f"{value.real:.4g} ± {value.imag:.4g}i")
    return ", ".join(words)


def check_V(configuration: Configuration, equilibrium: Equilibrium) -> None:
    """Raise `UserError` where a V given as a formula is not zero at the equilibrium."""
    tree = configuration.bound.V
    if tree is None:
        return
    loop = configuration.loop
    faces = np.repeat(equilibrium.x[None], 2 * loop.n, axis=0)
    for i, (low, high) in enumerate(loop.box):
        faces[2 * i, i], faces[2 * i + 1, i] = low, high
    at_equilibrium = float(evaluate(tree, loop.values_of(equilibrium.x)))
    on_faces = np.abs(np.broadcast_to(evaluate(tree, loop.values_of(faces)), len(faces)))
    scale = on_faces[np.isfinite(on_faces)].max(initial=0.0)
    if not abs(at_equilibrium) <= ZERO_OF_V * scale:
        names = "" if names_in(tree) & set(loop.states) else "; the formula uses no state"
        raise UserError(
            f"{configuration.source}: [bound] V: V is {at_equilibrium:.6g} at the equilibrium "
            f"{_point(loop, equilibrium.x)}, and must be zero there{names}"
        )


def other_equilibria(loop: Loop, equilibrium: Equilibrium, starts: Array) -> Array:
    """Find further stable equilibria inside the domain by Newton from many starts at once.

    Parameters
    ----------
    loop : Loop
    equilibrium : the one that is left out
    starts : float64 (m, n), state units

    Returns
    -------
    float64 (k, n), each once, in lexicographic order: the same for the same starts
    """
    others = [tuple(one.x) for one in equilibria_beside(loop, equilibrium, starts) if one.stability == "stable"]
    return np.array(sorted(others)).reshape(-1, loop.n)


def equilibria_beside(loop: Loop, equilibrium: Equilibrium, starts: Array) -> list[Equilibrium]:
    """Find further equilibria inside the domain, stable or not, by Newton from many starts, float64 (m, n), at once."""
    found = equilibrium.x[None]
    with np.errstate(all="ignore"):
        ends = _newton_from_all(loop, starts)
    for x in ends:
        if _distance(loop, found, x).min() > SAME_PLACE:
            found = np.vstack([found, x])
    # Newton has seen finite slopes at each of them, so each has a linearisation.
    return [_linearised(loop, x) for x in found[1:]]


def _newton(loop: Loop, x: Array, source: str) -> Array:
    """Newton's method, damped by the natural monotonicity test, until the steps stop shrinking.

    The test compares Newton steps, not residuals, so it does not depend on the units of the rows.

    Source: P. Deuflhard, Newton Methods for Nonlinear Problems, Springer 2004, chapter 3 (from memory).
    """
    f = loop.rhs(x)
    for _ in range(MOST_ITERATIONS):
        if not f.any():
            return x
        inverse = _inverse(loop, x)
        if inverse is None:
            raise UserError(_no_equilibrium(loop, x, source, "the Jacobian is singular"))
        step = -inverse @ f
        size = float(np.linalg.norm(step / loop.half_widths))
        x, f, damping, next_size = _damped(loop, x, step, inverse, size)
        if damping == 0.0:
            if size < ARRIVED:  # rounding is all that is left
                return x
            raise UserError(
                _no_equilibrium(loop, x, source, "no step along Newton's direction brings f nearer to zero")
            )
        if size < ARRIVED and next_size >= size / 4:
            return x
    raise UserError(_no_equilibrium(loop, x, source, f"{MOST_ITERATIONS} steps were not enough"))


def _damped(loop: Loop, x: Array, step: Array, inverse: Array, size: float) -> tuple[Array, Array, float, float]:
    """Take the longest of the steps 1, 1/2, 1/4 … that shortens the next one; damping 0 where none does."""
    damping = 1.0
    while damping > SMALLEST_DAMPING:
        trial = x + damping * step
        f = loop.rhs(trial)
        if np.isfinite(f).all():
            next_size = float(np.linalg.norm(inverse @ f / loop.half_widths))
            if next_size <= (1 - damping / 4) * size:
                return trial, f, damping, next_size
        damping /= 2
    return x, loop.rhs(x), 0.0, size


def _inverse(loop: Loop, x: Array) -> Array | None:
    """Inverse of the Jacobian, or None where it is singular to working precision (in half-widths)."""
    J = loop.jacobian(x) * loop.half_widths
    if not np.isfinite(J).all():
        return None
    rows = np.abs(J).max(axis=1)
    if not rows.all() or np.linalg.cond(J / rows[:, None]) > 1e14:
        return None
    return np.asarray(loop.half_widths[:, None] * np.linalg.inv(J))


def _newton_from_all(loop: Loop, starts: Array) -> Array:
    """Ends of Newton's method inside the domain, in the order of the starts.

    Steps are cut to one half-width, and pseudo-inverses step round singular Jacobians: here a start
    that goes astray costs nothing, a batch that stops would.
    """
    ends = np.full(starts.shape, np.nan)
    moving, x = np.arange(len(starts)), np.array(starts, dtype=np.float64)
    for _ in range(60):
        f, J = loop.rhs(x), loop.jacobian(x) * loop.half_widths
        alive = np.isfinite(f).all(axis=-1) & np.isfinite(J).all(axis=(-2, -1))
        moving, x, f, J = moving[alive], x[alive], f[alive], J[alive]
        step = -np.einsum("mij,mj->mi", np.linalg.pinv(J, rcond=1e-13), f)
        size = np.linalg.norm(step, axis=-1)
        x = x + loop.half_widths * step / np.maximum(size, 1.0)[:, None]
        # Where all is saturated the pseudo-inverse may take no step although f is not zero: look at f too.
        arrived = (size < ARRIVED) & (np.abs(f) <= ARRIVED * np.abs(J).max(axis=-1)).all(axis=-1)
        ends[moving[arrived]] = x[arrived]
        moving, x = moving[~arrived], x[~arrived]
        if not len(x):
            break
    inside = (np.abs(ends - loop.centre) <= loop.half_widths * (1 + ON_A_FACE)).all(axis=-1)
    return _clipped(loop, ends[inside])


def _within_faces(loop: Loop, x: Array) -> Array:
    """Put an equilibrium that rounding has moved off a face of the domain back on it."""
    clipped = _clipped(loop, x)
    return clipped if (np.abs(clipped - x) <= ON_A_FACE * loop.half_widths).all() else x


def _clipped(loop: Loop, x: Array) -> Array:
    # adding zero turns -0.0 into 0.0, which reads better in sentences
    return np.asarray(np.clip(x, loop.box[:, 0], loop.box[:, 1]) + 0.0)


def _linearised(loop: Loop, x: Array) -> Equilibrium:
    A = loop.jacobian(x)
    # The half-widths make the norm free of units; eigenvalues do not change under the similarity.
    scaled = A * loop.half_widths / loop.half_widths[:, None]
    eigenvalues = np.linalg.eigvals(scaled).astype(np.complex128)
    eigenvalues = eigenvalues[np.lexsort((-eigenvalues.imag, -eigenvalues.real))]
    rightmost = float(eigenvalues.real.max())
    axis = AXIS * float(np.linalg.norm(scaled, 2))
    stability = "unstable" if rightmost > axis else "stable" if rightmost < -axis else "marginal"
    slowest = -1 / rightmost if stability == "stable" else np.inf
    if loop.hold is not None:
        sampled = linearise(loop, x)
        return Equilibrium(x, A, eigenvalues, sampled.stability, sampled.slowest_time_constant, sampled)
    return Equilibrium(x, A, eigenvalues, stability, float(slowest))


def _unstable_sampled(equilibrium: Equilibrium, sampled: SampledLinearisation, loop: Loop, source: str) -> str:
    sentence = (
        f"{source}: [hold]: the sampled loop is unstable at the equilibrium {_point(loop, equilibrium.x)}: over one "
        f"period of {sampled.period:g} s its spectral radius is {sampled.spectral_radius:.6g}, and must be below 1"
    )
    if sampled.stable_below is None:
        return (
            f"{sentence}; no shorter period was found that makes it stable: check the signs and gains of the feedback"
        )
    assert loop.hold is not None
    ratio = ", with the delay in the same ratio to the period" if loop.hold.delay else ""
    return f"{sentence}; it is stable for periods below {sampled.stable_below:.6g} s{ratio}"


def _distance(loop: Loop, points: Array, x: Array) -> Array:
    return np.asarray(np.linalg.norm((points - x) / loop.half_widths, axis=-1))


def _point(loop: Loop, x: Array) -> str:
    return f"({point_text(loop.states, loop.units, x)})"


def _no_equilibrium(loop: Loop, x: Array, source: str, reason: str) -> str:
    return (
        f"{source}: [equilibrium]: no equilibrium found from the guess: {reason} at {_point(loop, x)}, "
        f"where f = ({', '.join(f'{value:.4g}' for value in loop.rhs(x))}); give a guess nearer to an equilibrium"
    )


def _not_finite(loop: Loop, guess: Array, source: str) -> str:
    broken = [name for name, value in zip(loop.states, loop.rhs(guess), strict=True) if not np.isfinite(value)]
    return (
        f"{source}: [equilibrium]: the time derivative of {', '.join(broken)} is not a finite number at the guess "
        f"{_point(loop, guess)}; give another guess, or check the formula for a pole there"
    )
