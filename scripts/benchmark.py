#!/usr/bin/env python3
"""Trajectories per second: the lanes against scipy's RK45 stepped by hand, in one run.

Both integrate starts of the same box with the same tolerances and stop at the same target and escape
sets; scipy does the first 200 of the starts, one by one. The two take turns, so that a slow moment of
a shared machine meets both, and the medians are compared. One JSON line a case goes to standard output
and to results/benchmark/, with the processor and the versions; a table goes to standard error.

    .venv/bin/python scripts/benchmark.py [--rounds N] [--samples N]
"""

from __future__ import annotations

import argparse
import json
import platform
import statistics
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numba
import numpy as np
import scipy
from scipy.integrate import RK45

import roa
from roa.bound.bounds import derive_bounds
from roa.bound.target_set import target_set
from roa.kernel.integration import Integration
from roa.kernel.lanes import Lanes, compile_lanes
from roa.kernel.outcomes import Outcome
from roa.loop.equilibrium import find_equilibrium
from roa.loop.read import read_text

SCIPY_STARTS = 200
Rhs = Callable[[float, np.ndarray], np.ndarray]

VAN_DER_POL = """
title = "reversed Van der Pol"
[states]
x = "1"
y = "1"
[dynamics]
x = "-y"
y = "x + (x**2 - 1)*y"
[domain]
x = [-3, 3]
y = [-3.5, 3.5]
"""

PENDULUM = """
title = "inverted pendulum, clipped PD"
[states]
angle = "rad"
rate = "rad/s"
[signals]
torque = "clip(-8*angle - 3*rate, -3, 3)"
[dynamics]
angle = "rate"
rate = "4*sin(angle) - 0.3*rate + torque"
[domain]
angle = [-2, 2]
rate = [-4, 4]
[sweep]
escape = 1.1
"""

SKEW = np.diag(np.linspace(1.0, 2.2, 5), 1)
SKEW = SKEW - SKEW.T


def ball_text() -> str:
    """x' = S x - (1 - |x|²) x in six states."""
    names = [f"x{i}" for i in range(6)]
    size = " + ".join(f"{name}**2" for name in names)
    rows = []
    for i in range(6):
        turn = " + ".join(f"({SKEW[i, j]!r})*x{j}" for j in range(6) if SKEW[i, j])
        rows.append(f'x{i} = "{turn} - (1 - ({size}))*x{i}"'.replace("np.float64", ""))
    states = "\n".join(f'{name} = "1"' for name in names)
    box = "\n".join(f"{name} = [-1.2, 1.2]" for name in names)
    return (
        f'title = "unit ball, six states"\n[states]\n{states}\n[dynamics]\n' + "\n".join(rows) + f"\n[domain]\n{box}\n"
    )


def pendulum_rhs(_: float, x: np.ndarray) -> np.ndarray:
    """The pendulum as one would write it for scipy."""
    torque = min(max(-8 * x[0] - 3 * x[1], -3.0), 3.0)
    return np.array([x[1], 4 * np.sin(x[0]) - 0.3 * x[1] + torque])


@dataclass(frozen=True)
class Case:
    """A loop for the lanes and the same one for scipy."""

    name: str
    text: str
    rhs: Rhs


CASES = [
    Case("van_der_pol", VAN_DER_POL, lambda _, x: np.array([-x[1], x[0] + (x[0] ** 2 - 1) * x[1]])),
    Case("pendulum", PENDULUM, pendulum_rhs),
    Case("ball6", ball_text(), lambda _, x: SKEW @ x - (1 - x @ x) * x),
]


def prepare(text: str) -> Lanes:
    """Build the lanes exactly as a sweep would, target set and all."""
    configuration = read_text(text, "benchmark")
    sweep = configuration.sweep
    equilibrium = find_equilibrium(configuration.loop, "benchmark")
    bounds = derive_bounds(configuration, equilibrium)
    target = target_set(configuration, equilibrium, bounds, np.empty((0, configuration.loop.n)))
    if target.kind != "level":
        raise SystemExit("the benchmark needs a proved target set")
    integration = Integration("tsitouras5", 1e-6, 1e-9, float(sweep.horizon), float(sweep.longest), float(sweep.escape))
    return compile_lanes(configuration.loop, target, integration)


