"""Intervals about a share: exact binomial, Wilson, and the spread between independent replicates.

Sources: C. Clopper and E. Pearson, "The use of confidence or fiducial limits illustrated in the case of the
binomial", Biometrika 26 (1934); E. Wilson, "Probable inference, the law of succession, and statistical
inference", JASA 22 (1927); S. Wilks, "Determination of sample sizes for setting tolerance limits", Annals of
Mathematical Statistics 12 (1941); A. Owen, "Monte Carlo variance of scrambled net quadrature", SIAM J. Numer.
Anal. 34 (1997), for the error from replicates. All from memory.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.stats import beta, binom, norm, t

# Below this many hits (or misses) per replicate the spread between replicates is too coarse for Student's t:
# counts are then so few that several replicates agree by chance. Tried by simulation: tests/basin/test_intervals.py.
COUNTS_PER_REPLICATE = 5


@dataclass(frozen=True)
class Interval:
    """An interval that says how it was found; `low < high` always.

    Attributes
    ----------
    low, high : float
    confidence : float in (0, 1), two-sided
    method : str, a phrase for the reader
    """

    low: float
    high: float
    confidence: float
    method: str

    def scaled(self, factor: float) -> Interval:
        """Return the interval of `factor` (> 0) times the quantity."""
        return Interval(self.low * factor, self.high * factor, self.confidence, self.method)


def clopper_pearson(k: int, n: int, confidence: float) -> Interval:
    """Exact two-sided binomial interval for k hits among n independent samples; (0, 1) for n = 0."""
    tail = (1 - confidence) / 2
    # Set by hand: the beta quantile at a parameter of zero is NaN.
    low = 0.0 if k == 0 else float(beta.ppf(tail, k, n - k + 1))
    high = 1.0 if k == n else float(beta.isf(tail, k + 1, n - k))
    return Interval(low, high, confidence, "exact binomial (Clopper–Pearson)")


def clopper_pearson_upper(k: int, n: int, confidence: float) -> float:
    """Exact one-sided upper limit of the share for k hits among n independent samples; 1 for k = n."""
    return 1.0 if k == n else float(beta.isf(1 - confidence, k + 1, n - k))


def wilson(k: int, n: int, confidence: float) -> Interval:
    """Wilson's score interval for k hits among n independent samples; (0, 1) for n = 0."""
    method = "score interval (Wilson)"
    if n == 0:
        return Interval(0.0, 1.0, confidence, method)
    z = float(norm.isf((1 - confidence) / 2))
    share = k / n
    centre = (share + z**2 / (2 * n)) / (1 + z**2 / n)
    half = z * np.sqrt(share * (1 - share) / n + z**2 / (4 * n**2)) / (1 + z**2 / n)
    # By hand at the ends, where the subtraction leaves a rounding error instead of 0 or 1.
    low = 0.0 if k == 0 else float(centre - half)
    high = 1.0 if k == n else float(centre + half)
    return Interval(low, high, confidence, method)


def success_run_samples(fraction: float, confidence: float, failures: int = 0) -> int:
    """Smallest number of samples that shows a share of at least `fraction` when at most `failures` fail.

    Wilks's one-sided sample size: the smallest n with P(at most `failures` among n | 1 - fraction) <= 1 - confidence.
    Both `fraction` and `confidence` lie strictly between 0 and 1.
    """
    if not (0 < fraction < 1 and 0 < confidence < 1):
        raise ValueError(f"fraction {fraction} and confidence {confidence} must lie strictly between 0 and 1")

    def enough(n: int) -> bool:
        return bool(binom.cdf(failures, n, 1 - fraction) <= 1 - confidence)

    low, high = failures, failures + 1  # `low` samples are never enough: all of them may fail
    while not enough(high):
        low, high = high, 2 * high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if enough(middle) else (middle, high)
    return high


def replicate_interval(converged: Sequence[int], sizes: Sequence[int], confidence: float) -> Interval:
    """Interval of a share from independent replicates of a scrambled design.

    Points of one replicate depend on each other, so no binomial law holds for them; the replicates are independent
    and each is unbiased, so the spread between them measures the error, whatever the design gained.

    * Few hits or few misses (fewer than `COUNTS_PER_REPLICATE` a replicate): the exact binomial as for independent
      samples. A scrambled net spreads its points more evenly than chance does, so this errs on the wide side.
    * Otherwise share ± Student's t · spread / sqrt(R), the spread with weights where sizes differ. The half-width is
      at least that of a count that is short by the same part of one sample in every replicate and goes unseen:
      if the part is d, all R replicates agree with probability (1 - d)^R.

    Parameters
    ----------
    converged, sizes : hits and samples of each replicate
    confidence : float in (0, 1)
    """
    hits, n = np.asarray(converged, dtype=float), np.asarray(sizes, dtype=float)
    hits, n = hits[n > 0], n[n > 0]
    replicates, total = len(n), n.sum()
    if replicates < 2 or min(hits.sum(), (n - hits).sum()) < COUNTS_PER_REPLICATE * replicates:
        few = clopper_pearson(int(hits.sum()), int(total), confidence)
        return Interval(few.low, few.high, confidence, f"{few.method}, as for independent samples")
    share = hits.sum() / total
    residuals = n / total * (hits / n - share)
    error = np.sqrt(replicates / (replicates - 1) * np.sum(residuals**2))
    unseen = (1 - (1 - confidence) ** (1 / replicates)) / n.min()
    half = max(float(t.isf((1 - confidence) / 2, replicates - 1)) * error, unseen)
    method = f"Student's t between {replicates} independent replicates"
    return Interval(float(max(share - half, 0.0)), float(min(share + half, 1.0)), confidence, method)


def grid_interval(converged: NDArray[np.bool_], confidence: float) -> Interval:
    """Interval of a share from a complete grid: cells at the edge of the set are counted as out, then as in.

    Nothing here is random. A cell is at the edge where one of its neighbours (diagonal ones too) ended differently;
    the interval holds the share of every set without a part thinner than a cell. An exact binomial interval was
    rejected: for three and more states a grid errs by 1/(2 m) for an edge along an axis, which is much more.

    Parameters
    ----------
    converged : bool (m_1, ..., m_n), one entry a cell
    """
    cells = converged.astype(np.uint8)
    highest = ndimage.maximum_filter(cells, size=3, mode="nearest")
    lowest = ndimage.minimum_filter(cells, size=3, mode="nearest")
    if np.array_equal(highest, lowest):  # no edge seen: only the number of cells limits what was missed
        few = clopper_pearson(int(cells.sum()), cells.size, confidence)
        return Interval(few.low, few.high, confidence, f"{few.method}, as for independent samples")
    method = "cells of the grid at the edge counted as out, then as in; misses whatever is thinner than a cell"
    return Interval(float(lowest.mean()), float(highest.mean()), confidence, method)
