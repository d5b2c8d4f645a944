"""Verified bounds of the eigenvalues of symmetric interval matrices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from roa.kernel.interval_arrays import IntervalArray

Array = NDArray[np.float64]


def smallest_eigenvalue(M: IntervalArray) -> tuple[float, float]:
    """Enclose the smallest eigenvalue of every symmetric matrix in M.

    Below: with U the float eigenvectors of the midpoint C, z'(U'CU)z >= g |z|^2 and |Uz|^2 lies between
    s |z|^2 and h |z|^2, with g, s and h from Gershgorin's circles; where s > 0 this bounds the Rayleigh
    quotient of C at x = Uz, which runs through all x. A matrix of M is C plus one whose norm is at most the
    largest row sum of the radii. Above: the quotient of M at one float vector.

    Parameters
    ----------
    M : IntervalArray (n, n)

    Returns
    -------
    (low, high) : low is -inf where nothing is proved (an undefined or unbounded entry)
    """
    middle = M.middle
    if not np.all(np.isfinite(middle)):
        return -np.inf, np.inf
    middle = (middle + middle.T) / 2
    U = np.linalg.eigh(middle)[1]
    C, Ut = IntervalArray.exact(middle), IntervalArray.exact(U.T)
    gram = Ut @ U
    g, (s, h) = _circles(Ut @ (C @ U))[0], _circles(gram)
    low = -np.inf
    if s > 0:
        spread = _row_sums((M - middle).magnitude).max()
        low = float(np.nextafter(np.nextafter(g / h if g >= 0 else g / s, -np.inf) - spread, -np.inf))
    return low, _quotient(Ut @ (M @ U), gram)


def largest_eigenvalue(M: IntervalArray) -> tuple[float, float]:
    """Enclose the largest eigenvalue of every symmetric matrix in M, as `smallest_eigenvalue` does."""
    low, high = smallest_eigenvalue(-M)
    return -high, -low


def definiteness(M: IntervalArray) -> str:
    """Say whether all symmetric matrices in M are positive definite: "proved", "refuted" (none is) or "undecided"."""
    low, high = smallest_eigenvalue(M)
    return "proved" if low > 0 else "refuted" if high <= 0 else "undecided"


def _circles(M: IntervalArray) -> tuple[float, float]:
    """Bounds of the spectrum of a symmetric interval matrix by Gershgorin's circles."""
    n = len(M.low)
    off = np.where(np.eye(n, dtype=bool), 0.0, M.magnitude)
    radius = _row_sums(off)
    low = np.nextafter(np.diag(M.low) - radius, -np.inf).min()
    high = np.nextafter(np.diag(M.high) + radius, np.inf).max()
    return float(low), float(high)


def _row_sums(magnitudes: Array) -> Array:
    """Sums of non-negative rows, rounded up: n terms err by less than n 2^-53 of their sum."""
    sums: Array = np.nextafter(magnitudes.sum(axis=1) * (1 + (magnitudes.shape[1] + 2) * 2.3e-16), np.inf)
    return sums


def _quotient(congruent: IntervalArray, gram: IntervalArray) -> float:
    """Upper bound of the smallest Rayleigh quotient among the columns of U."""
    above = np.diag(congruent.high)
    size = np.where(above >= 0, np.diag(gram.low), np.diag(gram.high))
    usable = size > 0
    return float(np.nextafter(above[usable] / size[usable], np.inf).min(initial=np.inf))
