import matplotlib
import numpy as np
from matplotlib.figure import Figure

from roa.report.save import figure_bytes
from roa.report.style import AREAS, BOUNDS, START_MARKS, settings


def test_meanings_differ_in_colour_and_in_form():
    lines = list(BOUNDS.values())
    assert len({line.colour for line in lines}) == len({line.dash for line in lines}) == len(lines)
    areas = list(AREAS.values())
    assert len({area.tone for area in areas}) == len({(area.hatch, area.tone) for area in areas}) == len(areas)
    assert len(set(START_MARKS.values())) == len(START_MARKS)


def test_bounds_differ_in_a_grey_print():
    greys = sorted(np.dot(matplotlib.colors.to_rgb(line.colour), [0.299, 0.587, 0.114]) for line in BOUNDS.values())
    assert greys[-1] < 0.55  # dark enough on the light tone of the basin
    assert np.diff(greys).min() > 0.02


def test_nothing_outside_changes_the_figures():
    before = dict(matplotlib.rcParams)
    with settings():
        figure = Figure()
        figure.subplots()
    for kind in ("png", "svg", "pdf"):
        assert figure_bytes(figure, kind) == figure_bytes(figure, kind)
    assert dict(matplotlib.rcParams) == before
