"""Outcomes that hang on the tolerance: counted start by start, against a rule that says which ones they are."""

import numpy as np

import gallery
from roa.basin.sensitivity import sensitivity
from roa.kernel.outcomes import Outcome


def test_counts_every_start_whose_outcome_changes(sweep, inside):
    loop = gallery.cubic().loop
    loose = sweep(loop, inside(lambda x: np.abs(x[:, 0]) < 1.01))
    tight = sweep(loop, inside(lambda x: np.abs(x[:, 0]) < 1.0)).trajectories.outcome
    found = sensitivity(loose, lambda x: Outcomes(x, np.abs(x[:, 0]) < 1.0), 0.99)
    changed = np.flatnonzero(loose.trajectories.outcome != tight)
    assert (found.tried, found.changed, found.first) == (loose.n, len(changed), changed[0])
    assert found.changes == {"converged -> escaped": len(changed)}
    assert found.changed / found.tried < found.upper < 0.01
    few = sensitivity(loose, lambda x: Outcomes(x, np.abs(x[:, 0]) < 1.0), 0.99, most=1000)
    assert (few.tried, few.changed) == (1000, int((changed < 1000).sum()))


class Outcomes:
    """Outcomes alone, of starts that converge where the condition holds."""

    def __init__(self, x, converges):
        self.outcome = np.where(converges, Outcome.CONVERGED, Outcome.ESCAPED).astype(np.uint8)
