"""How far the connected part of a level set reaches, by rays from the equilibrium: where a proof has to look."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

from roa.bound.chart import Chart
from roa.bound.lyapunov_function import LyapunovFunction

Array = NDArray[np.float64]

RAYS = 2048
SCAN, BISECTIONS = 128, 12


def level_reach(V: LyapunovFunction, chart: Chart, level: float) -> tuple[Array, Array]:
    """Lowest and highest z on the rays' parts within the level and the domain, float64 (n,) each: an estimate."""
    n, loop = chart.loop.n, chart.loop
    directions = _directions(n)
    step = directions @ chart.T.T
    centre = chart.root.x.middle
    with np.errstate(divide="ignore", invalid="ignore"):
        to_faces = np.where(step > 0, loop.box[:, 1] - centre, loop.box[:, 0] - centre) / step
    longest = np.where(step != 0, to_faces, np.inf).min(axis=1)

    def within(length: Array) -> NDArray[np.bool_]:
        with np.errstate(all="ignore"):
            return np.asarray(V.value(centre + length[..., None] * step) <= level)

    lengths = longest * (np.arange(1, SCAN + 1) / SCAN)[:, None]  # (SCAN, rays)
    left = ~within(lengths)
    first = np.where(left.any(axis=0), left.argmax(axis=0), SCAN)
    near, far = longest * first / SCAN, longest * np.minimum(first + 1, SCAN) / SCAN
    for _ in range(BISECTIONS):
        middle = (near + far) / 2
        inside = within(middle)
        near, far = np.where(inside, middle, near), np.where(inside, far, middle)
    ends = far[:, None] * directions
    return ends.min(axis=0), ends.max(axis=0)


def _directions(n: int) -> Array:
    """Unit vectors (m, n), always the same: on the axes and both ways, equally spaced in the plane, else spread."""
    axes = np.concatenate([np.eye(n), -np.eye(n)])
    if n == 1:
        return axes
    if n == 2:
        angle = 2 * np.pi * np.arange(RAYS) / RAYS
        return np.stack([np.cos(angle), np.sin(angle)], axis=1)
    normal = qmc.MultivariateNormalQMC(np.zeros(n), rng=np.random.default_rng(5)).random(RAYS)
    return np.concatenate([axes, normal / np.linalg.norm(normal, axis=1, keepdims=True)])
