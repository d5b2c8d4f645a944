"""Every integration method at once: row sums, order conditions, order slope, error estimate."""

import math

import numpy as np
import pytest

from roa.errors import UserError
from roa.kernel import methods


@pytest.fixture(params=methods.available())
def tableau(request):
    return methods.load(request.param)


def step(tableau, f, x, h):
    slopes = []
    for row in tableau.a:
        slopes.append(f(x + h * sum((a * k for a, k in zip(row, slopes, strict=True)), np.zeros_like(x))))
    weights = tableau.a[-1]
    new = x + h * sum(b * k for b, k in zip(weights, slopes, strict=False))
    error = h * sum(e * k for e, k in zip(tableau.e, slopes, strict=True))
    return new, error


def test_name_is_the_file(tableau):
    assert tableau.name in methods.available()
    assert tableau.source


def test_row_sums(tableau):
    for node, row in zip(tableau.c, tableau.a, strict=True):
        assert math.fsum(row) == pytest.approx(node, abs=4e-15)
    assert math.fsum(tableau.e) == pytest.approx(0.0, abs=1e-15)


def test_quadrature_conditions(tableau):
    b = (*tableau.a[-1], 0.0)
    embedded = [x - e for x, e in zip(b, tableau.e, strict=True)]
    for weights, order in ((b, tableau.order), (embedded, tableau.embedded_order)):
        for power in range(order):
            moment = math.fsum(w * c**power for w, c in zip(weights, tableau.c, strict=True))
            assert moment == pytest.approx(1 / (power + 1), abs=1e-14)


def rotation(x):
    # A nonlinear rotation with a closed form: the angle of x grows by its squared radius.
    return np.array([-x[1], x[0]]) * (x @ x)


def turned(x, t):
    angle = t * (x @ x)
    return np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]]) @ x


def test_order_slope(tableau):
    start = np.array([0.8, 0.6])
    sizes = np.array([0.1, 0.05, 0.025, 0.0125])
    errors = []
    for h in sizes:
        x = start
        for _ in range(round(1.0 / h)):
            x, _ = step(tableau, rotation, x, h)
        errors.append(np.linalg.norm(x - turned(start, 1.0)))
    slope = np.polyfit(np.log(sizes), np.log(errors), 1)[0]
    assert slope == pytest.approx(tableau.order, abs=0.35)


def test_error_estimate_covers_the_error(tableau):
    start = np.array([0.8, 0.6])
    for h in (0.3, 0.1, 0.03):
        new, estimate = step(tableau, rotation, start, h)
        assert np.linalg.norm(new - turned(start, h)) <= np.linalg.norm(estimate)


def test_unknown_method_names_the_available_ones():
    with pytest.raises(UserError) as caught:
        methods.load("tsitouras")
    (sentence,) = caught.value.faults
    assert sentence.startswith('[sweep] method = "tsitouras": no such integration method; available: auto, ')
    assert sentence.endswith('(did you mean "tsitouras5"?)')
