"""The linearisation over one sampled period: closed forms, scipy's own discretisation, and what is refused."""

import math

import numpy as np
import pytest
from scipy.linalg import expm
from scipy.signal import cont2discrete

import gallery
from roa.errors import UserError
from roa.loop.equilibrium import find_equilibrium, require_stable
from roa.loop.sampled import SampledLoop, linearise


def rest(configuration):
    return find_equilibrium(configuration.loop, "a.toml")


def test_scalar_loop_by_its_closed_form():
    # x+ = e^T x - 3 (e^T - 1) x (computed independently).
    sampled = rest(gallery.sampled_saturation(0.4)).sampled
    assert sampled.multipliers[0] == pytest.approx(3 - 2 * math.exp(0.4), rel=1e-12)
    assert rest(gallery.sampled_saturation(0.69)).stability == "stable"


def test_period_at_which_it_becomes_stable_is_the_closed_form():
    # Without delay ln((k + a)/(k - a)) = ln 2; with one period of delay z² - e^T z + 3 (e^T - 1) has the product
    # of its roots at 1 for e^T = 4/3 (computed independently).
    for period, delay, limit in ((0.70, 0.0, math.log(2)), (0.3, 0.3, math.log(4 / 3))):
        configuration = gallery.sampled_saturation(period, delay)
        equilibrium = rest(configuration)
        assert equilibrium.stability == "unstable"
        assert equilibrium.sampled.stable_below == pytest.approx(limit, rel=1e-9)
        with pytest.raises(UserError) as caught:
            require_stable(equilibrium, configuration.loop, "a.toml")
        (sentence,) = caught.value.faults
        assert f"spectral radius is {equilibrium.sampled.spectral_radius:.6g}" in sentence
        assert f"stable for periods below {limit:.6g} s" in sentence
    assert rest(gallery.sampled_saturation(0.999 * math.log(4 / 3), 0.999 * math.log(4 / 3))).stability == "stable"
    assert rest(gallery.sampled_saturation(1.001 * math.log(4 / 3), 1.001 * math.log(4 / 3))).stability == "unstable"


def test_limit_itself_is_marginal():
    # x' = u, u = -x: x+ = (1 - T) x, on the unit circle at T = 2 exactly (computed independently).
    keywords = {"signals": {"u": "-x"}, "hold": 'signals = ["u"]\nperiod = 2'}
    marginal = rest(gallery.configuration("x", ["u"], [(-1.0, 1.0)], **keywords))
    assert marginal.stability == "marginal"
    assert marginal.slowest_time_constant == math.inf


def test_a_continuous_loop_that_is_unstable_is_not_helped_by_shorter_periods():
    keywords = {"signals": {"u": "-x"}, "hold": 'signals = ["u"]\nperiod = 0.1'}
    configuration = gallery.configuration("x", ["2*x + u"], [(-1.0, 1.0)], **keywords)
    with pytest.raises(UserError, match="no shorter period was found"):
        require_stable(rest(configuration), configuration.loop, "a.toml")


@pytest.mark.parametrize("delay", [0.0, 0.03, 0.1])
def test_pendulum_against_the_discretisation_of_scipy(delay):
    # scipy.signal.cont2discrete knows no delay: the two parts of the period are discretised apart and chained.
    loop = gallery.sampled_pendulum(0.1, delay).loop
    A, B, K = np.array([[0.0, 1.0], [4.0, -0.3]]), np.array([[0.0], [1.0]]), np.array([[-10.0, -4.0]])

    def zero_order_hold(t):
        if t == 0:
            return np.eye(2), np.zeros((2, 1))
        return cont2discrete((A, B, np.eye(2), np.zeros((2, 1))), t)[:2]

    (phi_1, gamma_1), (phi_2, gamma_2) = zero_order_hold(delay), zero_order_hold(0.1 - delay)
    expected = phi_2 @ phi_1 + gamma_2 @ K
    if delay:
        expected = np.block([[expected, phi_2 @ gamma_1], [K, np.zeros((1, 1))]])
    found = linearise(loop, np.zeros(2))
    np.testing.assert_allclose(found.map, expected, rtol=1e-12, atol=1e-14)
    assert found.spectral_radius == pytest.approx(np.abs(np.linalg.eigvals(expected)).max(), rel=1e-10)
    assert found.slowest_time_constant == pytest.approx(-0.1 / math.log(found.spectral_radius), rel=1e-9)


def test_time_constant_is_no_shorter_than_a_period():
    # Dead-beat: x' = u, u = -x, T = 1 brings x to rest in one sample.
    keywords = {"signals": {"u": "-x"}, "hold": 'signals = ["u"]\nperiod = 1'}
    sampled = rest(gallery.configuration("x", ["u"], [(-1.0, 1.0)], **keywords)).sampled
    assert sampled.spectral_radius == pytest.approx(0.0, abs=1e-15)
    assert sampled.slowest_time_constant == 1.0


def test_fast_plant_that_overflows_is_unstable_and_no_exception():
    keywords = {"signals": {"u": "-2e5*x"}, "hold": 'signals = ["u"]\nperiod = 1'}
    sampled = rest(gallery.configuration("x", ["1e5*x + u"], [(-1.0, 1.0)], **keywords)).sampled
    assert (sampled.spectral_radius, sampled.stability) == (math.inf, "unstable")


def test_what_is_not_held_stays_continuous():
    # The spring is a signal too, and not held: only the torque is taken out of the dynamics.
    loop = gallery.configuration(
        "xv",
        ["v", "spring + 2*torque"],
        [(-1.0, 1.0)] * 2,
        signals={"spring": "-x", "demand": "spring - v", "torque": "2*demand"},
        hold='signals = ["torque"]\nperiod = 0.1',
    ).loop
    sampled = SampledLoop(loop)
    x, u = np.array([[0.3, -0.2]]), np.array([[0.7]])
    np.testing.assert_allclose(sampled.command(x), [[2 * (-0.3 + 0.2)]])
    np.testing.assert_allclose(sampled.rhs(x, u), [[-0.2, -0.3 + 1.4]])
    A, B, K = sampled.linearised(np.zeros(2))
    np.testing.assert_allclose(A, [[0, 1], [-1, 0]])
    np.testing.assert_allclose(B, [[0], [2]])
    np.testing.assert_allclose(K, [[-2, -2]])
    E = expm(np.array([[0, 1, 0], [-1, 0, 2], [0, 0, 0]]) * 0.1)
    np.testing.assert_allclose(linearise(loop, np.zeros(2)).map, E[:2, :2] + E[:2, 2:] @ K, rtol=1e-12)
