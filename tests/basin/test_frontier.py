"""The lowest failing start, against ellipsoids whose lowest point is known by their singular values."""

from types import SimpleNamespace

import numpy as np
import pytest

import gallery
from roa.basin.frontier import Height, lowest
from roa.bound.lyapunov_function import FormulaV, Quadratic

BUDGET = 1000


def ellipsoid(n):
    """L with singular values from 1 down to 0.35: the ellipsoid |L⁻¹x| < 1 comes within 0.35 of its centre."""
    U, _, W = np.linalg.svd(np.random.default_rng(5).standard_normal((n, n)))
    return U @ np.diag(np.linspace(1, 0.35, n)) @ W


def linear(n):
    return gallery.configuration([f"x{i}" for i in range(n)], [f"-x{i}" for i in range(n)], [(-1.2, 1.2)] * n)


def outside(L, log):
    inverse = np.linalg.inv(L)

    def run(x):
        log.append(len(x))
        return SimpleNamespace(out=((x @ inverse.T) ** 2).sum(axis=1) >= 1)

    return run


@pytest.mark.parametrize(("n", "most"), [(1, 1e-9), (2, 1e-4), (4, 1e-4), (6, 1e-3)])
def test_lowest_level_within_1000_trajectories(n, most):
    L, loop = ellipsoid(n) if n > 1 else np.array([[0.35]]), linear(n).loop
    V = Quadratic(loop, np.zeros(n), np.eye(n))
    for seed in range(8):
        log = []
        found = lowest(Height(loop, V.centre, V), outside(L, log), lambda r: r.out, BUDGET, np.random.default_rng(seed))
        start, height, used = found
        assert sum(log) == used <= BUDGET
        assert height == pytest.approx(float(V.value(start)))
        assert ((np.linalg.inv(L) @ start) ** 2).sum() >= 1 - 1e-12
        assert 0 <= height / 0.35**2 - 1 < most


def test_same_seed_same_answer():
    loop, L = linear(3).loop, ellipsoid(3)
    one, other = (
        lowest(Height(loop, np.zeros(3)), outside(L, []), lambda r: r.out, 300, np.random.default_rng(7)) for _ in "ab"
    )
    assert np.array_equal(one[0], other[0])


def test_formula_and_quadratic_find_the_same():
    loop, L = linear(2).loop, ellipsoid(2)
    configuration = gallery.configuration(
        ["x0", "x1"], ["-x0", "-x1"], [(-1.2, 1.2)] * 2, bound='V = "x0**2 + 2*x1**2 + x0**4"'
    )
    V = FormulaV(loop, np.zeros(2), configuration.bound.V, "")
    height = Height(loop, np.zeros(2), V)
    start, level, _ = lowest(height, outside(L, []), lambda r: r.out, BUDGET, np.random.default_rng(1))
    angle = np.linspace(0, 2 * np.pi, 100_001)
    on_edge = np.stack([np.cos(angle), np.sin(angle)], axis=1) @ L.T
    assert level == pytest.approx(float(V.value(on_edge).min()), rel=1e-4)
    assert float(V.value(start)) == pytest.approx(level)


def test_nothing_fails():
    loop = linear(2).loop
    run = lambda x: SimpleNamespace(out=np.zeros(len(x), bool))  # noqa: E731
    assert lowest(Height(loop, np.zeros(2)), run, lambda r: r.out, 200, np.random.default_rng(0)) is None


def test_distance_is_in_half_widths():
    loop = gallery.configuration("xy", ["-x", "-y"], [(-1.0, 3.0), (-10.0, 10.0)]).loop
    height = Height(loop, np.zeros(2))
    assert height.of(np.array([[2.0, 0.0], [0.0, 10.0]])).tolist() == [1.0, 1.0]
    assert height.to_face(np.array([[1.0, 0.0], [-1.0, 0.0], [0.0, 1.0]])).tolist() == [1.5, 0.5, 1.0]
