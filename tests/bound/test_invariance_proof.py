"""Energies whose basins are known by hand: what V̇ <= 0 proves by the invariance principle, and what it must not."""

import pytest

import gallery
from roa.bound.bounds import lyapunov_function
from roa.bound.invariance_proof import prove_by_invariance
from roa.bound.ring_proof import RingProver
from roa.loop.equilibrium import find_equilibrium
from roa.loop.read import read_text

ENERGY = 'V = "0.5*w**2 + 1 - cos(a)"'


def attempt(configuration, level):
    V = lyapunov_function(configuration, find_equilibrium(configuration.loop, "energy.toml"))
    return prove_by_invariance(V, level)


def pendulum(friction="b", reach=3.1, extra=""):
    """θ'' = -sin θ - b θ' with its energy; the saddles at ±π lie on level 2 (Khalil, from memory)."""
    return gallery.configuration(
        ["a", "w"], ["w", f"-sin(a) - {friction}*w{extra}"], [(-reach, reach), (-4.0, 4.0)],
        parameters={"b": 0.3}, bound=ENERGY,
    )  # fmt: skip


def test_pendulum_below_its_saddles():
    proof = attempt(pendulum(), 1.99)
    assert proof.is_proved
    assert "V̇ <= 0 only" in proof.reason
    assert "(3/10)*(w)**2" in proof.reason
    assert attempt(pendulum(reach=6.0), 1.99).is_proved  # where other wells are in the domain as well


@pytest.mark.parametrize("reach", [3.1, 3.2, 6.0])
@pytest.mark.parametrize("level", [2.0, 2.01])
def test_pendulum_never_at_its_saddles_or_above(level, reach):
    assert not attempt(pendulum(reach=reach), level).is_proved


def test_quadratic_energy():
    loop = gallery.configuration("xv", ["v", "-x - v"], [(-3.0, 3.0)] * 2, bound="P = [[1, 0], [0, 1]]")
    assert attempt(loop, 8.9).is_proved
    assert not attempt(loop, 9.1).is_proved  # leaves the domain


def test_second_derivatives_are_looked_at_where_the_first_vanish():
    # The damper sits on the second of two masses; x1 shows in v2 only by its second derivative (by hand).
    loop = gallery.configuration(
        ["x1", "x2", "v1", "v2"], ["v1", "v2", "-x1 - (x1 - x2)", "-(x2 - x1) - v2"], [(-3.0, 3.0)] * 4,
        bound='V = "0.5*(v1**2 + v2**2 + x1**2 + (x1 - x2)**2)"',
    )  # fmt: skip
    proof = attempt(loop, 0.5)
    assert proof.is_proved, proof
    assert "3 Lie derivatives" in proof.reason


NEVER = {
    "no friction": pendulum("0"),
    "friction that turns into drive beyond a quarter turn": pendulum("b*cos(a)"),
    "friction that vanishes at rest": pendulum("(1 - cos(a))"),
    "undefined at one angle": pendulum(extra=" + 0/(a - 1)"),
    "a jump": pendulum(extra=" + 0*sign(a)"),
    "drive": pendulum("(-b)"),
}


@pytest.mark.parametrize("case", NEVER)
def test_never(case):
    assert not attempt(NEVER[case], 1.5).is_proved


def test_a_hold_or_a_disturbance_is_never_proved_by_the_continuous_decrease():
    text = gallery.toml(
        ["a", "w"], ["w", "-sin(a) + u"], [(-3.1, 3.1), (-4.0, 4.0)], signals={"u": "-0.3*w"}, bound=ENERGY
    )
    assert attempt(read_text(text, "energy.toml"), 1.5).is_proved
    held = read_text(f'{text}\n[hold]\nsignals = ["u"]\nperiod = 0.5\n', "energy.toml")
    V = lyapunov_function(held, find_equilibrium(held.loop, "energy.toml"))
    assert not prove_by_invariance(V, 1.5).is_proved
    assert RingProver(V).prove(0.5, 1.0, 1000).reason.startswith("V̇ says nothing of a loop with a hold")
    pushed = read_text(text.replace("-0.3*w", "-0.3*w + d") + "\n[disturbance]\nd = [-0.1, 0.1]\n", "energy.toml")
    assert not attempt(pushed, 1.5).is_proved


