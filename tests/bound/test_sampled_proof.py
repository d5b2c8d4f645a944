"""Proofs about sampled loops: known basins, levels against simulation, and nothing proved that does not hold."""

from dataclasses import replace
from decimal import Decimal

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import gallery
from roa.bound.bounds import derive_bounds, lyapunov_function
from roa.bound.level_proof import LevelProver
from roa.bound.lyapunov_function import Quadratic
from roa.bound.norm_bound import norm_bound
from roa.bound.point_checks import decrease_witness
from roa.bound.sampled_level import estimate
from roa.bound.sampled_proof import SampledProver
from roa.bound.statement import Strength
from roa.bound.target_set import target_set
from roa.kernel.branch_and_bound import Answer
from roa.loop.equilibrium import find_equilibrium

BUDGET = 40_000


def prepared(configuration):
    equilibrium = find_equilibrium(configuration.loop, "a.toml")
    return equilibrium, lyapunov_function(configuration, equilibrium)


def function_of(configuration):
    return prepared(configuration)[1]


def simulated_period(start, acting, period, delay):
    """One period of the sampled pendulum of the gallery by scipy: the state and the command of the sample."""
    newest = float(np.clip(-10 * start[0] - 4 * start[1], -2.5, 2.5))
    x = np.asarray(start, float)
    for u, time in ((acting, delay), (newest, period - delay)):
        if time > 0:
            f = lambda _, y, u=u: [y[1], 4 * np.sin(y[0]) - 0.3 * y[1] + u]  # noqa: E731
            x = solve_ivp(f, (0, time), x, "DOP853", rtol=1e-11, atol=1e-13).y[:, -1]
    return x, newest


@pytest.mark.parametrize("period", [0.3, 0.69])
def test_scalar_loop_is_proved_up_to_its_basin(period):
    # V = P x² decreases exactly where |x| < 1 (computed independently).
    V = function_of(gallery.sampled_saturation(period))
    P = V.P[0, 0]
    assert estimate(V)[0] == pytest.approx(P, rel=1e-6)
    prover = SampledProver(V)
    assert prover.prove(0.9999 * P, BUDGET).answer is Answer.PROVED
    above = prover.prove(1.001 * P, BUDGET)
    assert above.answer is Answer.REFUTED
    assert abs(above.witness[0]) > 1
    assert decrease_witness(V, np.array([1.0005]))
    assert not decrease_witness(V, np.array([0.9995]))


@pytest.mark.parametrize("delay", [0.0, 0.01, 0.02])
def test_pendulum_is_proved_up_to_its_contact_level(delay):
    V = function_of(gallery.sampled_pendulum(0.02, delay))
    level, zeta, _ = estimate(V)
    prover = SampledProver(V)
    proof = prover.prove(0.99 * level, BUDGET)
    assert proof.answer is Answer.PROVED
    assert proof.boxes < 5000
    assert prover.prove(1.0001 * level, BUDGET).answer is not Answer.PROVED
    # scipy agrees about the state that limits the level, a little inside and a little outside.
    for size, sign in ((0.99, -1), (1.01, 1)):
        begin = size * zeta
        x, u = simulated_period(begin[:2], begin[2] if delay else 0.0, 0.02, delay)
        end = np.append(x, u)[: len(begin)]
        assert np.sign(end @ V.whole @ end - begin @ V.whole @ begin) == sign
    if not delay:
        assert decrease_witness(V, V.centre + 1.01 * zeta)


@pytest.mark.parametrize("delay", [0.0, 0.01])
def test_v_decreases_from_every_random_start_of_a_proved_level(delay):
    V = function_of(gallery.sampled_pendulum(0.02, delay))
    level = 0.999 * estimate(V)[0]
    assert SampledProver(V).prove(level, BUDGET).answer is Answer.PROVED
    rng = np.random.default_rng(4)
    directions = rng.standard_normal((150, len(V.whole)))
    W = np.linalg.inv(np.linalg.cholesky(V.whole)).T
    starts = np.sqrt(level) * (directions / np.linalg.norm(directions, axis=1)[:, None]) @ W.T
    starts[::2] *= rng.random((75, 1))
    for begin in starts:
        x, u = simulated_period(begin[:2], begin[2] if delay else 0.0, 0.02, delay)
        end = np.append(x, u)[: len(begin)]
        assert end @ V.whole @ end < begin @ V.whole @ begin


