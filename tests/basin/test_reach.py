"""What is foreseen of a claim: the number of draws, and what puts it out of reach."""

from dataclasses import fields

import numpy as np
import pytest
from sweep.small import ClosedForm

import gallery
from roa.basin.reach import foresee
from roa.bound.bounds import Bounds
from roa.bound.lyapunov_function import Quadratic
from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories

# The basin of the loop is the unit disc (closed form), and V = |x|².
GIGABYTE = 10**9


def foreseen(level="0.9", verdict="", memory=GIGABYTE, change=lambda timed: timed):
    configuration = gallery.ball(2, bound=f"level = {level}", verdict=verdict)
    points = np.random.default_rng(0).uniform(-1.2, 1.2, (2000, 2))
    timed = change(ClosedForm().run(points))
    V = Quadratic(configuration.loop, np.zeros(2), np.eye(2))
    return foresee(configuration, Bounds(V, ()), timed, memory)


def unresolved(count):
    """Let the first `count` of 100 starts within the claimed set end unresolved."""

    def change(timed):
        inside = np.flatnonzero((timed.initial**2).sum(axis=1) <= 0.9)[:100]
        outcome = timed.outcome[inside]
        outcome[:count] = Outcome.UNRESOLVED
        columns = {part.name: getattr(timed, part.name)[inside] for part in fields(timed)}
        return Trajectories(**columns | {"outcome": outcome})

    return change


# Wilks's one-sided numbers: 59 for 95/95, 2995 for 99.9/95 (published, recomputed), 4603 for 99.9/99 by logarithms.
@pytest.mark.parametrize(
    ("fraction", "confidence", "draws"), [(0.95, 0.95, 59), (0.999, 0.95, 2995), (0.999, 0.99, 4603)]
)
def test_number_of_draws(fraction, confidence, draws):
    reach = foreseen(verdict=f'accept = "supported"\nfraction = {fraction}\nconfidence = {confidence}')
    assert (reach.draws, reach.failing, reach.obstacles) == (draws, 0, ())


@pytest.mark.parametrize("accept", ["proved", "supported"])
def test_starts_that_escape_from_the_claimed_set(accept):
    reach = foreseen("1.2", f'accept = "{accept}"')
    assert reach.failing > 0
    (sentence,) = reach.obstacles
    assert "a smaller level is needed" in sentence


# One-sided 95 % limits below 5 and 10 of 100: 0.0199 and 0.0553 (beta quantiles of scipy, computed independently).
@pytest.mark.parametrize(("count", "words"), [(5, ""), (10, "at least 5.53 % of the set")])
def test_more_failures_than_the_fraction_allows(count, words):
    verdict = 'accept = "supported"\nfraction = 0.95\nconfidence = 0.95'
    reach = foreseen(verdict=verdict, change=unresolved(count))
    assert (reach.inside, reach.failing) == (100, count)
    assert len(reach.obstacles) == bool(words)
    assert words in "".join(reach.obstacles)
    # Unresolved starts refute nothing, so they are no obstacle to a proof.
    assert foreseen(change=unresolved(count)).obstacles == ()


def test_more_draws_than_memory_holds():
    verdict = 'accept = "supported"\nfraction = 0.9999999'
    (sentence,) = foreseen(verdict=verdict).obstacles
    # ln(0.01) / ln(0.9999999) = 46,051,700 draws of 128 bytes; 7,812,500 go into a gigabyte.
    assert sentence.startswith("46,051,7")
    assert "7,812,5" in sentence
    largest = float(sentence.split("fraction = ")[1].split()[0])
    assert foreseen(verdict=f'accept = "supported"\nfraction = {largest}').obstacles == ()
    assert foreseen(verdict="fraction = 0.9999999").obstacles == ()


def test_nothing_is_foreseen_without_a_claim():
    configuration = gallery.ball(2)
    assert foresee(configuration, Bounds(None, ()), ClosedForm().run(np.zeros((1, 2)) + 0.1), GIGABYTE) is None
