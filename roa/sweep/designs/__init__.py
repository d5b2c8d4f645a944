"""Sampling designs, one a file: the word in the configuration is the file's name.

There are two kinds. Most designs know all their starts beforehand (`Design`). A design that refines in rounds
(`RoundDesign`) draws each round from how the starts of the rounds before it ended, and from nothing else.
"""

from __future__ import annotations

import importlib
import pkgutil
from collections.abc import Generator
from typing import Any, ClassVar, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from roa.errors import UserError
from roa.loop.wording import hint, listed

Array = NDArray[np.float64]
# Of each start whether it lies in the basin.
Answers = NDArray[np.bool_]
# Gives the starts of a round, float64 (m, n), state units, and is sent the answers, bool (m,).
Rounds = Generator[Array, Answers, None]


class Design(Protocol):
    """A rule that gives every index its initial condition; the file `sobol.py` holds the class `Sobol`.

    A design is made from (box, seed, replicates, samples): the domain as float64 (n, 2), an integer, the number of
    independent replicates that is wanted and the number of starts that is asked for.

    Attributes
    ----------
    samples : number of starts that the design really has
    replicates : number of independent replicates; start i belongs to replicate i mod replicates
    extendable : whether a larger design keeps the starts of the smaller one
    interval : what an interval for a share can stand on, in words
    parts : what of it changes results, for the fingerprint: name -> JSON-able value
    """

    in_rounds: ClassVar[Literal[False]]
    samples: int
    replicates: int
    extendable: bool
    interval: str
    parts: dict[str, Any]

    def __init__(self, box: Array, seed: int, replicates: int, samples: int) -> None: ...

    def points(self, first: int, count: int) -> Array:
        """Return starts first, …, first + count - 1, float64 (count, n), state units; a pure function."""
        ...


class Course(Protocol):
    """One passage through the rounds of a design; its attributes are what the design makes of the answers."""

    def rounds(self) -> Rounds:
        """Yield the starts of one round after the other, a pure function of the design and the answers sent."""
        ...


class RoundDesign(Protocol):
    """A design that refines in rounds; `samples` is the most that it may draw, and it may end before.

    Beside (box, seed, replicates, samples) it is made from `centre`, the equilibrium as float64 (n,), state units.
    Its starts are not spread evenly over the domain, so the share of them in the basin is no share of the domain.
    """

    in_rounds: ClassVar[Literal[True]]
    samples: int
    replicates: int
    extendable: bool
    interval: str
    parts: dict[str, Any]

    def __init__(self, box: Array, seed: int, replicates: int, samples: int, centre: Array) -> None: ...

    def course(self) -> Course:
        """Return a new passage from the first round on."""
        ...


def available() -> list[str]:
    """Return the names of the designs, sorted."""
    return sorted(module.name for module in pkgutil.iter_modules(__path__))


def load(name: str) -> type[Design] | type[RoundDesign]:
    """Return the class of the design called `name`.

    Raises
    ------
    UserError
        There is no such design.
    """
    names = available()
    if name not in names:
        raise UserError(
            f'[sweep] design = "{name}": no such sampling design; available: {listed(names)}{hint(name, names)}'
        )
    design: type[Design] | type[RoundDesign] = getattr(
        importlib.import_module(f"{__name__}.{name}"), name.title().replace("_", "")
    )
    return design


def make(name: str, box: Array, seed: int, replicates: int, samples: int, centre: Array) -> Design | RoundDesign:
    """Make the design called `name`; arguments as in the two contracts.

    Raises
    ------
    UserError
        There is no such design, or it makes no sense here.
    """
    design = load(name)
    if design.in_rounds:
        return design(box, seed, replicates, samples, centre)
    return design(box, seed, replicates, samples)


def follow(course: Course, answers: Answers) -> int:
    """Lead a course through all rounds that are answered whole; return how many of the answers those are."""
    rounds = course.rounds()
    used = 0
    starts = next(rounds, None)
    while starts is not None and used + len(starts) <= len(answers):
        stop = used + len(starts)
        starts = following(rounds, answers[used:stop])
        used = stop
    return used


def following(rounds: Rounds, answers: Answers) -> Array | None:
    """Return the starts of the next round, float64 (m, n); None where there is none."""
    try:
        return rounds.send(answers)
    except StopIteration:
        return None
