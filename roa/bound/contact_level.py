"""The contact level: the largest level of V with V̇ < 0 inside, by rays from the equilibrium. An estimate.

Along each ray the first point is found at which V̇ reaches zero, or that leaves the domain; the largest V
on the way there is the level at which the ray's part of the level set meets it. The least over all rays is
the contact level. Every ray gives a level that is reached, so rays can only overestimate; the best ones are
turned until that stops paying.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri
from scipy.stats import qmc

from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.statement import Bound, Strength
from roa.loop.model import Loop
from roa.loop.wording import point_text

Array = NDArray[np.float64]

NAME = "contact level"
RAYS_IN_THE_PLANE = 2048  # equally spaced
RAYS, RAYS_ROUGH = 4096, 512
SCAN, SCAN_TURNED = 128, 32  # points on a ray, and on one that has been turned
BISECTIONS, BISECTIONS_FIRST = 48, 10
KEPT = 8  # rays that are turned
TURNS, SHRINK = 40, 0.6  # rounds of turning, each with a smaller step: the level errs by the square of the last
FIRST_TURN = 0.3  # rad
NOTHING = 1e-9  # a ray that ends within this part of its way to the domain's faces ends at the equilibrium


@dataclass(frozen=True)
class _Ends:
    """Where m rays end.

    Attributes
    ----------
    level : (m,), largest V on the way to the end
    point : (m, n), the end
    at_face : bool (m,), the end is on a face of the domain and V̇ < 0 up to there
    """

    level: Array
    point: Array
    at_face: NDArray[np.bool_]


def contact_level(V: LyapunovFunction) -> Bound:
    """Estimate the contact level; level 0 with the reason in the note where V̇ < 0 fails next to the equilibrium."""
    frame = _frame(V)
    if frame is None:
        return Bound(NAME, V, 0.0, Strength.ESTIMATED, "P is not positive definite")
    directions = unit_vectors(V.loop.n, RAYS_IN_THE_PLANE if V.loop.n == 2 else RAYS)
    ends = _cast(V, frame, directions, SCAN, BISECTIONS_FIRST)
    best = directions[np.argsort(ends.level, kind="stable")[:KEPT]]
    ends = _turn(V, frame, best, _cast(V, frame, best, SCAN, BISECTIONS))
    i = int(np.argmin(ends.level))
    level, point = float(ends.level[i]), ends.point[i]
    face = _touched_face(V)
    if face is not None and face[0] <= level:
        level, point = face
        return Bound(NAME, V, level, Strength.ESTIMATED, _touching(V.loop, point), point)
    if not level > 0:
        return Bound(NAME, V, 0.0, Strength.ESTIMATED, "V̇ < 0 or V > 0 fails next to the equilibrium", point)
    place = point_text(V.loop.states, V.loop.units, point)
    note = _touching(V.loop, point) if ends.at_face[i] else f"V̇ reaches zero at {place}"
    return Bound(NAME, V, level, Strength.ESTIMATED, note, point)


def rough_level(V: LyapunovFunction) -> float:
    """The contact level by rays that are not turned: above it, by little in the plane; 0 where there is none."""
    frame = _frame(V)
    if frame is None:
        return 0.0
    rays = unit_vectors(V.loop.n, RAYS_ROUGH)
    face = _touched_face(V)
    return float(min(_cast(V, frame, rays, SCAN, BISECTIONS_FIRST).level.min(), np.inf if face is None else face[0]))


def _frame(V: LyapunovFunction) -> Array | None:
    """Matrix W whose columns span the rays x = centre + W u: V = |u|^2 if quadratic, else half-widths."""
    if not isinstance(V, Quadratic):
        return np.diag(V.loop.half_widths)
    try:
        return np.linalg.inv(np.linalg.cholesky(V.P)).T
    except np.linalg.LinAlgError:
        return None


def unit_vectors(n: int, count: int) -> Array:
    """Unit vectors (count, n): equally spaced in the plane, else quasi-random; always the same; two on a line."""
    if n == 1:
        return np.array([[1.0], [-1.0]])
    if n == 2:
        angle = 2 * np.pi * np.arange(count) / count
        return np.stack([np.cos(angle), np.sin(angle)], axis=1)
    sample = qmc.Sobol(n, scramble=True, rng=np.random.default_rng(7)).random(2 ** (count - 1).bit_length())[:count]
    return _unit(ndtri(np.clip(sample, 1e-12, 1 - 1e-12)))


def _unit(vectors: Array) -> Array:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def _cast(V: LyapunovFunction, frame: Array, directions: Array, scan: int, bisections: int) -> _Ends:
    """Follow rays from the equilibrium to their first end, in `scan` steps and then by bisection."""
    step = directions @ frame.T
    with np.errstate(divide="ignore", invalid="ignore"):
        to_faces = np.where(step > 0, V.loop.box[:, 1] - V.centre, V.loop.box[:, 0] - V.centre) / step
    longest = np.where(step != 0, to_faces, np.inf).min(axis=1)
    share = np.arange(1, scan + 1) / scan
    points = V.centre + (longest[:, None] * share)[:, :, None] * step[:, None]
    ended = ~_decreasing(V, points)
    at_face = np.logical_not(ended.any(axis=1))
    first = np.where(at_face, scan - 1, ended.argmax(axis=1))
    near, far = longest * first / scan, longest * (first + 1) / scan
    for _ in range(bisections):
        middle = (near + far) / 2
        inside = _decreasing(V, V.centre + middle[:, None] * step)
        near, far = np.where(inside, middle, near), np.where(inside, far, middle)
    length = np.where(at_face, longest, near)
    point = V.centre + length[:, None] * step
    before = np.arange(scan) < first[:, None]
    on_the_way = np.where(before, V.value(points), 0.0).max(axis=1)
    level = np.maximum(np.nan_to_num(V.value(point), nan=0.0), np.nan_to_num(on_the_way))
    return _Ends(np.where(length > NOTHING * longest, level, 0.0), point, at_face)


def _decreasing(V: LyapunovFunction, x: Array) -> NDArray[np.bool_]:
    """Whether V > 0 and V̇ < 0 at the points; what is not a number is not."""
    with np.errstate(invalid="ignore", over="ignore"):
        return np.asarray((V.decrease(x) < 0) & (V.value(x) > 0))


def _turn(V: LyapunovFunction, frame: Array, directions: Array, ends: _Ends) -> _Ends:
    """Turn each ray by random steps of shrinking length, and keep what lowers its level.

    No gradients, since V̇ = 0 has corners where the loop saturates.
    """
    m, n = directions.shape
    trials = 8 * n
    random = np.random.default_rng(11)
    size = FIRST_TURN
    for _ in range(TURNS if n > 1 else 0):
        turned = _unit(directions[:, None] + size * random.normal(size=(m, trials, n)) / np.sqrt(n))
        new = _cast(V, frame, turned.reshape(-1, n), SCAN_TURNED, BISECTIONS)
        levels = new.level.reshape(m, trials)
        choice = levels.argmin(axis=1)
        row = np.arange(m) * trials + choice
        better = levels[np.arange(m), choice] < ends.level
        directions = np.where(better[:, None], turned[np.arange(m), choice], directions)
        ends = _Ends(
            np.where(better, new.level[row], ends.level),
            np.where(better[:, None], new.point[row], ends.point),
            np.where(better, new.at_face[row], ends.at_face),
        )
        size *= SHRINK
    return ends


def _touched_face(V: LyapunovFunction) -> tuple[float, Array] | None:
    """Level at which an ellipsoid first touches a face of the domain, and where; None for a formula."""
    if not isinstance(V, Quadratic):
        return None
    inverse = np.linalg.inv(V.P)
    gaps = V.loop.box - V.centre[:, None]
    levels = gaps**2 / np.diag(inverse)[:, None]
    i, side = np.unravel_index(np.argmin(levels), levels.shape)
    return float(levels[i, side]), V.centre + gaps[i, side] * inverse[:, i] / inverse[i, i]


def _touching(loop: Loop, x: Array) -> str:
    """Say which face of the domain the point x lies on."""
    gaps = np.abs(loop.box - x[:, None]) / loop.half_widths[:, None]
    i, side = np.unravel_index(np.argmin(gaps), gaps.shape)
    return f"the level set touches the domain's face {loop.states[i]} = {loop.box[i, side]:g} {loop.units[i]}".rstrip()
