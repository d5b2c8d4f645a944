import io

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image

from roa.kernel.outcomes import Outcome
from roa.loop.read import read_text
from roa.report.draw import draw_figures
from roa.report.level_sets import LevelSet, level_sets_of
from roa.report.overlay import Trace, overlay, overlay_figure
from roa.report.plane import Plane, regions
from roa.report.share_by_level import share_by_level
from roa.report.slices import simulate_slices, slices_figure
from roa.report.style import BOUNDS, START_MARKS, settings

P = np.array([[2.0, 0.5], [0.5, 1.0]])
BOX = np.array([[-1.5, 1.5], [-1.25, 1.25]])


@pytest.fixture
def plane():
    return Plane(("x", "y"), ("m", "m/s"), BOX, np.zeros(2))


def shoelace(ring):
    """Area of a closed polygon, float64 (k, 2)."""
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    return abs(np.sum(x0 * y1 - x1 * y0)) / 2


def path_area(path):
    """Area of a filled path; holes turn the other way and count against it."""
    return abs(sum(signed(polygon) for polygon in path.to_polygons()))


def signed(ring):
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    return np.sum(x0 * y1 - x1 * y0) / 2


def texts(figure):
    return [text.get_text() for legend in figure.legends for text in legend.get_texts()]


def test_the_edge_of_the_basin_is_a_line_and_not_a_staircase(plane, in_disc):
    found = regions(plane, in_disc, cells=40)
    basin = found[Outcome.CONVERGED]
    # the unit disc: every vertex of its edge within a cell's 1/256, the area between chords and circle of a cell
    radius = np.linalg.norm(np.concatenate(basin.edges), axis=1)
    assert np.abs(radius - 1).max() < 3 / 40 / 256
    assert path_area(basin.fill) == pytest.approx(np.pi, rel=2e-3)
    assert path_area(found[Outcome.ESCAPED].fill) == pytest.approx(7.5 - np.pi, rel=2e-3)


def test_regions_reach_the_faces_of_the_domain(plane):
    found = regions(plane, lambda points: np.full(len(points), Outcome.UNRESOLVED, np.uint8), cells=10)
    assert list(found) == [Outcome.UNRESOLVED]
    assert found[Outcome.UNRESOLVED].edges == ()
    assert path_area(found[Outcome.UNRESOLVED].fill) == pytest.approx(7.5, rel=1e-12)


def test_a_single_start_of_an_outcome_is_drawn(plane):
    def label(points):
        at_corner = np.all(np.abs(points - BOX[:, 0]) < 0.01, axis=1)
        return np.where(at_corner, Outcome.FAILED, Outcome.CONVERGED).astype(np.uint8)

    found = regions(plane, label, cells=10)
    assert 0 < path_area(found[Outcome.FAILED].fill) < 0.01


def test_the_drawn_ellipse_has_the_area_of_the_level_set(plane):
    # area of {y'Py <= c} is pi c / sqrt(det P): from memory, any text on quadratic forms
    axes = Figure().subplots()
    overlay(axes, plane, {}, [LevelSet("norm bound", "proved", 0.3, 0.1, P)])
    drawn = [line for line in axes.lines if line.get_color() == BOUNDS["norm bound"].colour]
    assert len(drawn) == 1
    assert shoelace(drawn[0].get_xydata()) == pytest.approx(np.pi * 0.3 / np.sqrt(np.linalg.det(P)), rel=1e-4)


def test_a_formula_draws_the_part_about_the_equilibrium_alone(plane):
    def value(points):  # two wells: at the equilibrium and at x = 1.2
        x, y = points.T
        return np.minimum(x**2 + y**2, (x - 1.2) ** 2 + y**2)

    (ring,) = LevelSet("contact level", "estimated", 0.16, None, None, value).outline(plane)
    assert shoelace(ring) == pytest.approx(np.pi * 0.16, rel=1e-3)
    assert np.abs(ring.mean(axis=0)).max() < 1e-2


@pytest.mark.parametrize(("level", "matrix"), [(0.0, P), (1.0, np.diag([1.0, -1.0]))])
def test_no_level_or_no_definite_V_draws_nothing(plane, level, matrix):
    one = LevelSet("claim", "refuted", level, None, matrix)
    assert one.outline(plane) == ()
    with settings():
        assert len(overlay_figure(plane, {}, [one]).axes) == 1


def test_a_trajectory_of_one_point_is_drawn(plane):
    axes = Figure().subplots()
    overlay(axes, plane, {}, [], [Trace(np.array([[0.5, 0.5]]), Outcome.ESCAPED)])
    assert [line.get_marker() for line in axes.lines].count(START_MARKS[Outcome.ESCAPED]) == 1


