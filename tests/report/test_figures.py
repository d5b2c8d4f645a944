import io
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image
from report.conftest import simulate_disc

from roa.errors import UserError
from roa.kernel.outcomes import Outcome
from roa.report import figures
from roa.report.difference import Difference, difference_figure
from roa.report.draw import draw_difference, draw_figures
from roa.report.figures.ladder import ladder
from roa.report.figures.outcomes import outcomes
from roa.report.figures.overlay import overlay
from roa.report.figures.peak_excursion import peak_excursion
from roa.report.figures.share_by_level import share_by_level
from roa.report.figures.slices import slice_overlay
from roa.report.figures.time_to_converge import time_to_converge
from roa.report.figures.tolerance import tolerance
from roa.report.plane import path_area
from roa.report.style import BOUNDS, COUNTEREXAMPLE, RISING, START_MARKS, settings
from roa.report.traces import Trace


def texts(figure):
    return [text.get_text() for legend in figure.legends for text in legend.get_texts()]


def drawn(name, evidence):
    with settings():
        return figures.load(name).figure(evidence)


def with_traces(evidence, traces):
    """The evidence with these trajectories in place of simulated ones."""
    evidence.__dict__["traces"] = traces
    return evidence


def test_every_figure_says_its_place_and_what_it_shows():
    found = [figures.load(name) for name in figures.names()]
    assert len({one.PLACE for one in found}) == len(found) >= 8
    assert all(one.CAPTION.endswith(".") for one in found)


def test_an_unknown_figure_is_refused_by_name():
    with pytest.raises(UserError, match=r"no figure 'overlai'.*did you mean \"overlay\""):
        figures.load("overlai")


def test_overlay_has_labels_limits_and_one_contour_a_bound(evidence):
    with settings():
        axes = overlay(Figure().subplots(), with_traces(evidence, []))
    assert axes.get_xlim() == (-1.5, 1.5)
    assert axes.get_ylim() == (-1.25, 1.25)
    assert axes.get_xlabel() == "x (m)"
    assert axes.get_ylabel() == "y (m/s)"
    colours = [line.get_color() for line in axes.lines]
    assert [colours.count(BOUNDS[one.name].colour) for one in evidence.level_sets] == [1, 1, 1]


def test_the_area_inside_each_drawn_contour_is_the_volume_that_is_reported(evidence):
    # area of {y'Py <= c} is pi c / sqrt(det P) (from memory, any text on quadratic forms): P is [[2, .5], [.5, 1]]
    with settings():
        axes = overlay(Figure().subplots(), with_traces(evidence, []))
    for one in evidence.level_sets:
        (line,) = (line for line in axes.lines if line.get_color() == BOUNDS[one.name].colour)
        (x0, y0), (x1, y1) = line.get_xydata()[:-1].T, line.get_xydata()[1:].T
        assert abs(np.sum(x0 * y1 - x1 * y0)) / 2 == pytest.approx(np.pi * one.level / np.sqrt(1.75), rel=1e-3)


def test_axes_may_be_exchanged(evidence):
    with settings():
        axes = overlay(Figure().subplots(), with_traces(evidence.seen((1, 0)), []))
    assert axes.get_xlabel() == "y (m/s)"
    assert axes.get_ylim() == (-1.5, 1.5)


def test_a_trajectory_of_one_point_is_drawn(evidence):
    axes = overlay(Figure().subplots(), evidence, [Trace(np.array([[0.5, 0.5]]), Outcome.ESCAPED)])
    assert [line.get_marker() for line in axes.lines].count(START_MARKS[Outcome.ESCAPED]) == 1


def test_the_legend_says_name_strength_level_and_share(evidence, claimed):
    traces = [
        Trace(np.array([[0.5, 0.5], [0.2, 0.4], [0.0, 0.0]]), Outcome.CONVERGED),
        Trace(np.array([[0.9, 0.6], [1.2, 0.9], [2.0, 2.0]]), Outcome.ESCAPED, refutes=True),
    ]
    figure = drawn("overlay", with_traces(replace(evidence, verdict=claimed(), rising=True), traces))
    found = texts(figure)
    assert "norm bound (proved): c = 0.041199, 3.1 %" in found
    assert "contact level (estimated): c = 0.31, 23.4 %" in found
    assert "claim (refuted): c = 2, 3.1 %" in found
    assert "basin: starts that converged, 41.9 % of the domain" in found
    assert "counterexample that escaped" in found
    assert "trajectory from a start that converged" in found
    assert "V̇ ≥ 0 (estimated)" in found
    assert "a point with V̇ ≥ 0 (proved)" in found
    assert [legend.get_title().get_text() for legend in figure.legends] == [
        "simulated",
        "level sets {V ≤ c}, volume in % of the simulated basin",
    ]
    assert "Disc whose" in figure.get_suptitle()