def one_by_one(case: Case, lanes: Lanes, starts: np.ndarray) -> np.ndarray:
    """Outcomes by scipy's RK45 class, stepped by hand with the stops of the sweep."""
    target, integration = lanes.target, lanes.integration
    centre, half = lanes.loop.centre, lanes.loop.half_widths * integration.escape
    outcomes = np.empty(len(starts), np.uint8)
    for i, start in enumerate(starts):
        solver = RK45(case.rhs, 0.0, start, integration.longest, rtol=integration.rtol, atol=integration.atol)
        outcome = Outcome.UNRESOLVED
        while True:
            deviation = solver.y - target.centre
            if deviation @ target.P @ deviation <= target.level:
                outcome = Outcome.CONVERGED
                break
            if np.any(np.abs(solver.y - centre) > half):
                outcome = Outcome.ESCAPED
                break
            if solver.status != "running":
                break
            solver.step()
        outcomes[i] = outcome
    return outcomes


def measure(case: Case, samples: int, rounds: int) -> dict[str, object]:
    """Time both in turns and return the medians and their ratio."""
    lanes = prepare(case.text)
    loop = lanes.loop
    rng = np.random.default_rng(20261201)
    starts = rng.uniform(loop.box[:, 0], loop.box[:, 1], (samples, loop.n))
    lanes.run(starts[:4096])
    ours, theirs = [], []
    for _ in range(rounds):
        begin = time.perf_counter()
        reference = one_by_one(case, lanes, starts[:SCIPY_STARTS])
        theirs.append(SCIPY_STARTS / (time.perf_counter() - begin))
        begin = time.perf_counter()
        result = lanes.run(starts)
        ours.append(samples / (time.perf_counter() - begin))
    return {
        "case": case.name,
        "lanes_per_second": statistics.median(ours),
        "scipy_per_second": statistics.median(theirs),
        "ratio": statistics.median(ours) / statistics.median(theirs),
        "steps_mean": float(result.steps.mean()),
        "converged_share": float((result.outcome == Outcome.CONVERGED).mean()),
        "outcomes_that_differ": int((reference != result.outcome[:SCIPY_STARTS]).sum()),
        "samples": samples,
        "rounds": rounds,
    }


def processor() -> dict[str, object]:
    """Name the processor and whether it has 512-bit vectors."""
    model, flags = platform.processor(), ""
    try:
        for line in Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines():
            if line.startswith("model name"):
                model = line.split(":", 1)[1].strip()
            if line.startswith("flags"):
                flags = line
                break
    except OSError:
        pass
    return {"processor": model, "avx512": "avx512f" in flags}


def main() -> None:
    """Run every case and write the lines."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--samples", type=int, default=131072)
    parser.add_argument("--case", choices=[case.name for case in CASES], action="append")
    arguments = parser.parse_args()
    machine = processor() | {
        "roa": roa.__version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "numba": numba.__version__,
    }
    print(f"{machine['processor']}, AVX-512: {'yes' if machine['avx512'] else 'no'}, one core", file=sys.stderr)
    folder = Path(__file__).resolve().parents[1] / "results" / "benchmark"
    folder.mkdir(parents=True, exist_ok=True)
    with (folder / "lanes.jsonl").open("a", encoding="utf-8") as file:
        for case in CASES:
            if arguments.case and case.name not in arguments.case:
                continue
            row = measure(case, arguments.samples, arguments.rounds)
            line = json.dumps(row | machine)
            print(line)
            file.write(line + "\n")
            print(
                f"{row['case']:12} lanes {row['lanes_per_second']:10.3g}/s   scipy {row['scipy_per_second']:6.3g}/s   "
                f"ratio {row['ratio']:6.0f}   differ {row['outcomes_that_differ']}",
                file=sys.stderr,
            )


if __name__ == "__main__":
    main()