def test_a_slice_meets_the_level_set_and_does_not_project_it():
    P3 = np.array([[1.0, 0.0, 0.9], [0.0, 1.0, 0.0], [0.9, 0.0, 1.0]])
    box = np.array([[-3.0, 3.0]] * 3)
    plane = Plane(("a", "b", "c"), ("", "", ""), box, np.array([0.5, 0.0, 0.0]), 0, 1)
    (ring,) = LevelSet("norm bound", "proved", 1.0, None, P3).outline(plane)
    # with c at the equilibrium the section is the unit circle; the projection would reach 2.3 along a
    assert np.linalg.norm(ring - [0.5, 0.0], axis=1) == pytest.approx(1.0, rel=1e-12)


def test_overlay_has_labels_limits_and_one_contour_a_bound(plane, verdict, in_disc):
    with settings():
        axes = Figure().subplots()
        level_sets = level_sets_of(verdict)
        overlay(axes, plane, regions(plane, in_disc, 20), level_sets)
    assert axes.get_xlim() == (-1.5, 1.5)
    assert axes.get_ylim() == (-1.25, 1.25)
    assert axes.get_xlabel() == "x (m)"
    assert axes.get_ylabel() == "y (m/s)"
    colours = [line.get_color() for line in axes.lines]
    assert [colours.count(BOUNDS[one.name].colour) for one in level_sets] == [1, 1, 1]


def test_the_legend_says_name_strength_level_and_share(plane, claimed, in_disc):
    traces = [
        Trace(np.array([[0.5, 0.5], [0.2, 0.4], [0.0, 0.0]]), Outcome.CONVERGED),
        Trace(np.array([[0.9, 0.6], [1.2, 0.9], [2.0, 2.0]]), Outcome.ESCAPED, refutes=True),
    ]
    with settings():
        figure = overlay_figure(plane, regions(plane, in_disc, 20), level_sets_of(claimed()), traces, 0.41883)
    found = texts(figure)
    assert "norm bound (proved): c = 0.041199, 3.1 %" in found
    assert "contact level (estimated): c = 0.31, 23.4 %" in found
    assert "claim (refuted): c = 2, 3.1 %" in found
    assert "basin: starts that converged, 41.9 % of the domain" in found
    assert "counterexample that escaped" in found
    assert "trajectory from a start that converged" in found
    assert [legend.get_title().get_text() for legend in figure.legends] == [
        "simulated",
        "level sets {V ≤ c}, volume in % of the simulated basin",
    ]


def test_a_tiny_bound_is_shown_magnified(plane):
    with settings():
        large = overlay_figure(plane, {}, [LevelSet("norm bound", "proved", 0.04, None, P)])
        small = overlay_figure(plane, {}, [LevelSet("norm bound", "proved", 1e-5, None, P)])
    assert len(large.axes) == 1
    assert len(small.axes) == 2
    left, right = small.axes[1].get_xlim()
    assert 0 < right - left < 0.1


def test_slices_show_every_pair_and_the_values_of_the_others(in_disc):
    states, units = ("x", "y", "z"), ("m", "m/s", "")
    box = np.vstack([BOX, [-1.0, 1.0]])
    equilibrium = np.array([0.0, 0.0, 0.25])
    slices = simulate_slices(states, units, box, equilibrium, in_disc)
    assert [(plane.i, plane.j) for plane, _ in slices] == [(0, 1), (0, 2), (1, 2)]
    assert path_area(slices[0][1][Outcome.CONVERGED].fill) == pytest.approx(np.pi, rel=1e-3)
    # with y at the equilibrium the disc is the strip |x| < 1, at any z
    assert path_area(slices[1][1][Outcome.CONVERGED].fill) == pytest.approx(4.0, rel=1e-3)
    with settings():
        figure = slices_figure(slices, [LevelSet("norm bound", "proved", 1e-6, 0.2, np.eye(3))])
    assert sum(axes.get_visible() for axes in figure.axes) == 3
    title = figure.get_suptitle()
    assert "Slices" in title
    assert "z = 0.25" in title
    assert "x = 0 m" in title
    assert "norm bound (proved): c = 1e-6, 20.0 %, too small to see here" in texts(figure)


