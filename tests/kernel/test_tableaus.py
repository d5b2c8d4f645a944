"""Every integration method at once: row sums, order conditions, order slope, error estimate."""

import math

import numpy as np
import pytest
from scipy.integrate import DOP853, RK23

from roa.errors import UserError
from roa.kernel import methods
from roa.kernel.tableau import RosenbrockTableau

ALL = {name: methods.load(name) for name in methods.available()}
ROSENBROCK = [name for name, tableau in ALL.items() if isinstance(tableau, RosenbrockTableau)]


@pytest.fixture(params=ALL)
def tableau(request):
    return ALL[request.param]


@pytest.fixture(params=[name for name in ALL if name not in ROSENBROCK])
def explicit(request):
    return ALL[request.param]


@pytest.fixture(params=ROSENBROCK)
def rosenbrock(request):
    return ALL[request.param]


def rosenbrock_step(tableau, f, x, h, J):
    stages = []
    for a, c in zip(tableau.a, tableau.c, strict=True):
        at = x + sum((w * u for w, u in zip(a, stages, strict=True)), np.zeros_like(x))
        past = sum((w * u for w, u in zip(c, stages, strict=True)), np.zeros_like(x))
        stages.append(np.linalg.solve(np.eye(len(x)) - h * tableau.gamma * J, tableau.gamma * (h * f(at) + past)))
    total = sum(m * u for m, u in zip(tableau.m, stages, strict=True))
    return x + total, np.linalg.norm(sum(e * u for e, u in zip(tableau.e, stages, strict=True)))


def step(tableau, f, x, h):
    if isinstance(tableau, RosenbrockTableau):
        return rosenbrock_step(tableau, f, x, h, slope_of_rotation(x))
    slopes = []
    for row in tableau.a:
        slopes.append(f(x + h * sum((a * k for a, k in zip(row, slopes, strict=True)), np.zeros_like(x))))
    weights = tableau.a[-1]
    new = x + h * sum(b * k for b, k in zip(weights, slopes, strict=False))
    errors = [h * sum(e * k for e, k in zip(row, slopes, strict=True)) for row in tableau.e]
    error = np.linalg.norm(errors[0])
    if len(errors) == 2:
        error = error**2 / math.hypot(error, 0.1 * np.linalg.norm(errors[1]))
    return new, error


def test_name_is_the_file(tableau):
    assert tableau.name in methods.available()
    assert tableau.source


def test_row_sums(explicit):
    for node, row in zip(explicit.c, explicit.a, strict=True):
        assert math.fsum(row) == pytest.approx(node, abs=4e-15)
    for weights in explicit.e:
        assert math.fsum(weights) == pytest.approx(0.0, abs=5e-15)


def test_quadrature_conditions(explicit):
    b = (*explicit.a[-1], 0.0)
    embedded = [[x - e for x, e in zip(b, row, strict=True)] for row in explicit.e]
    for weights, order in ((b, explicit.order), *zip(embedded, explicit.embedded_orders, strict=True)):
        for power in range(order):
            moment = math.fsum(w * c**power for w, c in zip(weights, explicit.c, strict=True))
            assert moment == pytest.approx(1 / (power + 1), abs=2e-14)


def test_tall_tree_conditions(explicit):
    # The trees without branches: b A^(q-2) c = 1/q!, the other end of the order conditions.
    a = np.zeros((explicit.stages, explicit.stages))
    for i, row in enumerate(explicit.a):
        a[i, : len(row)] = row
    b = np.array([*explicit.a[-1], 0.0])
    embedded = [b - np.array(row) for row in explicit.e]
    for weights, order in ((b, explicit.order), *zip(embedded, explicit.embedded_orders, strict=True)):
        stages = np.ones(explicit.stages)
        for q in range(1, order + 1):
            assert weights @ stages == pytest.approx(1 / math.factorial(q), abs=2e-14)
            stages = a @ stages


def rotation(x):
    # A nonlinear rotation with a closed form: the angle of x grows by its squared radius.
    return np.array([-x[1], x[0]]) * (x @ x)


