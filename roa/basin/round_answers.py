"""The answers of a sweep in rounds, and the passage through its design that they lead to."""

from __future__ import annotations

from functools import cached_property
from typing import Generic, Protocol, TypeVar

import numpy as np

from roa.basin.share import ByReplicate
from roa.sweep.designs import Answers, Course, follow

CourseT_co = TypeVar("CourseT_co", bound=Course, covariant=True)


class _Design(Protocol[CourseT_co]):
    def course(self) -> CourseT_co:
        """A new passage through the rounds."""


class RoundAnswers(Generic[CourseT_co]):
    """What a sweep in rounds answered, slice by slice in the order of the indices.

    Attributes
    ----------
    by_replicate : hits and samples of replicates: none, since such starts are not spread evenly over the domain
    """

    by_replicate: ByReplicate = ((), ())

    def __init__(self, design: _Design[CourseT_co]) -> None:
        self._in_rounds = design
        self._answers: list[Answers] = []

    def add(self, first: int, yes: Answers) -> None:
        """Take the answers of starts first, first + 1, …, bool (m,), in the order of the indices."""
        self._answers.append(yes)

    @property
    def samples(self) -> int:
        """Number of starts."""
        return sum(len(yes) for yes in self._answers)

    @cached_property
    def _course(self) -> CourseT_co:
        course = self._in_rounds.course()
        follow(course, np.concatenate(self._answers))
        return course
