"""When a sweep has done enough: a goal for the width of the interval, or an accuracy of the share.

Whoever looks again and again stops sooner or later at an interval that is too narrow by chance. So the looks are fixed
beforehand, each twice as far on as the one before, and each gets its part of the doubt (Bonferroni).
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from scipy.stats import norm

from roa.basin.intervals import Interval, replicate_interval
from roa.basin.size import Basin, corrected
from roa.basin.tally import tally_for
from roa.errors import UserError
from roa.loop.configuration import MOST_SAMPLES, Configuration, SweepTable
from roa.sweep.designs import Answers
from roa.sweep.plan import FIRST_LOOK, Plan
from roa.sweep.samples import Samples


def goal_samples(configuration: Configuration) -> int | None:
    """Starts that reach the goal whatever the share is, at the last look; None where there is no goal.

    The worst case of independent starts, a share of a half; a scrambled design does better.

    Raises
    ------
    UserError
        That would be too many.
    """
    width = configuration.sweep.goal
    if width is None:
        return None
    looks, samples = 1, FIRST_LOOK
    while samples <= MOST_SAMPLES:
        z = float(norm.isf((1 - corrected(configuration.verdict.confidence, looks)) / 2))
        if z / np.sqrt(samples) <= width:
            return samples
        looks, samples = looks + 1, 2 * samples
    raise UserError(
        f"{configuration.source}: [sweep] goal = {{ width = {width:g} }}: may need more than 2**40 starts; ask for less"
    )


def number_of_looks(table: SweepTable, asked: int) -> int:
    """At how many moments, fixed beforehand, the sweep may end; `asked` is the most starts that it may have."""
    if table.goal is not None:
        return (asked // FIRST_LOOK).bit_length()
    return asked.bit_length() if table.accuracy is not None else 1


def looks_of(table: SweepTable, samples: Samples) -> int:
    """The same for stored samples."""
    if table.goal is None and table.accuracy is None:
        return 1
    return number_of_looks(table, samples.attributes["asked"])


def stopping(plan: Plan) -> Plan:
    """Return the plan with the looks that its configuration asks for."""
    table, asked = plan.configuration.sweep, plan.samples
    if table.goal is not None:
        looks = tuple(FIRST_LOOK << k for k in range(number_of_looks(table, asked)))
        return replace(plan, looks=looks, enough=_NarrowEnough(plan, table.goal))
    if table.accuracy is not None:
        return replace(plan, enough=_AccurateEnough(plan, table.accuracy))
    return plan


class _NarrowEnough:
    """Whether the interval from independent replicates is as narrow as the goal."""

    def __init__(self, plan: Plan, width: float) -> None:
        self._replicates, self._width = plan.replicates, width
        looks = number_of_looks(plan.configuration.sweep, plan.samples)
        self._confidence = corrected(plan.configuration.verdict.confidence, looks)

    def __call__(self, answers: Answers) -> bool:
        replicate = np.arange(len(answers)) % self._replicates
        sizes = np.bincount(replicate, minlength=self._replicates)
        hits = np.bincount(replicate[answers], minlength=self._replicates)
        found = replicate_interval(hits.tolist(), sizes.tolist(), self._confidence)
        return found.high - found.low <= self._width


class _AccurateEnough:
    """Whether the interval of a design in rounds lies within the accuracy about its share.

    Asked after every round, it looks whenever the starts have doubled since the last look.
    """

    def __init__(self, plan: Plan, accuracy: float) -> None:
        self._plan, self._accuracy = plan, accuracy
        looks = number_of_looks(plan.configuration.sweep, plan.samples)
        self._confidence = corrected(plan.configuration.verdict.confidence, looks)
        self._looked_at = 0

    def __call__(self, answers: Answers) -> bool:
        if len(answers) < self._looked_at:  # the rounds are gone through once more
            self._looked_at = 0
        if len(answers) < 2 * self._looked_at:
            return False
        self._looked_at = len(answers)
        tally = tally_for(self._plan.design)
        tally.add(0, answers)
        if tally.refusal:
            return False
        found = tally.interval(self._plan.configuration.loop.n, self._confidence)
        return half_width(found, tally.fraction) <= self._accuracy


def half_width(interval: Interval, share: float) -> float:
    """How far the share may be off, by its interval."""
    return max(interval.high - share, share - interval.low)


def goal_of(table: SweepTable, basin: Basin) -> dict[str, Any] | None:
    """What was wanted of the interval and what was reached, as plain values; None where nothing was."""
    if table.goal is None and table.accuracy is None:
        return None
    found = basin.interval
    reached = found.high - found.low if table.goal is not None else half_width(found, basin.fraction)
    wanted = table.goal if table.goal is not None else table.accuracy
    assert wanted is not None
    return {
        "kind": "width" if table.goal is not None else "accuracy",
        "wanted": wanted,
        "reached": None if basin.refusal else reached,
        "is_reached": not basin.refusal and bool(reached <= wanted),
        "looks": basin.looks,
    }
