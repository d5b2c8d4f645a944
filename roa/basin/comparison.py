"""A bound against the simulated basin: ratio of the volumes, and of the radii that such volumes stand for."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from roa.basin.intervals import Interval
from roa.basin.share import Share
from roa.basin.size import Basin
from roa.basin.tally import in_rounds
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Bound
from roa.bound.volume import fits_domain, volume_inside
from roa.loop.model import Loop
from roa.sweep.designs.sobol import Sobol
from roa.sweep.samples import Samples

Array = NDArray[np.float64]

# Points that measure a bound where the starts of the sweep are not spread evenly; of no sweep: a seed of their own.
POINTS, REPLICATES, SEED = 2**17, 16, 2**61 - 3


@dataclass(frozen=True)
class Ratio:
    """A ratio to the basin with its interval; `high` is infinite where the basin may be empty."""

    value: float
    interval: Interval


@dataclass(frozen=True)
class Comparison:
    """One bound beside the basin; the ratios are *simulated*, whatever the strength of the bound.

    Attributes
    ----------
    bound : Bound
    volume : of the part of {V <= level} inside the domain, product of the state units
    volume_interval : None where the volume is that of a whole ellipsoid and has no error of this kind
    volume_ratio : volume of the bound to that of the basin, None where no sample is in the basin
    radius_ratio : the n-th root of it
    """

    bound: Bound
    volume: float
    volume_interval: Interval | None
    volume_ratio: Ratio | None
    radius_ratio: Ratio | None


def compare(bounds: Sequence[Bound], basin: Basin, samples: Samples) -> tuple[Comparison, ...]:
    """Compare every bound with the basin; bounds that leave the domain are measured by the samples, in one pass.

    The interval of a ratio holds the error of the basin, and that of the bound where samples measured it; each of the
    two then gets half of the doubt (Bonferroni), so that nothing is assumed of their dependence.
    """
    sampled = [bound for bound in bounds if bound.level > 0 and not _is_whole_ellipsoid(bound)]
    evenly = ("sobol", REPLICATES) if in_rounds(samples) else (samples.design, samples.replicates)
    shares = {bound.name: Share(*evenly) for bound in sampled}
    for first, starts in _spread_evenly(samples, basin.loop) if sampled else ():
        for bound in sampled:
            shares[bound.name].add(first, bound.holds(starts))
    return tuple(_comparison(bound, shares.get(bound.name), basin) for bound in bounds)


def _spread_evenly(samples: Samples, loop: Loop) -> Iterator[tuple[int, Array]]:
    """Yield (index of the first, starts): those of the sweep, or points of their own where those are not even."""
    if in_rounds(samples):
        yield 0, Sobol(loop.box, SEED, REPLICATES, POINTS).points(0, POINTS)
        return
    for first, trajectories in samples.chunks():
        yield first, trajectories.initial


def _is_whole_ellipsoid(bound: Bound) -> bool:
    V = bound.V
    return isinstance(V, Quadratic) and bool(np.linalg.eigvalsh(V.P).min() > 0) and fits_domain(V, bound.level)


def _comparison(bound: Bound, share: Share | None, basin: Basin) -> Comparison:
    loop, confidence = basin.loop, basin.confidence
    if share is None:
        volume, volume_interval = volume_inside(bound.V, bound.level), None
        ends, basin_ends = (volume, volume), basin.volume_interval
    else:
        volume = share.fraction * loop.domain_volume
        volume_interval = share.interval(loop.n, confidence).scaled(loop.domain_volume)
        halved = (1 + confidence) / 2
        of_bound = share.interval(loop.n, halved).scaled(loop.domain_volume)
        ends, basin_ends = (of_bound.low, of_bound.high), basin.interval_at(halved).scaled(loop.domain_volume)
    if not basin.volume > 0:  # empty, or not known
        return Comparison(bound, volume, volume_interval, None, None)
    low = ends[0] / basin_ends.high
    high = ends[1] / basin_ends.low if basin_ends.low > 0 else np.inf
    ratio = Ratio(volume / basin.volume, Interval(low, high, confidence, basin_ends.method))
    return Comparison(bound, volume, volume_interval, ratio, _nth_root(ratio, loop.n))


def _nth_root(ratio: Ratio, n: int) -> Ratio:
    interval = ratio.interval
    root = Interval(interval.low ** (1 / n), interval.high ** (1 / n), interval.confidence, interval.method)
    return Ratio(ratio.value ** (1 / n), root)