def slope_of_rotation(x):
    turn = np.array([[0.0, -1.0], [1.0, 0.0]])
    return turn * (x @ x) + 2.0 * np.outer(turn @ x, x)


def turned(x, t):
    angle = t * (x @ x)
    return np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]]) @ x


def test_order_slope(tableau):
    start = np.array([0.8, 0.6])
    # Few steps for a high order, whose error is soon that of the floats.
    counts = np.array([4, 6, 8, 12] if tableau.order > 5 else [10, 20, 40, 80])
    sizes = 1.0 / counts
    errors = []
    for count, h in zip(counts, sizes, strict=True):
        x = start
        for _ in range(count):
            x, _ = step(tableau, rotation, x, h)
        errors.append(np.linalg.norm(x - turned(start, 1.0)))
    slope = np.polyfit(np.log(sizes), np.log(errors), 1)[0]
    assert slope == pytest.approx(tableau.order, abs=0.35)


def test_error_estimate_covers_the_error(tableau):
    start = np.array([0.8, 0.6])
    # At order 3 a step of 0.3 errs 1.2 times its estimate; shorter ones less than theirs.
    for h in (0.2, 0.1, 0.03):
        new, estimate = step(tableau, rotation, start, h)
        assert np.linalg.norm(new - turned(start, h)) <= estimate + 2e-16


def test_order_of_the_error_estimate(tableau):
    start = np.array([0.8, 0.6])
    sizes = np.array([0.4, 0.3, 0.2, 0.15])
    estimates = [step(tableau, rotation, start, h)[1] for h in sizes]
    slope = np.polyfit(np.log(sizes), np.log(estimates), 1)[0]
    assert slope == pytest.approx(tableau.error_order, abs=0.6)


def test_stability_function_is_the_exponential_to_the_order_and_zero_at_infinity(rosenbrock):
    def grown(z):
        new, error = rosenbrock_step(rosenbrock, lambda x: z * x, np.ones(1), 1.0, np.array([[z]]))
        return new[0], error

    for z in (0.1, -0.1, 0.05, -0.05):
        assert abs(grown(z)[0] - math.exp(z)) < 0.1 * abs(z) ** (rosenbrock.order + 1)
    # Stiffly accurate: a mode that is a million times too fast is gone after one step, and so is its error estimate.
    assert abs(grown(-1e6)[0]) < 1e-5
    assert grown(-1e6)[1] < 1e-5
    # A-stable: on the imaginary axis, as a real rotation, nothing grows.
    for z in np.logspace(-2, 4, 200):
        J = np.array([[0.0, -z], [z, 0.0]])
        new, _ = rosenbrock_step(rosenbrock, lambda x, J=J: J @ x, np.array([1.0, 0.0]), 1.0, J)
        assert np.linalg.norm(new) <= 1.0 + 1e-12


# scipy's classes of the same methods; tsitouras5 has none there.
@pytest.mark.parametrize(
    ("name", "theirs", "rows"),
    [("bogacki_shampine3", RK23, ("E",)), ("dormand_prince8", DOP853, ("E5", "E3"))],
)
def test_same_coefficients_as_scipy(name, theirs, rows):
    tableau = methods.load(name)
    np.testing.assert_allclose(tableau.c, [*theirs.C, 1.0], rtol=1e-15)
    for row, expected in zip(tableau.a, [*theirs.A, theirs.B], strict=True):
        np.testing.assert_allclose(row, expected[: len(row)], rtol=1e-15)
    for row, attribute in zip(tableau.e, rows, strict=True):
        # The sign of an estimate has no meaning, and scipy's differs for one of them.
        np.testing.assert_allclose(np.abs(row), np.abs(getattr(theirs, attribute)), rtol=1e-14)


def test_unknown_method_names_the_available_ones():
    with pytest.raises(UserError) as caught:
        methods.load("tsitouras")
    (sentence,) = caught.value.faults
    assert sentence.startswith('[sweep] method = "tsitouras": no such integration method; available: auto, ')
    assert sentence.endswith('(did you mean "tsitouras5"?)')