def test_slow_sampling_breaks_what_continuous_feedback_proves():
    # x' = u, u = -x - x³: V = x² of the continuous loop decreases everywhere. Held for half a second
    # x+ = x - (x + x³)/2, which is smaller than x just where x² < 3 (computed independently).
    keywords = {"signals": {"u": "-x - x**3"}, "bound": "P = [[1]]"}
    continuous = gallery.configuration("x", ["u"], [(-3.0, 3.0)], **keywords)
    sampled = gallery.configuration("x", ["u"], [(-3.0, 3.0)], hold='signals = ["u"]\nperiod = 0.5', **keywords)
    assert LevelProver(function_of(continuous)).prove(Decimal("8.9"), BUDGET).answer is Answer.PROVED
    V = function_of(sampled)
    prover = SampledProver(V)
    assert estimate(V)[0] == pytest.approx(3, rel=1e-6)
    assert prover.prove(Decimal("2.9999"), BUDGET).answer is Answer.PROVED
    for level in ("3.0001", "4", "8.9"):
        assert prover.prove(Decimal(level), BUDGET).answer is not Answer.PROVED
    assert decrease_witness(V, np.array([1.7325]))
    assert not decrease_witness(V, np.array([1.7315]))


def test_set_that_touches_the_domain_is_watched_between_samples():
    # Narrow in the position: the level set meets the face, and between samples the state runs on towards it.
    configuration = gallery.configuration(
        "xv", ["v", "u"], [(-0.2, 0.2), (-3.0, 3.0)],
        signals={"u": "clip(-x - 1.5*v, -1, 1)"}, hold='signals = ["u"]\nperiod = 0.1',
    )  # fmt: skip
    V = function_of(configuration)
    level, _, note = estimate(V)
    assert "touches the domain's face x" in note
    prover = SampledProver(V)
    assert prover.prove(0.99 * level, BUDGET).answer is Answer.PROVED
    assert prover.prove(1.001 * level, BUDGET).answer is Answer.UNDECIDED
    # An unsuited P: V decreases from sample to sample, but in between the carriage passes the face.
    narrow = replace(V, P=np.diag([1.0, 1e-3]))
    assert SampledProver(narrow).prove(0.0399, BUDGET).answer is not Answer.PROVED


def test_continuous_proofs_never_speak_of_a_sampled_loop():
    configuration = gallery.sampled_pendulum(0.02)
    V = function_of(configuration)
    plain = Quadratic(V.loop, V.centre, V.P)
    assert LevelProver(plain).prove(1e-6, BUDGET).answer is Answer.UNDECIDED
    assert norm_bound(plain).level == 0
    assert not decrease_witness(plain, np.array([0.9, 0.9]))


def test_bounds_and_target_of_a_sampled_loop():
    configuration = gallery.sampled_pendulum(0.02)
    equilibrium, _ = prepared(configuration)
    bounds = derive_bounds(configuration, equilibrium)
    (contact,) = bounds.stated
    assert (contact.name, contact.strength) == ("contact level", Strength.PROVED)
    assert 0.99 * contact.level_estimated <= contact.level < contact.level_estimated
    target = target_set(configuration, equilibrium, bounds, np.empty((0, 2)))
    assert target.kind == "level"
    assert target.level <= contact.level
    assert "sampling instants" in target.words


def test_given_function_with_a_delay_is_not_proved_and_says_why():
    configuration = gallery.sampled_pendulum(0.02, 0.01, bound="P = [[2, 0.5], [0.5, 0.4]]")
    equilibrium, V = prepared(configuration)
    bounds = derive_bounds(configuration, equilibrium)
    assert bounds.stated == ()
    assert "the command that still acts" in bounds.note
    assert SampledProver(V).prove(1e-6, BUDGET).answer is Answer.UNDECIDED


def test_kink_between_samples_is_not_proved_and_says_why():
    configuration = gallery.configuration(
        "x", ["-x*abs(x) + u"], [(-1.0, 1.0)], signals={"u": "-x"}, hold='signals = ["u"]\nperiod = 0.1'
    )
    equilibrium, _ = prepared(configuration)
    (contact,) = derive_bounds(configuration, equilibrium).stated
    assert contact.strength is Strength.ESTIMATED
    assert "abs stands in the continuous part" in contact.note
