"""The levels between which V falls under every disturbance, by floating-point search. An estimate.

Points are bad where V̇ >= 0 under the worst of the disturbance's corners, or on the faces of the domain. A gap between
the levels of bad points is a ring; its two ends are then pressed together by throwing ever closer about the bad points
next to them. More points can only narrow the gap, so that the search errs to its outside.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.loop.evaluate import evaluate

Array = NDArray[np.float64]

POINTS = 65536
MOST_CORNERS = 6  # disturbances whose corners are all tried; of more, corners are drawn
ROUNDS, SHRINK, OFFSPRING, PARENTS = 60, 0.7, 2048, 32
FIRST_STEP = 0.1  # half-widths
MARGIN = 1e-9  # by which a point with V̇ >= 0 keeps to the inside of the ring, so that its membership can be verified


@dataclass(frozen=True)
class Ring:
    """Levels inner < outer between which no bad point was found; outer 0.0 where there is no such ring."""

    inner: float
    outer: float


def estimate_ring(V: LyapunovFunction, inner: float | None = None) -> Ring:
    """Find the ring of the lowest inner level that reaches furthest out, or the outer level to a given inner one."""
    rng = np.random.default_rng(3)
    highest = _touching(V, rng)
    x = _spread(V, highest, rng)
    bad = x[_is_bad(V, x)]
    levels = np.sort(np.append(V.value(bad), highest))
    levels = levels[(levels > 0) & (levels <= highest)]
    if inner is None:
        # The widest gap by its ratio; below the lowest level nothing was sampled.
        k = int(np.argmax(levels[1:] / levels[:-1])) if len(levels) > 1 else 0
        low, high = (float(levels[k]), float(levels[k + 1])) if len(levels) > 1 else (0.0, highest)
        middle = float(np.sqrt(low * high)) if low > 0 else high / 2
        low = _pressed(V, bad, low, middle, rng)
    else:
        low = inner
        above = levels[levels > inner]
        high = float(above[0]) if len(above) else highest
        middle = inner
    high = min(highest, _pressed(V, bad, high, middle, rng))
    return Ring(low, high) if high > low else Ring(low, 0.0)


def find_rise(V: LyapunovFunction, inner: float, outer: float) -> tuple[Array, Array] | None:
    """The point of the ring, float64 (n,), at which V rises most by its own size, and under which disturbance (m,).

    None where V falls at every point that was tried.
    """
    rng = np.random.default_rng(6)
    x, size = _spread(V, outer, rng), FIRST_STEP
    for _ in range(ROUNDS):
        level = V.value(x)
        x = x[(level >= inner * (1 + MARGIN)) & (level <= outer * (1 - MARGIN))]
        if not len(x):
            return None
        growth, _ = _growth(V, x)
        order = np.argsort(-growth / V.value(x), kind="stable")[:PARENTS]
        parents = x[order][rng.integers(len(order), size=OFFSPRING)]
        children = parents + size * V.loop.half_widths * rng.standard_normal(parents.shape)
        x = np.concatenate([x[order], np.clip(children, V.loop.box[:, 0], V.loop.box[:, 1])])
        size *= SHRINK
    worst = x[:1]
    growth, corner = _growth(V, worst)
    return (worst[0], corner[0]) if growth[0] > 0 else None


def _pressed(V: LyapunovFunction, bad: Array, end: float, middle: float, rng: np.random.Generator) -> float:
    """Move one end of the gap towards its middle as far as bad points are found there."""
    rising = end < middle  # the inner end is the highest level of the bad points below the middle

    def rank(x: Array) -> Array:
        level = V.value(x)
        inside = level < middle if rising else level > middle
        return np.where(inside & (level > 0), level if rising else -level, -np.inf)

    points, size = bad, FIRST_STEP
    for _ in range(ROUNDS):
        order = np.argsort(-rank(points), kind="stable")[:PARENTS]
        points = points[order][np.isfinite(rank(points[order]))]
        if not len(points):
            return end
        parents = points[rng.integers(len(points), size=OFFSPRING)]
        step = size * V.loop.half_widths * rng.standard_normal(parents.shape)
        children = np.clip(parents + step, V.loop.box[:, 0], V.loop.box[:, 1])
        children = children[_is_bad(V, children)]
        points = np.concatenate([points, children])
        size *= SHRINK
    best = float(np.abs(rank(points)).min()) if not rising else float(rank(points).max())
    return max(end, best) if rising else min(end, best)


def _is_bad(V: LyapunovFunction, x: Array) -> NDArray[np.bool_]:
    """Whether V does not fall at x under some corner of the disturbances, or x lies on a face of the domain."""
    loop = V.loop
    growth, _ = _growth(V, x)
    on_face = np.any((x <= loop.box[:, 0]) | (x >= loop.box[:, 1]), axis=1)
    return np.asarray(~(growth < 0) | on_face)


def _growth(V: LyapunovFunction, x: Array) -> tuple[Array, Array]:
    """Largest V̇ over the corners of the disturbances at points (k, n), float64 (k,), and the corner (k, m)."""
    loop = V.loop
    growth, worst = np.full(len(x), -np.inf), np.zeros((len(x), len(loop.disturbances)))
    with np.errstate(all="ignore"):
        slope = V.gradient(x)
        values: dict[str, Array] = {name: np.asarray(float(p.value)) for name, p in loop.parameters.items()}
        values |= {name: x[:, i] for i, name in enumerate(loop.states)}
        for corner in _corners(V):
            known = values | corner
            for name, tree in loop.signals.items():
                known[name] = evaluate(tree, known)
            rhs = np.stack([np.broadcast_to(evaluate(tree, known), len(x)) for tree in loop.dynamics], axis=-1)
            rise = np.einsum("ij,ij->i", slope, rhs)
            higher = ~(rise <= growth)
            growth[higher] = rise[higher]
            worst[higher] = [float(value) for value in corner.values()]
    return growth, worst


def _corners(V: LyapunovFunction) -> list[dict[str, Array]]:
    ends = {name: tuple(map(float, pair)) for name, pair in V.loop.disturbances.items()}
    if len(ends) <= MOST_CORNERS:
        chosen = list(product(*ends.values()))
    else:
        chosen = [tuple(row) for row in np.random.default_rng(4).integers(0, 2, (2**MOST_CORNERS, len(ends)))]
        chosen = [tuple(pair[int(k)] for pair, k in zip(ends.values(), row, strict=True)) for row in chosen]
    return [{name: np.asarray(value) for name, value in zip(ends, corner, strict=True)} for corner in chosen]


def _touching(V: LyapunovFunction, rng: np.random.Generator) -> float:
    """Level at which the set reaches a face of the domain."""
    box, n = V.loop.box, V.loop.n
    if isinstance(V, Quadratic):
        gaps = np.abs(box - V.centre[:, None]).min(axis=1)
        return float(np.min(gaps**2 / np.diag(np.linalg.inv(V.P))))
    x = rng.uniform(box[:, 0], box[:, 1], (POINTS, n))
    face, side = rng.integers(n, size=POINTS), rng.integers(2, size=POINTS)
    x[np.arange(POINTS), face] = box[face, side]
    values = V.value(x)
    return float(np.min(values[np.isfinite(values)], initial=np.inf))


def _spread(V: LyapunovFunction, highest: float, rng: np.random.Generator) -> Array:
    """Points all over the set, as many near the centre by the logarithm of their distance as far out."""
    n = V.loop.n
    direction = rng.standard_normal((POINTS, n))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    length = 10.0 ** rng.uniform(-4, 0, (POINTS, 1))
    if isinstance(V, Quadratic):
        return np.asarray(V.centre + np.sqrt(highest) * length * (direction @ np.linalg.inv(np.linalg.cholesky(V.P))))
    x = V.centre + np.sqrt(n) * length * direction * V.loop.half_widths
    return np.asarray(np.clip(x, V.loop.box[:, 0], V.loop.box[:, 1]))
