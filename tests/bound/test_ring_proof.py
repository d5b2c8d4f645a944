"""Rings against levels that are found from the written-out formulas on a grid of angles, without the tool's own V̇."""

from decimal import Decimal

import numpy as np
import pytest
from scipy.optimize import brentq

import gallery
from roa.bound.bounds import derive_bounds
from roa.bound.ring_levels import estimate_ring
from roa.bound.ring_proof import RingProver
from roa.bound.statement import Strength
from roa.kernel.branch_and_bound import Answer
from roa.loop.equilibrium import find_equilibrium
from roa.loop.read import read_text

ANGLES = np.linspace(0, 2 * np.pi, 40001)


def pendulum(push, gain=10.0, damping=4.0, torque=5.0, bound=""):
    """The pendulum 4 sin θ - 0.3 ω held upright by PD with a clip, pushed by |d| <= push."""
    text = gallery.toml(
        ["a", "w"],
        ["w", "4*sin(a) - 0.3*w + clip(-kp*a - kd*w, -m, m) + d"],
        [(-1.5, 1.5), (-4.0, 4.0)],
        parameters={"kp": gain, "kd": damping, "m": torque},
        bound=bound,
    )
    return read_text(f"{text}\n[disturbance]\nd = [{-push}, {push}]\n", "ring.toml")


def numerical_ring(P, push, gain, damping, torque):
    """Where max V̇ over angle and d changes its sign; d enters linearly, so that its ends are the worst."""
    turn = np.linalg.inv(np.linalg.cholesky(P)).T

    def worst(level):
        a, w = turn @ np.stack([np.cos(ANGLES), np.sin(ANGLES)]) * np.sqrt(level)
        u = np.clip(-gain * a - damping * w, -torque, torque)
        rows = 2 * (P @ np.stack([a, w]))
        return max((rows[0] * w + rows[1] * (4 * np.sin(a) - 0.3 * w + u + d)).max() for d in (-push, push))

    levels = np.geomspace(1e-5, 3, 400)
    falls = np.array([worst(level) < 0 for level in levels])
    first = int(falls.argmax())
    last = first + int((~falls[first:]).argmax())
    return brentq(worst, levels[first - 1], levels[first]), brentq(worst, levels[last - 1], levels[last])


def is_proved_but_no_wider(push, gain, damping, torque):
    configuration = pendulum(push, gain, damping, torque)
    V = derive_bounds(configuration, find_equilibrium(configuration.loop, "ring.toml")).V
    c_in, c_out = numerical_ring(V.P, push, gain, damping, torque)
    prover = RingProver(V)
    proof = prover.prove(c_in * 1.005, c_out * 0.995, 20_000)
    assert proof.answer is Answer.PROVED, proof
    for wider in ((c_in * 0.999, c_out * 0.99), (c_in * 1.01, c_out * 1.001)):
        refused = prover.prove(*wider, 20_000)
        assert refused.answer is not Answer.PROVED, refused
        assert refused.witness is None or wider[0] * (1 - 1e-6) <= V.value(refused.witness) <= wider[1] * (1 + 1e-6)
    return V, c_in, c_out


def test_ring_of_the_pendulum():
    V, c_in, c_out = is_proved_but_no_wider(0.2, 10.0, 4.0, 5.0)
    estimate = estimate_ring(V)
    assert estimate.inner == pytest.approx(c_in, rel=1e-5)
    assert estimate.outer == pytest.approx(c_out, rel=1e-5)


@pytest.mark.long
@pytest.mark.parametrize("push", [0.05, 0.1, 0.2])
@pytest.mark.parametrize(
    ("gain", "damping", "torque"),
    [(10, 4, 5), (8, 3, 5), (12, 4, 8), (15, 6, 6), (9, 5, 4), (20, 8, 10), (6, 4, 5)],
)
def test_rings_of_many_pendulums(push, gain, damping, torque):
    is_proved_but_no_wider(push, gain, damping, torque)


def test_bounds_of_a_loop_with_a_disturbance():
    configuration = pendulum(0.2)
    bounds = derive_bounds(configuration, find_equilibrium(configuration.loop, "ring.toml"))
    ring, best = bounds.named("ultimate bound"), bounds.named("best ring")
    c_in, c_out = numerical_ring(bounds.V.P, 0.2, 10.0, 4.0, 5.0)
    assert ring.strength is best.strength is Strength.PROVED
    assert c_in < ring.inner < 1.005 * c_in
    assert 0.995 * c_out < ring.level < c_out
    # The shape made for it has the smaller residual set, though Q = I reaches as far out.
    assert best.inner / np.sqrt(np.linalg.det(best.V.P)) < 0.8 * ring.inner / np.sqrt(np.linalg.det(bounds.V.P))
    assert best.V.exact is not None
    assert "nominal d = 0" in bounds.note
    assert bounds.largest_proved.inner is None  # no ring is passed off as a set that converges


def test_every_trajectory_under_a_hard_disturbance_ends_in_the_inner_set():
    # The worst course that METHODS of the trade know, d = d_max sign(speed), and the one that raises V the most.
    configuration = pendulum(0.2)
    bounds = derive_bounds(configuration, find_equilibrium(configuration.loop, "ring.toml"))
    ring = bounds.named("ultimate bound")
    P, step = bounds.V.P, 2e-3
    for choose in (lambda x: np.sign(x[:, 1]), lambda x: np.sign((x @ P)[:, 1])):
        angle = np.linspace(0, 2 * np.pi, 64)
        circle = np.stack([np.cos(angle), np.sin(angle)])
        x = (np.linalg.inv(np.linalg.cholesky(P)).T @ circle * np.sqrt(ring.level)).T
        for k in range(8_000):
            u = np.clip(-10 * x[:, 0] - 4 * x[:, 1], -5, 5)
            x = x + step * np.stack([x[:, 1], 4 * np.sin(x[:, 0]) - 0.3 * x[:, 1] + u + 0.2 * choose(x)], axis=1)
            if k > 6_000:
                assert np.all(bounds.V.value(x) <= ring.inner * 1.01)


def dead_zone(**keywords):
    """A cart with friction that is pulled back only beyond 0.1 m: it may rest anywhere between."""
    return gallery.configuration("xv", ["v", "-deadzone(2*x + 2*v, 0.2) - v"], [(-2.0, 2.0), (-2.0, 2.0)], **keywords)


def test_residual_set_of_a_dead_zone():
    configuration = dead_zone(bound="P = [[1.5, 0.5], [0.5, 0.5]]\ninner = 0.1")
    equilibrium = find_equilibrium(configuration.loop, "dead_zone.toml")
    ring = derive_bounds(configuration, equilibrium).named("ultimate bound")
    assert (ring.strength, ring.inner) == (Strength.PROVED, 0.1)
    assert ring.level > 0.5
    prover = RingProver(ring.V)
    assert prover.prove(Decimal("0.0001"), Decimal("0.5"), 20_000).answer is Answer.REFUTED
