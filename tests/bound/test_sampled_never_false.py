"""Random sampled loops: no level is proved in which V grows over a period, nor one above the contact level."""

import numpy as np
import pytest

import gallery
from roa.bound.bounds import lyapunov_function
from roa.bound.sampled_level import estimate
from roa.bound.sampled_proof import SampledProver
from roa.kernel.branch_and_bound import Answer
from roa.loop.equilibrium import find_equilibrium

LOOPS = 40
ABOVE = (1 + 1e-6, 1.001, 1.01)


def random_sampled(seed):
    rng = np.random.default_rng(seed)
    draw = lambda low, high: repr(float(rng.uniform(low, high)))  # noqa: E731
    demand = f"-{draw(2, 6)}*x - {draw(1, 3)}*v"
    command = f"clip({demand}, -{draw(0.8, 2)}, {draw(0.8, 2)})" if seed % 2 else demand
    plants = (
        f"{draw(0.3, 1.5)}*sin(x) - {draw(0, 0.5)}*v + u",
        f"{draw(-0.5, 0.5)}*x + {draw(0.1, 0.6)}*x**3 - {draw(0, 0.5)}*v + u",
        f"{draw(0.2, 0.8)}*tanh(x)*cos(v) - {draw(0, 0.5)}*v + u*(1 + {draw(0, 0.3)}*x)",
    )
    period = round(float(rng.uniform(0.01, 0.3)), 4)
    delay = round(float(rng.choice([0.0, 0.5, 1.0])) * period, 6)
    return gallery.configuration(
        "xv", ["v", plants[seed % 3]], [(-1.5, 1.5), (-3.0, 3.0)], signals={"u": command},
        hold=f'signals = ["u"]\nperiod = {period!r}\ndelay = {delay!r}',
    )  # fmt: skip


@pytest.mark.long
def test_random_sampled_loops():
    proved = judged = 0
    for seed in range(LOOPS):
        configuration = random_sampled(seed)
        equilibrium = find_equilibrium(configuration.loop, "a.toml")
        if equilibrium.stability != "stable":
            continue
        judged += 1
        V = lyapunov_function(configuration, equilibrium)
        level = estimate(V)[0]
        prover = SampledProver(V)
        for share in ABOVE:
            assert prover.prove(share * level, 4000).answer is not Answer.PROVED, (seed, share)
        share = next((s for s in (0.999, 0.97, 0.9) if prover.prove(s * level, 20_000).answer is Answer.PROVED), None)
        if share is None:
            continue
        proved += 1
        # By the Runge-Kutta map of the estimate, which shares no code with the intervals.
        rng = np.random.default_rng(seed)
        direction = rng.standard_normal((4000, len(V.whole)))
        size = rng.random((4000, 1)) ** 0.25 * np.sqrt(share * level)
        frame = np.linalg.inv(np.linalg.cholesky(V.whole)).T
        begin = size * direction / np.linalg.norm(direction, axis=1, keepdims=True) @ frame.T
        assert V.change(begin).max() < 0, seed
    assert judged >= 25
    # The rest are large sets with long periods, over which the remainder is too coarse.
    assert proved >= 0.8 * judged