def test_where_V_rises_is_hatched_on_request(evidence):
    # V = |x|² of the disc falls inside the unit circle and rises outside: r' = -r (1 - r²)
    disc = replace(evidence, verdict=evidence.verdict | {"bounds": [evidence.verdict["bounds"][0] | {
        "P": [[1.0, 0.0], [0.0, 1.0]]}]}, rising=True)  # fmt: skip
    with settings():
        axes = overlay(Figure().subplots(), with_traces(disc, []))
    (hatched,) = (one for one in axes.collections if getattr(one, "hatches", None) == [RISING.hatch])
    inner = np.concatenate([ring for ring in hatched.get_paths()[0].to_polygons() if np.abs(ring).max() < 1.1])
    assert np.linalg.norm(inner, axis=1) == pytest.approx(1.0, abs=1e-4)


def test_a_tiny_bound_is_shown_magnified(evidence):
    (norm, *_) = evidence.verdict["bounds"]
    large, small = (
        drawn(
            "overlay", with_traces(replace(evidence, verdict=evidence.verdict | {"bounds": [norm | {"level": c}]}), [])
        )
        for c in (0.04, 1e-5)
    )
    assert len(large.axes) == 1
    assert len(small.axes) == 2
    left, right = small.axes[1].get_xlim()
    assert 0 < right - left < 0.1


def test_slices_show_every_pair_and_the_values_of_the_others(evidence_of):
    evidence = evidence_of(3, level=1e-6)
    figure = drawn("slices", evidence)
    assert sum(axes.get_visible() for axes in figure.axes) == 3
    title = figure.get_suptitle()
    assert "Slices" in title
    assert "tilt = 0 m/s" in title
    assert "norm bound (proved): c = 1e-6, 3.1 %, too small to see here" in texts(figure)
    # the disc in the plane of the first two states, of 9 square units; with the second at rest the strip |x| < 1
    assert figure.axes[0].get_title(loc="left") == "34.9 % converges"
    assert path_area(evidence.slice(0, 2, 160).regions[Outcome.CONVERGED].fill) == pytest.approx(6.0, rel=1e-3)


def test_a_slice_may_hold_the_others_anywhere(evidence_of):
    evidence = evidence_of(3).seen((0, 2), np.array([0.0, 0.6, 0.0]))
    with settings():
        axes = slice_overlay(Figure().subplots(), evidence, 0, 2)
    # the disc cut at y = 0.6: |x| < 0.8
    assert path_area(evidence.slice(0, 2).regions[Outcome.CONVERGED].fill) == pytest.approx(1.6 * 3, rel=1e-3)
    assert axes.get_ylabel() == "tilt (m/s)"
    figure = drawn("slices", evidence)
    assert "(speed = 0.6 m/s)" in figure.get_suptitle()
    assert len(figure.axes) == 1


def test_slices_stop_at_six_states(evidence_of):
    figure = drawn("slices", evidence_of(7))
    assert "first 6 of 7 states" in figure.get_suptitle()
    assert sum(axes.get_visible() for axes in figure.axes) == 15


def test_share_by_level_marks_every_level_and_leaves_gaps(evidence):
    verdict = evidence.verdict
    axes = share_by_level(Figure().subplots(), verdict["levels"], evidence.level_sets)
    marked = [line.get_xdata()[0] for line in axes.lines if len(set(line.get_xdata())) == 1]
    assert marked == [one["level"] for one in verdict["bounds"]]
    steps = axes.lines[0].get_xydata()
    assert steps[:6, 1].tolist() == [1.0, 1.0, 1.0, 1.0, 0.4, 0.4]
    assert np.isnan(steps[6:, 1]).all()
    assert axes.get_xscale() == "log"
    assert axes.get_xlim()[0] < 0.0411999
    assert axes.get_xlim()[1] == 9.0


def test_the_ladder_rises_to_the_basin_and_says_the_strengths(verdict):
    axes = ladder(Figure().subplots(), verdict)
    assert [label.get_text() for label in axes.get_yticklabels()] == [
        "norm bound", "contact level", "unfalsified level", "simulated basin",
    ]  # fmt: skip
    found = [text.get_text() for text in axes.texts]
    assert found == ["3.1 %  proved", "23.4 %  estimated", "59.9 %  simulated", "100.0 %  simulated"]


def test_the_time_map_shows_the_times_and_hatches_what_does_not_converge(evidence):
    with settings():
        axes = time_to_converge(Figure().subplots(), evidence)
    shades = axes.collections[0].get_array().reshape(401, 401)
    assert shades.mask[0, 0]
    assert shades[200, 200] == pytest.approx(0.0, abs=1e-12)
    # the stand-in takes 4 r seconds from radius r: at (0.75, 0) 3 s
    assert shades[200, 300] == pytest.approx(3.0, rel=1e-12)


def test_the_peak_map_shows_the_peaks(evidence):
    with settings():
        axes = peak_excursion(Figure().subplots(), evidence, 1)
    shades = axes.collections[0].get_array().reshape(401, 401)
    assert shades[300, 200] == pytest.approx(0.625, rel=1e-12)


