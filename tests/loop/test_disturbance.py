"""Table [disturbance]: names that vary with time, and what may be made of them."""

from decimal import Decimal

import pytest

from roa.errors import UserError
from roa.loop.read import read_text

LOOP = """
[states]
x = "m"
[parameters]
k = 2.0
wind = 0.5
[dynamics]
x = "-k*x + wind + gust"
[domain]
x = [-2, 2]
[disturbance]
wind = [-1, 1.5]
gust = [-0.2, 0.4]
"""


def test_nominal_values():
    loop = read_text(LOOP, "a.toml").loop
    assert loop.parameters["wind"].value == Decimal("0.5")  # as [parameters] has it
    assert loop.parameters["gust"].value == Decimal("0.1")  # the middle
    assert loop.disturbances == {"wind": (-1, Decimal("1.5")), "gust": (Decimal("-0.2"), Decimal("0.4"))}


def test_the_intervals_belong_to_what_changes_results():
    resolved = read_text(LOOP, "a.toml").resolved()
    assert resolved["disturbance"] == {"gust": ["-0.2", "0.4"], "wind": ["-1", "1.5"]}
    assert read_text(LOOP.replace("1.5]", "1.6]"), "a.toml").resolved() != resolved


WRONG = {
    "not a pair": ("gust = [-0.2, 0.4]", "gust = 3", "must be a pair [low, high]"),
    "the wrong way round": ("gust = [-0.2, 0.4]", "gust = [0.4, -0.2]", "with low below high"),
    "nominal value outside": ("wind = [-1, 1.5]", "wind = [1, 1.5]", "must hold the nominal value 0.5"),
    "a state": ("wind = [-1, 1.5]", "x = [-1, 1.5]", "taken already in [states]"),
    "used nowhere": ("wind = [-1, 1.5]", "wnd = [-1, 1.5]", 'no formula uses this name (did you mean "wind"?)'),
    "an exponent": ('"-k*x + wind', '"-k*x**wind', "the exponent must be a number or the name of a parameter"),
    "in V": ("[disturbance]", '[bound]\nV = "wind*x**2"\n[disturbance]', '"wind" varies with time'),
    "inner above level": ("[disturbance]", "[bound]\ninner = 2\nlevel = 1\n[disturbance]", "must be below level = 1"),
}


@pytest.mark.parametrize("case", WRONG)
def test_what_is_wrong_is_one_sentence(case):
    old, new, words = WRONG[case]
    with pytest.raises(UserError) as caught:
        read_text(LOOP.replace(old, new, 1), "a.toml")
    (fault,) = caught.value.faults
    assert words in fault
