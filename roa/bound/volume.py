"""Volumes of level sets, inside the domain."""

from __future__ import annotations

from math import gamma, pi

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri
from scipy.stats import qmc

from roa.bound.lyapunov_function import LyapunovFunction, Quadratic
from roa.bound.statement import Bound

Array = NDArray[np.float64]

POINTS = 2**16  # of the quasi-Monte Carlo; its error is some 1e-3 of the result or less


def ball_volume(n: int) -> float:
    """Volume of the unit ball in n dimensions."""
    return float(pi ** (n / 2) / gamma(n / 2 + 1))


def ellipsoid_volume(P: Array, level: float) -> float:
    """Volume of {y'Py <= level}, product of the state units."""
    n = len(P)
    half_log_det = float(np.sum(np.log(np.diag(np.linalg.cholesky(P)))))
    return ball_volume(n) * float(np.exp(n / 2 * np.log(level) - half_log_det)) if level > 0 else 0.0


def half_extents(P: Array, level: float) -> Array:
    """Largest |y_i| on {y'Py <= level}, float64 (n,), state units."""
    extents: Array = np.sqrt(level * np.diag(np.linalg.inv(P)))
    return extents


def fits_domain(V: LyapunovFunction, level: float) -> bool:
    """Say whether the level set of a quadratic V lies in the domain; False for a formula, of which it is not known."""
    if not isinstance(V, Quadratic):
        return False
    extents, box = half_extents(V.P, level), V.loop.box
    return bool(np.all((V.centre - extents >= box[:, 0]) & (V.centre + extents <= box[:, 1])))


def volume_of(bound: Bound) -> float:
    """Volume of a bound's set inside the domain, product of the state units."""
    if isinstance(bound.V, Quadratic):
        return volume_inside(bound.V, bound.level)
    loop = bound.V.loop
    points = qmc.scale(_sobol(loop.n), loop.box[:, 0], loop.box[:, 1])
    return loop.domain_volume * float(np.mean(bound.holds(points))) if bound.level > 0 else 0.0


def volume_inside(V: LyapunovFunction, level: float) -> float:
    """Volume of the part of {V <= level} inside the domain, product of the state units.

    An ellipsoid that fits has its closed form. Otherwise the share of a fixed quasi-random set of points is
    counted, in the ellipsoid or, for a formula, in the domain; that is an estimate whatever the level is.
    """
    if level <= 0:
        return 0.0
    loop = V.loop
    if not isinstance(V, Quadratic):
        points = qmc.scale(_sobol(loop.n), loop.box[:, 0], loop.box[:, 1])
        return loop.domain_volume * float(np.mean(V.value(points) <= level))
    volume = ellipsoid_volume(V.P, level)
    if fits_domain(V, level):
        return volume
    points = V.centre + _ball(loop.n) @ (np.sqrt(level) * np.linalg.inv(np.linalg.cholesky(V.P)))
    inside = np.all((points >= loop.box[:, 0]) & (points <= loop.box[:, 1]), axis=1)
    return volume * float(np.mean(inside))


def _ball(n: int) -> Array:
    """Points spread evenly over the unit ball, (POINTS, n)."""
    sample = _sobol(n + 1)
    direction = ndtri(sample[:, :n])
    radius = sample[:, n:] ** (1 / n)
    return np.asarray(radius * direction / np.linalg.norm(direction, axis=1, keepdims=True))


def _sobol(n: int) -> Array:
    """Points of the open unit cube, the same in every call, (POINTS, n)."""
    points: Array = qmc.Sobol(n, scramble=True, rng=np.random.default_rng(20)).random(POINTS)
    return np.clip(points, 1e-12, 1 - 1e-12)
