import numpy as np
import pytest
from report.conftest import states_table

from roa.errors import UserError
from roa.report.save import read_formats
from roa.report.view import read_view


@pytest.fixture
def loop():
    return states_table(3).loop


def test_nothing_asked_is_the_runs_own_view(loop):
    view = read_view(loop)
    assert view.at(np.zeros(3)) is None
    assert view.suffix(loop) == ""


def test_pair_and_held_states(loop):
    view = read_view(loop, "tilt, position", "speed=0.25", rising=True)
    assert view.pair == (2, 0)
    assert view.at(np.ones(3)).tolist() == [1.0, 0.25, 1.0]
    assert view.suffix(loop) == "-tilt-position-speed=0.25-rising"


@pytest.mark.parametrize(
    ("states", "at", "sentence"),
    [
        ("tilt,spead", None, "--states: there is no state 'spead'; the states are position, speed, tilt"),
        ("tilt", None, "give two different states"),
        ("tilt,tilt", None, "give two different states"),
        (None, "tild=0", "--at: there is no state 'tild'"),
        (None, "tilt=two", "--at: found 'tilt=two'; give a number"),
        (None, "tilt", "--at: found 'tilt'; give a number"),
        (None, "tilt=2", "tilt = 2 lies outside the domain; give a number from -1.5 to 1.5"),
        (None, "tilt=nan", "outside the domain"),
        ("tilt,speed", "tilt=1", "tilt varies in the slice"),
    ],
)
def test_a_view_that_cannot_be(loop, states, at, sentence):
    with pytest.raises(UserError) as refused:
        read_view(loop, states, at)
    assert len(refused.value.faults) == 1
    assert sentence in refused.value.faults[0]


def test_a_plane_has_nothing_to_hold():
    with pytest.raises(UserError, match="two states"):
        read_view(states_table(2).loop, None, "speed=0")


def test_formats():
    assert read_formats(None) == ("png", "svg")
    assert read_formats("pdf, PNG") == ("pdf", "png")
    with pytest.raises(UserError, match=r"--format: found 'gif'; give some of png, svg, pdf"):
        read_formats("gif")
