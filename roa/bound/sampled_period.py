"""Bounds of one period that begins in a level set: how far its Taylor polynomial is off, and where its states are."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.bound.held_flow import Stretch, follow, hull, product
from roa.bound.sampled_frame import HIGHEST, LOWEST, SampledFrame
from roa.kernel.interval_arrays import IntervalArray

Array = NDArray[np.float64]

FINE = 1e-6  # a remainder of this part of the slowest decrease is small enough


@dataclass(frozen=True)
class Period:
    """What is certain of one period that begins in a level set.

    Attributes
    ----------
    degree : of the Taylor polynomials
    beta : β of `sampled_proof`
    error : float64 (n,), largest difference between a state and its polynomial at any time
    tube : IntervalArray (n,), holds all states all the time
    """

    degree: int
    beta: float
    error: Array
    tube: IntervalArray


def bound_period(frame: SampledFrame, reach: float) -> Period | None:
    """Bound a period that begins with |z| <= reach, by the lowest degree that is fine enough; None where that fails."""
    found = _stretches(frame, reach)
    if found is None:
        return None
    stretches, sizes = found
    best: Period | None = None
    for degree in range(LOWEST, HIGHEST + 1):
        R = _remainder(frame, stretches, degree)
        if not np.isfinite(R).all():
            continue
        error = product(R, sizes[:, None])[:, 0]
        if len(stretches) > 1 and not np.all(error <= _margin(stretches[0][0].tube)):
            continue
        period = Period(degree, _beta(frame, R), error, hull(stretch.tube for stretch, _ in stretches))
        if best is None or period.beta < best.beta:
            best = period
        if period.beta <= FINE * (1 - frame.V.sampled.spectral_radius**2):
            break
    return best


def _stretches(frame: SampledFrame, reach: float) -> tuple[list[tuple[Stretch, Array]], Array] | None:
    """The stretches of a period, each with the matrix that bounds (|y|; |command|) at its begin by the sample.

    The columns are (|y|; |v|; |w|): state, command that still acts, command of the sample. Second: their extents.
    """
    n, m, hold = frame.n, frame.m, frame.hold
    assert frame.rest is not None
    extents = frame.extents(reach)
    start = frame.box(reach)
    new = hull([frame.commands(start), frame.rest])
    w = (new - frame.rest).magnitude
    unit = np.eye(n + 2 * m)
    if not hold.delay:
        only = follow(frame.held, start, new, hold.period)
        found = None if only is None else [(only, unit[[*range(n), *range(n + m, n + 2 * m)]])]
        return None if found is None else (found, np.concatenate([extents, np.zeros(m), w]))
    old = frame.rest + IntervalArray(-extents[n:], extents[n:])
    first = follow(frame.held, start, old, hold.delay)
    if first is None:
        return None
    stretches = [(first, unit[: n + m])]
    sizes = np.concatenate([extents, w])
    if hold.delay < hold.period:
        between = np.concatenate([product(first.growth, unit[: n + m]), unit[n + m :]])
        second = follow(frame.held, _wider(first.tube), new, hold.period - hold.delay)
        if second is None:
            return None
        stretches.append((second, between))
    return stretches, sizes


def _remainder(frame: SampledFrame, stretches: list[tuple[Stretch, Array]], degree: int) -> Array:
    """|x(T) - polynomial| <= R (|y|; |v|; |w|), (n, n + 2m).

    What the first stretch errs by, the second carries on by its growth, and begins its own polynomial with.
    """
    order = degree + 1
    n = frame.n
    total = np.zeros((n, n + 2 * frame.m))
    for stretch, before in stretches:
        own = stretch.remainder(frame.coefficients[order], order)
        begin = before.copy()
        begin[:n] = np.nextafter(begin[:n] + total, np.inf)
        total = np.nextafter(product(stretch.growth[:, :n], total) + product(own, begin), np.inf)
    return total


def _beta(frame: SampledFrame, R: Array) -> float:
    n, m, N = frame.n, frame.m, frame.N
    L = np.zeros((n + 2 * m, N + m))
    L[:N, :N] = np.abs(frame.T)  # rows of v stay zero without a delay
    L[n + m :, N:] = np.diag(np.nextafter(1 / frame.kappa, np.inf))
    P = frame.V.enclosed_whole[:n, :n].magnitude
    N_ = product(L.T, R.T, P, R, L)
    # The largest eigenvalue of a symmetric matrix is at most its largest row sum of magnitudes.
    sums = product(N_, np.ones((N + m, 1)))
    return float(np.nextafter(np.sqrt(sums.max()), np.inf))


def _wider(tube: IntervalArray) -> IntervalArray:
    margin = _margin(tube)
    return IntervalArray(tube.low - margin, tube.high + margin)


def _margin(tube: IntervalArray) -> Array:
    """What the polynomial of the first stretch may err by and still begin inside the tube of the second."""
    return np.asarray(1e-3 * (tube.high - tube.low))
