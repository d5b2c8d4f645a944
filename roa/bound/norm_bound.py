"""The norm bound: the hand calculation that bounds the remainder of the linear part on a ball, by proof.

With y = x - x_eq, A = J(x_eq) and g(y) = f(x_eq + y) - A y, the derivative of V = y'Py is
    V̇ = -y'Qy + 2 y'P g(y) <= -|y| (λ_min(Q) |y| - |2P g(y)|),     Q = -(A'P + PA),
negative on 0 < |y| <= r as long as |2P g(y)| < λ_min(Q) |y| there, that is while γ(r) < λ_min(Q). The ball
holds the level set {V <= λ_min(P) r^2}. Equilibrium, A and the numbers of the loop are enclosures.

Two steps: near zero, where both sides vanish and boxes would never separate them, a first ball by
derivatives alone, g(y) = (∫ J(ty) - A dt) y and |2P g(y)| <= |y|^2 / 2 times a norm of the second
derivatives; then branch and bound outwards from it (`grow_ball`).
"""

from __future__ import annotations

import numpy as np

from roa.bound.definite import smallest_eigenvalue
from roa.bound.equilibrium_enclosure import EquilibriumEnclosure, dynamics_program, enclose_equilibrium, upper_norm
from roa.bound.grow_ball import grow_ball
from roa.bound.lyapunov_function import Quadratic
from roa.bound.remainder import Remainder
from roa.bound.statement import Bound, Strength
from roa.kernel.enclosure import enclose
from roa.kernel.interval_arrays import IntervalArray

NAME = "norm bound"
HALVINGS = 60  # how small, against the domain, the first ball may be


def norm_bound(V: Quadratic) -> Bound:
    """Prove the level of the norm bound; level 0 with the reason in the note where there is none."""
    if V.loop.hold is not None:
        return _nothing(V, "V̇ says nothing of a loop with a hold, whose commands lag behind")
    root = enclose_equilibrium(V.loop, V.centre)
    if root is None:
        return _nothing(V, "no box around the equilibrium could be proved to hold exactly one")
    P = V.enclosed_P
    AP = root.A.T @ P
    shape, margin = smallest_eigenvalue(P)[0], smallest_eigenvalue(-(AP + AP.T))[0]
    if not shape > 0:
        return _nothing(V, "P is not positive definite by proof")
    if not margin > 0:
        return _nothing(V, "-(A'P + PA) is not positive definite by proof")
    reach, face = _distance_to_faces(V, root)
    if not reach > 0:
        return _nothing(V, "the equilibrium lies on a face of the domain")
    first = _first_ball(V, root, margin, reach)
    if first == 0:
        return _nothing(V, "no ball was found on which the remainder stays below the margin of the linear part")
    r = grow_ball(Remainder(V.loop, root, P, margin), first, reach)
    level = float(np.nextafter(np.nextafter(shape * r, 0) * r, 0) * (1 - 1e-15))
    note = f"proved on the ball |x - x_eq| <= {r:.6g}, where the remainder stays below the margin of the linear part"
    if r == reach:
        note += f"; the ball touches the domain's face {face}"
    return Bound(NAME, V, level, Strength.PROVED, note)


def _nothing(V: Quadratic, reason: str) -> Bound:
    return Bound(NAME, V, 0.0, Strength.PROVED, reason)


def _distance_to_faces(V: Quadratic, root: EquilibriumEnclosure) -> tuple[float, str]:
    """Lower bound of the distance from the equilibrium to the nearest face, and that face in words."""
    loop = V.loop
    faces = IntervalArray.numbers(end for pair in loop.domain for end in pair)
    low, high = root.x - faces[::2], faces[1::2] - root.x
    distances = np.stack([low.low, high.low], axis=1)
    i, side = np.unravel_index(np.argmin(distances), distances.shape)
    return float(distances[i, side]), f"{loop.states[i]} = {float(loop.domain[i][side]):g} {loop.units[i]}".rstrip()


def _first_ball(V: Quadratic, root: EquilibriumEnclosure, margin: float, reach: float) -> float:
    """Radius of a ball on which derivatives alone keep the remainder below the margin; 0 where none is found."""
    program, n = dynamics_program(V.loop), V.loop.n
    twice_P = 2 * V.enclosed_P

    def holds(radius: float) -> bool:
        box = root.x + IntervalArray(np.full(n, -radius), np.full(n, radius))
        over = enclose(program, box.low[None], box.high[None], order=2)
        by_slope = upper_norm((twice_P @ (over.gradient[0] - root.A)).magnitude)
        curvature = twice_P @ IntervalArray(over.hessian.low[0].reshape(n, -1), over.hessian.high[0].reshape(n, -1))
        by_curvature = upper_norm(curvature.magnitude) * radius / 2 * (1 + 1e-15)
        return by_slope < margin or by_curvature < margin

    if holds(reach):
        return reach
    small, large = reach * 2.0**-HALVINGS, reach
    if not holds(small):
        return 0.0
    for _ in range(HALVINGS // 2):
        between = float(np.sqrt(small * large))
        small, large = (between, large) if holds(between) else (small, between)
    return small
