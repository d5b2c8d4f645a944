"""Initial value problems with published ends, integrated by the lanes.

Ends of HIRES, Robertson and Van der Pol are those of the Bari/CWI "Test Set for IVP Solvers" (F. Mazzia,
C. Magherini; earlier W. Lioen, J. de Swart) and of E. Hairer, G. Wanner, Solving Ordinary Differential Equations II;
Arenstorf's orbit and its period are those of Hairer, Nørsett, Wanner, Solving Ordinary Differential Equations I, II.0.
"""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import gallery
from roa.kernel.integration import Integration
from roa.kernel.lanes import compile_lanes
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target


def final(dynamics, start, duration, method, rtol, atol, size, escape=100.0, **keywords):
    """State after `duration`; the target set is too far away to be met."""
    states = [f"y{i}" for i in range(len(start))]
    box = [(-size, size)] * len(start)
    loop = gallery.configuration(states, dynamics, box, **keywords).loop
    target = Target("level", np.full(loop.n, 0.5 * escape * size), loop.half_widths, P=np.eye(loop.n), level=1e-9)
    settings = Integration(method, rtol, atol, horizon=duration, longest=duration, escape=escape)
    result = compile_lanes(loop, target, settings).run(np.array([start, start], dtype=float))
    assert (result.outcome == Outcome.UNRESOLVED).all()
    assert result.time[0] == pytest.approx(duration, rel=1e-11)
    np.testing.assert_array_equal(result.final[0], result.final[1])
    return result.final[0], int(result.steps[0])


def test_arenstorf_orbit_closes():
    one, other = "((y0 + mu)**2 + y1**2)**1.5", "((y0 - rest)**2 + y1**2)**1.5"
    start = [0.994, 0.0, 0.0, -2.00158510637908252240537862224]
    end, _ = final(
        ["y2", "y3", "y0 + 2*y3 - rest*(y0 + mu)/d1 - mu*(y0 - rest)/d2", "y1 - 2*y2 - rest*y1/d1 - mu*y1/d2"],
        start, 17.0652165601579625588917206249, "dormand_prince8", 1e-8, 1e-8, 4.0,
        parameters={"mu": 0.012277471}, signals={"rest": "1 - mu", "d1": one, "d2": other},
    )  # fmt: skip
    assert np.abs(end - start)[:2].max() < 1e-6
    assert np.abs(end - start)[2:].max() < 1e-3  # of a speed of 2 that turns within 1e-3 there


def test_van_der_pol_of_1e_6():
    dynamics = ["y1", "((1 - y0**2)*y1 - y0)*1e6"]
    end, steps = final(dynamics, [2.0, 0.0], 2.0, "rodas4", 1e-8, 1e-10, 4.0, escape=1e7)
    np.testing.assert_allclose(end, [1.706167732170483, -0.8928097010247975], rtol=1e-6)
    assert steps < 20_000  # an explicit method takes more than a million


@pytest.mark.long
def test_hires():
    dynamics = [
        "-1.71*y0 + 0.43*y1 + 8.32*y2 + 0.0007",
        "1.71*y0 - 8.75*y1",
        "-10.03*y2 + 0.43*y3 + 0.035*y4",
        "8.32*y1 + 1.71*y2 - 1.12*y3",
        "-1.745*y4 + 0.43*y5 + 0.43*y6",
        "-280*y5*y7 + 0.69*y3 + 1.71*y4 - 0.43*y5 + 0.69*y6",
        "280*y5*y7 - 1.81*y6",
        "-280*y5*y7 + 1.81*y6",
    ]
    end, _ = final(dynamics, [1, 0, 0, 0, 0, 0, 0, 0.0057], 321.8122, "rodas4", 1e-9, 1e-13, 2.0)
    expected = [
        0.7371312573325668e-3, 0.1442485726316185e-3, 0.5888729740967575e-4, 0.1175651343283149e-2,
        0.2386356198831331e-2, 0.6238968252742796e-2, 0.2849998395185769e-2, 0.2850001604814231e-2,
    ]  # fmt: skip
    np.testing.assert_allclose(end, expected, rtol=1e-6)


@pytest.mark.parametrize(
    ("duration", "expected", "rtol"),
    [
        (40.0, [0.715827069, 9.18553476e-6, 0.284163746], 1e-8),
        (1e11, [0.2083340149701255e-7, 0.8333360770334713e-13, 0.9999999791665050], 1e-5),
    ],
)
def test_robertson(duration, expected, rtol):
    slow, fast, square = "0.04*y0", "1e4*y1*y2", "3e7*y1**2"
    dynamics = [f"-{slow} + {fast}", f"{slow} - {fast} - {square}", square]
    end, _ = final(dynamics, [1.0, 0.0, 0.0], duration, "rodas4", 1e-9, 1e-19, 2.0)
    np.testing.assert_allclose(end, expected, rtol=rtol)


def lagging_pendulum():
    """The clipped pendulum of the benchmark with an actuator that lags by 1e-4 s."""
    return gallery.configuration(
        ["angle", "rate", "torque"],
        ["rate", "4*sin(angle) - 0.3*rate + torque", "(clip(-8*angle - 3*rate, -3, 3) - torque)/lag"],
        [(-2.0, 2.0), (-4.0, 4.0), (-3.0, 3.0)],
        parameters={"lag": 1e-4},
    ).loop


def test_actuator_lag_takes_the_stiff_method_a_fraction_of_the_work_and_as_accurate():
    loop = lagging_pendulum()
    target = Target("level", np.zeros(3), loop.half_widths, P=np.diag([1.0, 0.25, 0.1]), level=1e-3)
    starts = np.random.default_rng(7).uniform(-1, 1, (64, 3)) * loop.half_widths
    ends = {}
    for method in ("tsitouras5", "rodas4"):
        settings = Integration(method, 1e-6, 1e-9, horizon=2.0, longest=2.0, escape=1.5)
        ends[method] = compile_lanes(loop, target, settings).run(starts)
    np.testing.assert_array_equal(ends["rodas4"].outcome, ends["tsitouras5"].outcome)
    assert ends["tsitouras5"].steps.mean() > 50 * ends["rodas4"].steps.mean()
    undecided = np.flatnonzero(ends["rodas4"].outcome == Outcome.UNRESOLVED)[:4]
    errors = dict.fromkeys(ends, 0.0)
    for i in undecided:
        exact = solve_ivp(
            lambda _, x: loop.rhs(x), (0, 2.0), starts[i], "Radau", rtol=1e-11, atol=1e-13,
            jac=lambda _, x: loop.jacobian(x),
        ).y[:, -1]  # fmt: skip
        for method, result in ends.items():
            errors[method] = max(errors[method], float(np.abs(result.final[i] - exact).max()))
    assert errors["rodas4"] < 1e-5
    assert errors["rodas4"] < 10 * errors["tsitouras5"] + 1e-6
