"""The share of the domain by cells refined at the edge of the basin; its interval owns up to what may be unseen."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from scipy.stats import norm

from roa.basin.intervals import Interval, clopper_pearson_upper
from roa.basin.round_answers import RoundAnswers
from roa.sweep.designs.boundary import BoundaryCourse, Look


class EdgeShare(RoundAnswers[BoundaryCourse]):
    """What the answers of a sweep with the design `boundary` say of the share."""

    @cached_property
    def refusal(self) -> str:
        """Why no share is stated, a sentence; empty where one is."""
        if not self._course.looks:
            return "The sweep ended before anything was refined; carry it on."
        return ""

    @property
    def fraction(self) -> float:
        """Share of the domain; NaN where it is refused."""
        if self.refusal:
            return float(np.nan)
        return float(sum(share * np.sum(value) for share, value, _ in self._course.leaves()))

    def interval(self, n: int, confidence: float) -> Interval:
        """Interval of the share: the edge as far as it is seen, and on each side what may have been missed.

        * A cell at the edge holds one start, drawn uniformly in it, so that the variance of its part is at most a
          quarter of its share squared; the sum over all of them is taken for normal, and is at most all of them.
        * A start drawn all over the domain contradicts a cell that seems settled as often as the settled cells are
          wrong: exact binomial limits, from the rounds that hold the later half of these starts. Later refinement
          only takes from what they stand for.

        Half of the doubt goes to the edge, a quarter to what was missed on each side.
        """
        if self.refusal:
            return Interval(0.0, 1.0, confidence, "none: nothing was refined yet")
        doubt = 1 - confidence
        at_the_edge = [(share, int(np.sum(edge))) for share, _, edge in self._course.leaves()]
        deviation = np.sqrt(sum(count * share**2 / 4 for share, count in at_the_edge))
        edge = min(float(norm.isf(doubt / 4) * deviation), sum(count * share for share, count in at_the_edge))
        starts, falsely_in, falsely_out = self._later_looks
        below, above = (clopper_pearson_upper(k, starts, 1 - doubt / 4) for k in (falsely_in, falsely_out))
        share = self.fraction
        method = (
            f"edge ± {edge:.2g} from the cells that it crosses; parts too small to be seen by {starts:,} starts all "
            f"over the domain may take {below:.2g} off or add {above:.2g}"
        )
        return Interval(max(share - edge - below, 0.0), min(share + edge + above, 1.0), confidence, method)

    @property
    def _later_looks(self) -> tuple[int, int, int]:
        """Starts all over the domain in the rounds that hold the later half of them, and contradictions."""
        later: list[Look] = []
        total = sum(look.starts for look in self._course.looks)
        for look in reversed(self._course.looks):
            later.append(look)
            if 2 * sum(one.starts for one in later) >= total:
                break
        return (
            sum(look.starts for look in later),
            sum(look.falsely_in for look in later),
            sum(look.falsely_out for look in later),
        )