def test_slices_stop_at_six_states():
    n = 7
    names = tuple("abcdefg")
    box = np.tile([-1.5, 1.5], (n, 1))

    def everywhere(points):
        return np.full(len(points), Outcome.CONVERGED, np.uint8)

    slices = simulate_slices(names, ("",) * n, box, np.zeros(n), everywhere)
    assert len(slices) == 15
    with settings():
        assert "first 6 of 7 states" in slices_figure(slices, []).get_suptitle()


def test_share_by_level_marks_every_level_and_leaves_gaps(verdict):
    axes = Figure().subplots()
    share_by_level(axes, verdict["levels"], level_sets_of(verdict))
    marked = [line.get_xdata()[0] for line in axes.lines if len(set(line.get_xdata())) == 1]
    assert marked == [one["level"] for one in verdict["bounds"]]
    steps = axes.lines[0].get_xydata()
    assert steps[:6, 1].tolist() == [1.0, 1.0, 1.0, 1.0, 0.4, 0.4]
    assert np.isnan(steps[6:, 1]).all()
    assert axes.get_xscale() == "log"
    assert axes.get_xlim()[0] < 0.0411999
    assert axes.get_xlim()[1] == 9.0


def test_every_figure_of_a_run_twice_gives_the_same_bytes(tmp_path, configuration, claimed, in_disc, stored):
    written = []
    for name in ("first", "second"):
        folder = tmp_path / name
        draw_figures(folder, configuration, claimed(), stored, in_disc, lambda points: points[:, 0])
        written.append({file.name: file.read_bytes() for file in sorted(folder.iterdir())})
    assert list(written[0]) == ["overlay.png", "overlay.svg", "share_by_level.png", "share_by_level.svg"]
    assert written[0] == written[1]
    for name, content in written[0].items():
        assert len(content) < 2_000_000, name
    assert b"<dc:date>" not in written[0]["overlay.svg"]
    image = Image.open(io.BytesIO(written[0]["overlay.png"]))
    assert image.info["dpi"] == pytest.approx((200, 200), abs=0.5)


def test_three_states_get_slices(tmp_path, verdict, in_disc, stored):
    configuration = read_text(
        """
        [states]
        x = "m"
        y = "m/s"
        z = ""
        [dynamics]
        x = "-x"
        y = "-y"
        z = "-z"
        [domain]
        x = [-1.5, 1.5]
        y = [-1.25, 1.25]
        z = [-1, 1]
        """,
        "three.toml",
    )
    verdict |= {"equilibrium": [0.0, 0.0, 0.0], "bounds": [], "levels": []}
    written = draw_figures(tmp_path, configuration, verdict, stored, in_disc, None)
    assert [file.name for file in written] == ["slices.png", "slices.svg"]


def assert_nothing_meets(figure):
    """Legends and titles lie inside the figure and apart from each other and from the axes."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    boxes = [legend.get_window_extent() for legend in figure.legends]
    boxes += [axes.get_tightbbox() for axes in figure.axes if axes.get_visible()]
    for k, box in enumerate(boxes):
        assert figure.bbox.padded(1).containsx(box.x0)
        assert figure.bbox.padded(1).containsx(box.x1)
        assert figure.bbox.padded(1).containsy(box.y0)
        assert figure.bbox.padded(1).containsy(box.y1)
        for other in boxes[:k]:
            assert not box.overlaps(other)
    for axes in figure.axes:
        names = [text.get_window_extent() for text in axes.texts if text.get_text()]
        for k, box in enumerate(names):
            assert not any(box.overlaps(other) for other in names[:k])


@pytest.mark.parametrize("level", [0.05, 1e-5])
def test_nothing_is_cut_or_covered_in_the_overlay(plane, claimed, in_disc, level):
    verdict = claimed(result="not_settled")
    verdict["bounds"][0]["level"] = level
    traces = [Trace(np.array([[0.9, 0.6], [1.2, 0.9], [2.0, 2.0]]), outcome) for outcome in Outcome if outcome]
    with settings():
        found = regions(plane, in_disc, 20)
        figure = overlay_figure(plane, found, level_sets_of(verdict), traces, 0.41883)
        assert_nothing_meets(figure)


@pytest.mark.parametrize("n", [3, 6])
def test_nothing_is_cut_or_covered_in_slices(n, verdict, in_disc):
    names, units = ("position", "speed", "tilt", "rate", "a", "b")[:n], ("m/s",) * n
    slices = simulate_slices(names, units, np.tile([-1.5, 1.5], (n, 1)), np.full(n, 0.0123456), in_disc)
    sets = [LevelSet(one["name"], one["strength"], 1e-9, 1e-5, np.eye(n)) for one in verdict["bounds"]]
    with settings():
        assert_nothing_meets(slices_figure(slices, sets))
