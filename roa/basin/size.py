"""The size of the basin: the share of the domain that converges, its volume, and the counts behind them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from roa.basin.intervals import Interval
from roa.basin.share import Share, Tally
from roa.basin.tally import in_rounds, tally_of
from roa.kernel.outcomes import Outcome, Reason
from roa.loop.model import Loop
from roa.sweep.samples import Samples


@dataclass(frozen=True)
class Basin:
    """What a sweep says of the size of the basin inside the domain; every number is *simulated*.

    Attributes
    ----------
    share : what the answers of the starts say of the share
    counts : by outcome word, every outcome listed
    by_outcome : share of the samples with each outcome that occurred, by its word; none of a design in rounds, whose
        samples are not spread evenly
    reasons : by reason word, only those that occurred
    wanted : number of starts that the sweep is to have
    confidence : of the intervals, two-sided
    looks : at how many moments the sweep might have ended, by what it showed; each interval takes them into account
    loop : Loop
    safe : share of the samples that converge without crossing a limit; None where there are no limits
    """

    share: Tally
    counts: Mapping[str, int]
    by_outcome: Mapping[str, Share]
    reasons: Mapping[str, int]
    wanted: int
    confidence: float
    loop: Loop
    looks: int = 1
    safe: Share | None = None

    @property
    def samples(self) -> int:
        """Number of starts."""
        return self.share.samples

    @property
    def partial(self) -> bool:
        """Whether the sweep is to have more samples than these."""
        return self.samples < self.wanted

    @property
    def fraction(self) -> float:
        """Share of the domain; NaN where none is stated, for which `refusal` gives the reason."""
        return self.share.fraction

    @property
    def refusal(self) -> str:
        """Why no share is stated, a sentence; empty where one is."""
        return self.share.refusal

    @cached_property
    def interval(self) -> Interval:
        """Interval of the share."""
        return self.interval_at(self.confidence)

    @property
    def outcome_intervals(self) -> Mapping[str, Interval]:
        """Interval of the share of each outcome that occurred."""
        return {
            word: share.interval(self.loop.n, corrected(self.confidence, self.looks))
            for word, share in self.by_outcome.items()
        }

    def interval_at(self, confidence: float) -> Interval:
        """Interval of the share at another confidence."""
        found = self.share.interval(self.loop.n, corrected(confidence, self.looks))
        if self.looks == 1:
            return found
        method = f"{found.method}; each of {self.looks} looks fixed beforehand has its part of the doubt"
        return replace(found, confidence=confidence, method=method)

    @property
    def volume(self) -> float:
        """Volume of the basin inside the domain, product of the state units."""
        return self.fraction * self.loop.domain_volume

    @property
    def volume_interval(self) -> Interval:
        """Interval of the volume."""
        return self.interval.scaled(self.loop.domain_volume)


def corrected(confidence: float, looks: int) -> float:
    """The confidence of one look, so that all of them hold together at `confidence` (Bonferroni)."""
    return 1 - (1 - confidence) / looks


def measure(
    samples: Samples, loop: Loop, confidence: float, centre: NDArray[np.float64] | None = None, looks: int = 1
) -> Basin:
    """Measure the basin in one pass over the stored samples; the memory does not grow with their number.

    Of a design in rounds the answers are kept, one byte each. `centre` is the equilibrium, float64 (n,), state units.
    """
    share = tally_of(samples, loop, np.zeros(loop.n) if centre is None else centre)
    by_outcome = {outcome: Share(samples.design, samples.replicates) for outcome in Outcome}
    reasons = np.zeros(len(Reason), dtype=np.int64)
    for first, trajectories in samples.chunks():
        share.add(first, trajectories.in_basin)
        for outcome, one in by_outcome.items():
            one.add(first, trajectories.outcome == outcome)
        reasons += np.bincount(trajectories.reason, minlength=len(Reason))
    return Basin(
        share=share,
        counts={outcome.word: int(one.hits.sum()) for outcome, one in by_outcome.items()},
        by_outcome={} if in_rounds(samples) else {o.word: one for o, one in by_outcome.items() if one.hits.any()},
        reasons={reason.word: int(reasons[reason]) for reason in Reason if reason and reasons[reason]},
        wanted=samples.wanted,
        confidence=confidence,
        loop=loop,
        looks=looks,
        safe=by_outcome[Outcome.CONVERGED] if loop.limits else None,
    )
