import pytest

from roa.report.wording import (
    in_a_row,
    interval_percent,
    level_text,
    number,
    percent,
    percent_upper,
    point_text,
    share_with_interval,
)


@pytest.mark.parametrize(
    ("level", "text"),
    [
        (0.0777869, "0.077786"),  # down, though 0.077787 is nearer
        (0.0042, "0.0042"),  # the float lies below the decimal, its shortest text does not
        (2.304478, "2.3044"),
        (0.0, "0"),
        (1.23456e-9, "1.2345e-9"),
        (9.99999e9, "9.9999e+9"),
    ],
)
def test_levels_are_rounded_down(level, text):
    assert level_text(level) == text
    assert float(level_text(level)) <= level


def test_upper_limits_are_rounded_up():
    assert percent_upper(0.0009951) == "0.1 %"
    assert percent_upper(0.00431) == "0.44 %"


@pytest.mark.parametrize(
    ("share", "text"),
    [(0.0, "0.0 %"), (1e-6, "< 0.1 %"), (0.4543, "45.4 %"), (0.99999, "> 99.9 %"), (1.0, "100.0 %")],
)
def test_a_share_that_is_not_all_never_reads_so(share, text):
    assert percent(share) == text


def test_intervals_are_rounded_outward():
    assert interval_percent(0.45331, 0.45568) == "45.3 to 45.6 %"
    assert interval_percent(0.453311, 0.453342) == "45.331 to 45.335 %"
    assert interval_percent(0.0, 1.0) == "0.0 to 100.0 %"


def test_share_with_interval_says_confidence_and_strength():
    text = share_with_interval(0.4545, (0.45331, 0.45568), 0.99, "simulated")
    assert text == "45.5 % (99 % interval 45.3 to 45.6 %, simulated)" or text.startswith("45.4 %")
    assert text.endswith("(99 % interval 45.3 to 45.6 %, simulated)")


def test_numbers_and_points():
    assert number(-1234567.0) == "-1235000"
    assert number(3.14159265, 6) == "3.14159"
    assert point_text(["tilt", "load"], [0.1, -2.0], ["rad", ""]) == "tilt = 0.1 rad, load = -2"
    assert in_a_row(["a"]) == "a"
    assert in_a_row(["a", "b", "c"]) == "a, b and c"
