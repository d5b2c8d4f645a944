"""Table [hold]: what is read, every fault in one sentence, and where it leaves a trace."""

from decimal import Decimal

import pytest

from roa.errors import UserError
from roa.loop.hold import Hold
from roa.loop.read import read_text

LOOP = """
[states]
tilt = "rad"
rate = "rad/s"
[parameters]
k = 2
[signals]
demand = "-k*tilt - rate"
torque = "clip(demand, -1, 1)"
power = "torque*rate"
[dynamics]
tilt = "rate"
rate = "torque"
[domain]
tilt = [-1, 1]
rate = [-1, 1]
[sweep]
horizon = 5
"""


def with_hold(text):
    return f"{LOOP}[hold]\n{text}\n"


def faults_of(text):
    with pytest.raises(UserError) as caught:
        read_text(text, "a.toml")
    return caught.value.faults


def test_signals_come_in_the_order_of_their_table():
    text = with_hold('signals = ["torque", "demand"]\nperiod = 0.1\ndelay = 0.10')
    assert read_text(text, "a.toml").loop.hold == Hold(("demand", "torque"), Decimal("0.1"), Decimal("0.1"))


def test_delay_is_zero_where_absent_and_a_hold_none():
    assert read_text(with_hold('signals = ["torque"]\nperiod = 0.1'), "a.toml").loop.hold.delay == 0
    assert read_text(LOOP, "a.toml").loop.hold is None


def test_hold_is_part_of_what_changes_results():
    slow, fast, without = (
        read_text(text, "a.toml").resolved()
        for text in (
            with_hold('signals = ["torque"]\nperiod = 0.10\ndelay = 0.0'),
            with_hold('signals = ["torque"]\nperiod = 0.1'),
            LOOP,
        )
    )
    assert slow == fast
    assert slow["hold"] == {"signals": ["torque"], "period": "0.1", "delay": "0"}
    assert "hold" not in without


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ('signals = ["torque"]\nperiod = 5.1', "[hold] period = 5.1: must not be longer than horizon = 5 of [sweep]"),
        ('signals = ["torque"]\nperiod = 0.1\ndelay = 0.11', "must not be longer than the period, 0.1 s"),
        ('signals = ["torque"]\nperiod = 0.1\ndelay = -0.01', "[hold] delay = -0.01: must be from 0 to the period"),
        ('signals = ["torque"]\nperiod = 0', "[hold] period = 0: must be greater than 0"),
        ('signals = ["torque"]\nperiod = -1', "[hold] period = -1: must be greater than 0"),
        ('signals = ["torque"]\nperiod = nan', "[hold] period = nan: must be a finite number"),
        ('signals = ["torque"]\nperiod = "fast"', "must be a number, text found"),
        ('signals = ["torque"]\nperiod = 0.1\ndelay = true', "must be a number, true or false found"),
        ('signals = ["torque"]', "[hold] period: the key is missing"),
        ("period = 0.1", "[hold] signals: the key is missing"),
        ("signals = []\nperiod = 0.1", "an empty list found"),
        ('signals = "torque"\nperiod = 0.1', "must be a list of names of signals"),
        ('signals = ["torqe"]\nperiod = 0.1', 'no such signal: "torqe"; signals are demand, torque, power (did you'),
        ('signals = ["rate"]\nperiod = 0.1', '"rate" is no signal; only signals are held'),
        ('signals = ["k"]\nperiod = 0.1', '"k" is no signal'),
        ('signals = ["torque", "torque"]\nperiod = 0.1', '"torque" is named twice'),
        ('signals = ["power"]\nperiod = 0.1', 'the dynamics do not depend on "power"'),
        ('signals = ["torque"]\nperiod = 0.1\nperoid = 2', 'unknown key; accepted are signals, period, delay (did you'),
    ],
)  # fmt: skip
def test_each_fault_is_one_sentence(table, words):
    (fault,) = faults_of(with_hold(table))
    assert fault.startswith("a.toml: [hold]")
    assert words in fault


@pytest.mark.parametrize(
    "table", ["[disturbance]\nk = [1, 3]", "[bound]\nlevel = 1\ninner = 0.5\nP = [[1, 0], [0, 1]]"]
)
def test_no_ultimate_bound_of_a_sampled_loop(table):
    (fault,) = faults_of(with_hold(f'signals = ["torque"]\nperiod = 0.1\n{table}'))
    assert fault.startswith("a.toml: [hold]: not together with [")


def test_all_faults_at_once():
    faults = faults_of(with_hold('signals = ["torqe", "tilt"]\nperiod = -1\nhold = 2'))
    assert len(faults) == 4


def test_a_broken_signal_is_not_reported_again_by_the_hold():
    text = with_hold('signals = ["torque"]\nperiod = 0.1').replace("clip(demand", "clip(demnd")
    (fault,) = faults_of(text)
    assert "[signals] torque" in fault