def test_sensitive_starts_are_those_between_the_two_edges(evidence):
    with settings():
        axes = tolerance(Figure().subplots(), evidence)
    (marks,) = (line for line in axes.lines if line.get_markeredgecolor() == COUNTEREXAMPLE.colour)
    radius = np.linalg.norm(marks.get_xydata(), axis=1)
    assert len(radius) > 10
    assert 1.0 <= radius.min() <= radius.max() < 1.004
    assert not figures.load("tolerance").applies(replace(evidence, tighter=simulate_disc))


def test_outcomes_carry_their_intervals(verdict):
    axes = outcomes(Figure().subplots(), verdict["basin"])
    found = [text.get_text() for text in axes.texts]
    assert found == ["41.88 %  (41.7 to 42.1 %)", "58.12 %  (57.9 to 58.3 %)"]


@pytest.mark.parametrize("kind", ["png", "svg", "pdf"])
def test_every_figure_of_a_run_twice_gives_the_same_bytes(tmp_path, evidence, claimed, kind):
    written = []
    for name in ("first", "second"):
        folder = tmp_path / name
        again = replace(evidence, verdict=claimed(), _slices={})
        draw_figures(folder, again, formats=(kind,), only=() if kind == "svg" else ["overlay"])
        written.append({file.name: file.read_bytes() for file in sorted(folder.iterdir())})
    assert written[0] == written[1]
    for name, content in written[0].items():
        assert len(content) < 2_000_000, name
    if kind == "svg":
        assert {name.partition(".")[0] for name in written[0]} == set(figures.names()) - {"slices"}
        assert b"<dc:date>" not in written[0]["overlay.svg"]
    if kind == "png":
        image = Image.open(io.BytesIO(written[0]["overlay.png"]))
        assert image.info["dpi"] == pytest.approx((200, 200), abs=0.5)


def test_only_what_is_wanted_is_drawn_in_the_wanted_form(tmp_path, evidence):
    written = draw_figures(tmp_path, evidence, ["outcomes"], ["png"], 50, "-seen")
    assert [file.name for file in written] == ["outcomes-seen.png"]
    assert Image.open(io.BytesIO(written[0].read_bytes())).info["dpi"] == pytest.approx((50, 50), abs=0.5)
    with pytest.raises(UserError, match="nothing to show"):
        draw_figures(tmp_path, evidence, ["slices"])


def smaller(evidence):
    """The disc of radius 0.8 about the same equilibrium, as a second run."""
    return replace(evidence, simulate=lambda points: simulate_disc(points, 0.8), _slices={})


def test_two_runs_show_what_is_kept_and_what_is_lost(tmp_path, evidence):
    found = Difference(evidence, smaller(evidence))
    areas = {name: path_area(region.fill) for name, region in found.regions.items()}
    assert areas == {
        "kept": pytest.approx(np.pi * 0.64, rel=1e-3),
        "lost": pytest.approx(np.pi * 0.36, rel=2e-3),
    }
    with settings():
        assert "converges in stiff alone: 15.08 % of what is shown" in texts(
            difference_figure(found, ("stiff", "soft"))
        )
    written = draw_difference(tmp_path, evidence, smaller(evidence), ("stiff", "soft"))
    assert [file.name for file in written] == ["difference-soft.png", "difference-soft.svg"]


def test_runs_of_other_states_are_not_drawn_together(evidence, evidence_of):
    with pytest.raises(UserError, match=r"x \(m\), y \(m/s\) and position \(m/s\), speed \(m/s\)"):
        Difference(evidence, evidence_of(2))


def assert_nothing_meets(figure):
    """Legends and titles lie inside the figure and apart from each other and from the axes."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    boxes = [legend.get_window_extent() for legend in figure.legends]
    boxes += [axes.get_tightbbox() for axes in figure.axes if axes.get_visible()]
    title = figure._suptitle  # the library has no public way to its extent
    boxes += [title.get_window_extent()] if title is not None else []
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
def test_nothing_is_cut_or_covered_in_the_overlay(evidence, claimed, level):
    verdict = claimed(result="not_settled")
    verdict["bounds"][0]["level"] = level
    traces = [Trace(np.array([[0.9, 0.6], [1.2, 0.9], [2.0, 2.0]]), outcome) for outcome in Outcome if outcome]
    with settings():
        figure = figures.load("overlay").figure(with_traces(replace(evidence, verdict=verdict, rising=True), traces))
        assert_nothing_meets(figure)


@pytest.mark.parametrize("name", ["ladder", "outcomes", "share_by_level", "time_to_converge", "peak_excursion"])
def test_nothing_is_cut_or_covered_elsewhere(evidence, name):
    with settings():
        assert_nothing_meets(figures.load(name).figure(evidence))


@pytest.mark.parametrize("n", [3, 6])
def test_nothing_is_cut_or_covered_in_slices(n, evidence_of):
    with settings():
        assert_nothing_meets(figures.load("slices").figure(evidence_of(n, level=1e-9)))