def test_friction_is_positive_on_a_smaller_set():
    assert attempt(pendulum("b*cos(a)"), 0.9).is_proved


def test_two_wells_in_one_set():
    # The saddle between the wells lies on level 1/4 (by hand): above it the set holds three equilibria.
    well = gallery.configuration(
        "xv", ["v", "-0.5*v + x - x**3"], [(-3.0, 3.0)] * 2, equilibrium={"x": 1.0},
        bound='V = "0.5*v**2 + 0.25*(x**2 - 1)**2"',
    )  # fmt: skip
    assert attempt(well, 0.24).is_proved
    assert not attempt(well, 0.26).is_proved


def two_link_arm():
    """PD with gravity compensation, V = ½ q̇'M(q)q̇ + ½ q'K_p q: V̇ = -q̇'K_d q̇ (Takegaki, Arimoto 1981, from memory)."""
    lengths = {"m1": 2.0, "m2": 1.0, "l1": 0.6, "l2": 0.5, "g": 9.81}
    gains = {"kp1": 60.0, "kp2": 30.0, "kd1": 12.0, "kd2": 5.0}
    signals = {
        "m11": "(m1 + m2)*l1**2 + m2*l2**2 + 2*m2*l1*l2*cos(q2)",
        "m12": "m2*l2**2 + m2*l1*l2*cos(q2)",
        "m22": "m2*l2**2",
        "h": "m2*l1*l2*sin(q2)",
        "g2": "m2*g*l2*cos(q1 + q2)",
        "g1": "(m1 + m2)*g*l1*cos(q1) + g2",
        "u1": "g1 - kp1*q1 - kd1*w1",
        "u2": "g2 - kp2*q2 - kd2*w2",
        "r1": "u1 - g1 + h*(2*w1*w2 + w2**2)",
        "r2": "u2 - g2 - h*w1**2",
        "det": "m11*m22 - m12**2",
    }
    energy = (
        "0.5*((m1 + m2)*l1**2 + m2*l2**2 + 2*m2*l1*l2*cos(q2))*w1**2 + (m2*l2**2 + m2*l1*l2*cos(q2))*w1*w2"
        " + 0.5*m2*l2**2*w2**2 + 0.5*kp1*q1**2 + 0.5*kp2*q2**2"
    )
    return gallery.configuration(
        ["q1", "q2", "w1", "w2"], ["w1", "w2", "(m22*r1 - m12*r2)/det", "(m11*r2 - m12*r1)/det"],
        [(-1.5, 1.5)] * 2 + [(-40.0, 40.0)] * 2, parameters=lengths | gains, signals=signals, bound=f'V = "{energy}"',
    )  # fmt: skip


def attitude():
    """A rigid body in modified Rodrigues parameters under -kσ - dω: V̇ = -d|ω|² (Tsiotras 1996, from memory)."""
    return gallery.configuration(
        list("abcpqr"),
        [
            "0.25*((1 - n)*p + 2*(b*r - c*q) + 2*a*m)",
            "0.25*((1 - n)*q + 2*(c*p - a*r) + 2*b*m)",
            "0.25*((1 - n)*r + 2*(a*q - b*p) + 2*c*m)",
            "((J2 - J3)*q*r - k*a - d*p)/J1",
            "((J3 - J1)*p*r - k*b - d*q)/J2",
            "((J1 - J2)*p*q - k*c - d*r)/J3",
        ],
        [(-1.0, 1.0)] * 3 + [(-2.0, 2.0)] * 3,
        parameters={"J1": 3.0, "J2": 2.0, "J3": 1.0, "k": 1.0, "d": 2.0},
        signals={"n": "a**2 + b**2 + c**2", "m": "a*p + b*q + c*r"},
        bound='V = "0.5*(J1*p**2 + J2*q**2 + J3*r**2) + 2*k*log(1 + a**2 + b**2 + c**2)"',
    )


@pytest.mark.long
@pytest.mark.parametrize(("loop", "level"), [(two_link_arm(), 20), (attitude(), 0.5)], ids=["arm", "attitude"])
def test_machines_of_four_and_six_states(loop, level):
    proof = attempt(loop, level)
    assert proof.is_proved, proof
