"""A bound that no controller can beat, against the cart of configs/cart.toml with linearised dynamics.

With |F| <= U the unstable mode z of the linearised cart obeys z' = λ z + b F, so that no start with |λ z / b| >= U
returns whatever the controller does (common practice for null-controllable sets; numbers computed independently).
"""

from pathlib import Path

import numpy as np

from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.loop.equilibrium import find_equilibrium
from roa.loop.read import read, read_text
from roa.preparation import Preparation

CART = Path(__file__).parents[2] / "configs" / "cart.toml"


def test_no_start_beyond_the_linear_limit_converges():
    cart = read(CART)
    loop = cart.loop
    # A and B of the cart for the states position, speed, tilt, rate (computed independently from the parameters).
    A = np.array([[0, 1, 0, 0], [0, -0.181818182, 2.672727273, 0], [0, 0, 0, 1], [0, -0.454545455, 31.181818182, 0]])
    B = np.array([0.0, 1.818181818, 0.0, 4.545454545])
    closed = find_equilibrium(loop, "cart").A
    gain = (closed - A)[3] / B[3]
    np.testing.assert_allclose(closed, A + np.outer(B, gain), atol=1e-6)
    rows = [" + ".join(f"({float(a)!r})*{s}" for a, s in zip(row, loop.states, strict=True)) for row in A]
    force = " + ".join(f"({float(g)!r})*{s}" for g, s in zip(gain, loop.states, strict=True))
    text = "\n".join(
        ['title = "the cart, linearised"', "[states]", *(f'{s} = "1"' for s in loop.states)]
        + ["[signals]", f'force = "clip({force}, -2, 2)"', "[dynamics]"]
        + [f'{s} = "{row} + ({float(b)!r})*force"' for s, row, b in zip(loop.states, rows, B, strict=True)]
        + ["[domain]", *(f"{s} = {ends}" for s, ends in zip(loop.states, loop.box.tolist(), strict=True))]
    )  # fmt: skip
    prepared = Preparation(read_text(text, "linearised cart"), None, None)
    integration = Integration("tsitouras5", 1e-6, 1e-9, 60.0, 960.0, 10.0)
    lanes = compile_lanes(prepared.configuration.loop, prepared.target, integration)
    box = prepared.configuration.loop.box
    starts = np.random.default_rng(77).uniform(box[:, 0], box[:, 1], (65536, 4))
    mode = np.abs(starts[:, 2] - 0.014212 * starts[:, 1] + 0.179691 * starts[:, 3])
    beyond = mode >= 0.142124 * 2
    result = lanes.run(starts)
    assert beyond.sum() > 20_000
    assert not (result.outcome[beyond] == Outcome.CONVERGED).any()
    # And the controller does bring most of the others back: the bound is not vacuous.
    assert (result.outcome[~beyond] == Outcome.CONVERGED).mean() > 0.5
