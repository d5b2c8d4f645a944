import numpy as np
import pytest
from report.conftest import simulate_disc

from roa.kernel.outcomes import Outcome
from roa.kernel.trajectories import Trajectories
from roa.report.level_sets import LevelSet
from roa.report.plane import Plane, Slice, path_area

P = np.array([[2.0, 0.5], [0.5, 1.0]])
BOX = np.array([[-1.5, 1.5], [-1.25, 1.25]])


@pytest.fixture
def plane():
    return Plane(("x", "y"), ("m", "m/s"), BOX, np.zeros(2))


def ending(outcomes):
    """Results of starts that only their outcome tells of, uint8 (m,)."""
    m = len(outcomes)
    return Trajectories(
        np.zeros((m, 2)), outcomes.astype(np.uint8), np.zeros(m), np.zeros((m, 2)), np.zeros((m, 2)),
        np.zeros(m, np.int32), np.zeros(m, np.uint8),
    )  # fmt: skip


def shoelace(ring):
    """Area of a closed polygon, float64 (k, 2)."""
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    return abs(np.sum(x0 * y1 - x1 * y0)) / 2


def test_the_edge_of_the_basin_is_a_line_and_not_a_staircase(plane):
    found = Slice(plane, simulate_disc, 40).regions
    basin = found[Outcome.CONVERGED]
    # the unit disc: every vertex of its edge within a cell's 1/256, the area between chords and circle of a cell
    radius = np.linalg.norm(np.concatenate(basin.edges), axis=1)
    assert np.abs(radius - 1).max() < 3 / 40 / 256
    assert path_area(basin.fill) == pytest.approx(np.pi, rel=2e-3)
    assert path_area(found[Outcome.ESCAPED].fill) == pytest.approx(7.5 - np.pi, rel=2e-3)
    assert basin.share == pytest.approx(np.pi / 7.5, rel=2e-3)


def test_regions_reach_the_faces_of_the_domain(plane):
    found = Slice(plane, lambda points: ending(np.full(len(points), Outcome.UNRESOLVED)), 10).regions
    assert list(found) == [Outcome.UNRESOLVED]
    assert found[Outcome.UNRESOLVED].edges == ()
    assert path_area(found[Outcome.UNRESOLVED].fill) == pytest.approx(7.5, rel=1e-12)


def test_a_single_start_of_an_outcome_is_drawn(plane):
    def simulate(points):
        at_corner = np.all(np.abs(points - BOX[:, 0]) < 0.01, axis=1)
        return ending(np.where(at_corner, Outcome.FAILED, Outcome.CONVERGED))

    found = Slice(plane, simulate, 10).regions
    assert 0 < path_area(found[Outcome.FAILED].fill) < 0.01


def test_the_ellipse_has_the_area_of_the_level_set(plane):
    # area of {y'Py <= c} is pi c / sqrt(det P): from memory, any text on quadratic forms
    (ring,) = LevelSet("norm bound", "proved", 0.3, 0.1, P).outline(plane)
    assert shoelace(ring) == pytest.approx(np.pi * 0.3 / np.sqrt(np.linalg.det(P)), rel=1e-4)


def test_a_formula_draws_the_part_about_the_equilibrium_alone(plane):
    def value(points):  # two wells: at the equilibrium and at x = 1.2
        x, y = points.T
        return np.minimum(x**2 + y**2, (x - 1.2) ** 2 + y**2)

    (ring,) = LevelSet("contact level", "estimated", 0.16, None, None, value).outline(plane)
    assert shoelace(ring) == pytest.approx(np.pi * 0.16, rel=1e-3)
    assert np.abs(ring.mean(axis=0)).max() < 1e-2


@pytest.mark.parametrize(("level", "matrix"), [(0.0, P), (1.0, np.diag([1.0, -1.0]))])
def test_no_level_or_no_definite_V_draws_nothing(plane, level, matrix):
    assert LevelSet("claim", "refuted", level, None, matrix).outline(plane) == ()


P3 = np.array([[1.0, 0.0, 0.9], [0.0, 1.0, 0.0], [0.9, 0.0, 1.0]])


def in_three(at=None):
    box = np.array([[-3.0, 3.0]] * 3)
    return Plane(("a", "b", "c"), ("", "", ""), box, np.array([0.5, 0.0, 0.0]), 0, 1, at)


def test_a_slice_meets_the_level_set_and_does_not_project_it():
    (ring,) = LevelSet("norm bound", "proved", 1.0, None, P3).outline(in_three())
    # with c at the equilibrium the section is the unit circle; the projection would reach 2.3 along a
    assert np.linalg.norm(ring - [0.5, 0.0], axis=1) == pytest.approx(1.0, rel=1e-12)


def test_a_slice_away_from_the_equilibrium_meets_the_level_set_where_it_is():
    one = LevelSet("norm bound", "proved", 1.0, None, P3)
    (ring,) = one.outline(in_three(np.array([0.5, 0.0, 1.2])))
    # (a, b, 1.2) on the surface: a² + b² + 1.8 a·1.2 + 1.44 = 1, a circle about a = -1.08 of radius² 1.08² - 0.44
    assert np.linalg.norm(ring - [0.5 - 1.08, 0.0], axis=1) == pytest.approx(np.sqrt(1.08**2 - 0.44), rel=1e-12)
    # the set reaches c = 1/sqrt(1 - 0.81) = 2.29 and no farther
    assert one.outline(in_three(np.array([0.5, 0.0, 2.3]))) == ()
