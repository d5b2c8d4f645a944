"""A loop with a basin in closed form, and a verdict about it written by hand.

x' = -y - x (1 - x² - y²), y' = x - y (1 - x² - y²): with r² = x² + y² this is r' = -r (1 - r²), so
the basin is the open unit disc (computed independently).
"""

from __future__ import annotations

import copy

import numpy as np
import pytest

from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.loop.read import read_text
from roa.report.evidence import Evidence

DISC = """
title = "Disc whose <script>alert('inside')</script> title is no code & stays text"

[states]
x = "m"
y = "m/s"

[dynamics]
x = "-y - x*(1 - x**2 - y**2)"
y = "x - y*(1 - x**2 - y**2)"   # a comment with <b>markup</b>

[domain]
x = [-1.5, 1.5]
y = [-1.25, 1.25]

[bound]
P = [[2.0, 0.5], [0.5, 1.0]]
"""


def simulate_disc(points, threshold=1.0):
    """Results of starts of the disc of that radius, float64 (m, n): the closer to the edge the later."""
    m = len(points)
    radius = np.hypot(points[:, 0], points[:, 1])
    return Trajectories(
        initial=points,
        outcome=np.where(radius < threshold, Outcome.CONVERGED, Outcome.ESCAPED).astype(np.uint8),
        time=4.0 * radius,
        final=points,
        peak=np.abs(points),
        steps=np.full(m, 20, np.int32),
        reason=np.zeros(m, np.uint8),
    )


def states_table(n):
    """Configuration of n states that decay, each on [-1.5, 1.5]."""
    names = ["position", "speed", "tilt", "rate", "a", "b", "c"][:n]
    lines = ["[states]", *(f'{name} = "m/s"' for name in names)]
    lines += ["[dynamics]", *(f'{name} = "-{name}"' for name in names)]
    lines += ["[domain]", *(f"{name} = [-1.5, 1.5]" for name in names)]
    return read_text('title = "Decay"\n' + "\n".join(lines), "decay.toml")


class StoredDisc:
    """What the figures ask of stored samples."""

    def __init__(self, box, n=500):
        self.n = n
        self.initial = np.random.default_rng(20).uniform(box[:, 0], box[:, 1], (n, len(box)))

    def read(self, first, count):
        return simulate_disc(self.initial[first : first + count])


def bound(name, level, strength, ratio):
    return {
        "name": name,
        "level": level,
        "strength": strength,
        "note": f"what limits the {name}.",
        "P": [[2.0, 0.5], [0.5, 1.0]],
        "volume": ratio * np.pi,
        "volume_interval": None,
        "volume_strength": "estimated",
        "volume_ratio": ratio,
        "radius_ratio": ratio**0.5,
        "volume_ratio_interval": [ratio * 0.98, ratio * 1.02],
        "radius_ratio_interval": [ratio**0.5 * 0.99, ratio**0.5 * 1.01],
        "ratio_strength": "simulated",
    }


