"""Upper bounds of a function over many boxes, from enclosures at their centres and over the whole of them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from roa.kernel.interval_arrays import IntervalArray

Array = NDArray[np.float64]


def upper_bounds(
    value: IntervalArray,
    gradient: IntervalArray,
    box_value: IntervalArray,
    box_gradient: IntervalArray,
    box_hessian: IntervalArray,
    radius: Array,
) -> Array:
    """Bound a function from above over m boxes: the least of three forms.

    The natural form is the value over the box; the mean-value form needs the slopes over the box, also at
    kinks; Taylor's form of second order is the sharpest on small boxes where the function is smooth.

    Parameters
    ----------
    value, gradient : (m,), (m, n), at the centre
    box_value, box_gradient, box_hessian : (m,), (m, n), (m, n, n), over the box
    radius : float64 (m, n), at least the distance from the centre to each side

    Returns
    -------
    float64 (m,); inf where no form gives a number, so that nothing is proved
    """
    with np.errstate(invalid="ignore", over="ignore"):
        mean_value = _padded(value.high, box_gradient.magnitude * radius)
        slope, curvature = gradient.magnitude, box_hessian
        diagonal = np.diagonal(curvature.high, axis1=1, axis2=2)
        off = np.where(np.eye(radius.shape[1], dtype=bool), 0.0, curvature.magnitude)
        # Each off-diagonal term counts half of |H_ij| r_i r_j, and the pair (i, j), (j, i) both halves.
        mixed = np.einsum("bij,bi,bj->b", off, radius, radius) / 2
        taylor = _padded(value.high, np.concatenate([_along(slope, diagonal, radius), mixed[:, None]], axis=1))
    forms = np.stack([box_value.high, mean_value, taylor])
    least: Array = np.where(np.isnan(forms), np.inf, forms).min(axis=0)
    return least


def _along(slope: Array, curvature: Array, radius: Array) -> Array:
    """Largest slope t + curvature t^2 / 2 for |t| <= radius; a concave one may have its top inside."""
    at_end = slope * radius + curvature * radius * radius / 2
    inside = (curvature < 0) & (slope < -curvature * radius)
    top = slope * slope / (2 * np.where(inside, -curvature, 1.0))
    return np.where(inside, top, np.maximum(at_end, 0.0))


def _padded(value: Array, terms: Array) -> Array:
    """Sum of a value and non-negative terms, above every rounding error on the way.

    Each term is a few operations on numbers no larger than itself (`mixed` sums n^2 of them), hence the
    padding by their count; the concave end `at_end` cancels only against `slope * radius`, which bounds it.
    """
    count = (terms.shape[1] + 4) ** 2
    total = terms.sum(axis=1)
    return np.asarray(np.nextafter(value + total + (np.abs(value) + total) * count * 2.3e-16 + 1e-290, np.inf))