VERDICT = {
    "title": "Disc whose <script>alert('inside')</script> title is no code & stays text",
    "states": ["x", "y"],
    "units": ["m", "m/s"],
    "domain": [[-1.5, 1.5], [-1.25, 1.25]],
    "equilibrium": [0.0, 0.0],
    "eigenvalues": [[-1.0, 1.0], [-1.0, -1.0]],
    "stability": "stable",
    "confidence": 0.99,
    "claim": None,
    "bounds": [
        bound("norm bound", 0.0411999, "proved", 0.031),
        bound("contact level", 0.31, "estimated", 0.234),
        bound("unfalsified level", 0.7928932, "simulated", 0.599),
    ],
    "bounds_note": "",
    "basin": {
        "fraction": 0.41883,
        "interval": [0.41752, 0.42014],
        "interval_method": "Student's t between 16 independent replicates",
        "confidence": 0.99,
        "volume": 3.1412,
        "volume_interval": [3.1314, 3.1511],
        "volume_unit": "m · m/s",
        "samples": 262144,
        "samples_wanted": 262144,
        "partial": False,
        "counts": {
            "absent": 0,
            "converged": 109794,
            "converged_over_limit": 0,
            "escaped": 152350,
            "settled_elsewhere": 0,
            "unresolved": 0,
            "failed": 0,
        },
        "count_intervals": {"converged": [0.41752, 0.42014], "escaped": [0.57986, 0.58248]},
        "reasons": {"blow_up": 12},
        "by_replicate": {"converged": [6862] * 16, "samples": [16384] * 16},
        "strength": "simulated",
    },
    "comparison": {
        "bound": "norm bound",
        "volume_ratio": {"value": 0.031, "interval": [0.0309, 0.0311]},
        "radius_ratio": {"value": 0.176, "interval": [0.1758, 0.1762]},
        "confidence": 0.99,
        "strength": "simulated",
    },
    "levels": [
        {"low": 0.0, "high": 0.2, "samples": 6000, "converged": 6000, "share": 1.0, "interval": [0.999, 1.0]},
        {"low": 0.2, "high": 0.7928932, "samples": 6000, "converged": 6000, "share": 1.0, "interval": [0.999, 1.0]},
        {"low": 0.7928932, "high": 2.2, "samples": 6000, "converged": 2400, "share": 0.4, "interval": [0.38, 0.42]},
        {"low": 2.2, "high": 9.0, "samples": 0, "converged": 0, "share": None, "interval": [0.0, 1.0]},
    ],
    "target": "V <= 0.0412, a level set in which V decreases by proof",
    "cautions": [
        "A certificate is about the model in the configuration, not about the machine.",
        "Simulation looks at samples and does not prove: a start that was not drawn may end differently.",
        "Every number covers the configured domain, parameters and horizon and says nothing of anything outside them.",
        "Where people can be hurt, this result is one input to a safety case under the local codes and the "
        "responsible licensed engineer.",
    ],
    "provenance": {
        "command": "roa run disc.toml --out 'a <b> folder'",
        "created": "2026-12-01T12:00:00+00:00",
        "seed": 1,
        "samples": 262144,
        "jobs": 2,
        "fingerprint": "0123456789abcdef" * 4,
        "processor": "a processor",
        "platform": "a platform",
        "versions": {"python": "3.11.2", "numpy": "2.4.6"},
    },
}

CLAIM = {
    "result": "refuted",
    "decrease": "refuted",
    "reason": "A start inside the claimed set, with V = 1.99, escaped, and so it does again.",
    "level": 2.0,
    "P": [[2.0, 0.5], [0.5, 1.0]],
    "strength": "estimated",
    "counterexample": {
        "initial": [0.9, 0.6],
        "V": 1.99,
        "outcome": "escaped",
        "time": 2.5,
        "replay": "roa replay disc.toml --from x=0.9,y=0.6",
        "strength": "simulated",
    },
    "witness": [0.9, 0.6],
    "largest_level_inside": None,
    "nonconverging_fraction_upper": None,
    "confidence": 0.99,
    "fraction": 0.999,
    "draws": 0,
    "failures": 0,
}


@pytest.fixture
def configuration():
    return read_text(DISC, "disc.toml")


@pytest.fixture
def verdict():
    return copy.deepcopy(VERDICT)


@pytest.fixture
def claimed(verdict):
    """Return a function that gives the verdict with a claim, changed as its keywords say."""

    def with_claim(**changes):
        return verdict | {"claim": copy.deepcopy(CLAIM) | changes, "comparison": verdict["comparison"]}

    return with_claim


@pytest.fixture
def stored(configuration):
    return StoredDisc(configuration.loop.box)


@pytest.fixture
def evidence(configuration, verdict, stored):
    """The run of the disc, as figures see it; ten times tighter tolerances move its edge by 0.004."""
    return Evidence(configuration, verdict, stored, simulate_disc, lambda points: simulate_disc(points, 1.004))


@pytest.fixture
def evidence_of(verdict):
    """Return a function that gives the run of n decaying states with bounds of the given level."""

    def with_states(n, level=0.05, **changes):
        configuration = states_table(n)
        P = np.eye(n).tolist()
        bounds = [one | {"level": level, "P": P} for one in verdict["bounds"]]
        loop = configuration.loop
        changed = verdict | {
            "states": list(loop.states), "units": list(loop.units), "domain": loop.box.tolist(),
            "equilibrium": [0.0] * n, "bounds": bounds,
        } | changes  # fmt: skip
        return Evidence(configuration, changed, StoredDisc(loop.box), simulate_disc, simulate_disc)

    return with_states
