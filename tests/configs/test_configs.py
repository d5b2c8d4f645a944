"""The shipped configurations, run end to end at a small size, against what is known of them."""

from pathlib import Path

import numpy as np
import pytest

from roa import verbs

CONFIGS = Path(__file__).parents[2] / "configs"
NAMES = ("mast", "van_der_pol", "cart", "mast_digital", "tracker", "column")
SAMPLES = 16384
# The search for better bounds takes half a minute of each, and nothing is asked of what it finds.
QUICK = ("cart", "tracker")


@pytest.fixture(scope="module")
def verdicts(tmp_path_factory):
    folder = tmp_path_factory.mktemp("runs")
    found = {}
    for name in NAMES:
        result = verbs.run(CONFIGS / f"{name}.toml", out=folder / name, samples=SAMPLES, quick=name in QUICK)
        assert result.exit_code == 0
        found[name] = result.document
    return found


def bound_named(verdict, name):
    return next(bound for bound in verdict["bounds"] if bound["name"] == name)


def test_every_configuration_is_covered():
    assert {path.stem for path in CONFIGS.glob("*.toml")} == set(NAMES)


def test_mast(verdicts):
    # Reference figures computed independently of this program.
    verdict = verdicts["mast"]
    assert verdict["basin"]["fraction"] == pytest.approx(0.4545, abs=0.003)
    counts = verdict["basin"]["counts"]
    assert counts["converged"] + counts["escaped"] == SAMPLES
    contact, norm = bound_named(verdict, "contact level"), bound_named(verdict, "norm bound")
    assert contact["level_estimated"] == pytest.approx(0.077786, rel=1e-4)
    assert 0.999 < contact["level"] / contact["level_estimated"] < 1
    assert contact["strength"] == "proved"
    assert contact["volume_ratio"] == pytest.approx(0.076, abs=0.001)
    assert norm["level"] == pytest.approx(0.0042, abs=1e-4)
    assert norm["strength"] == "proved"


def test_van_der_pol(verdicts):
    # Khalil, Nonlinear Systems, 3rd ed. 2002, from memory; area and contact level computed independently.
    verdict = verdicts["van_der_pol"]
    low, high = verdict["basin"]["volume_interval"]
    assert low <= 13.722219668 <= high
    contact = bound_named(verdict, "contact level")
    assert contact["level_estimated"] == pytest.approx(2.304478, rel=1e-6)
    assert 0.999 * 2.304478 <= contact["level"] < 2.304478
    assert contact["strength"] == "proved"
    norm = bound_named(verdict, "norm bound")
    assert 0.80 < norm["level"] <= 0.802850
    assert norm["strength"] == "proved"


def test_cart(verdicts):
    # Computed independently of this program.
    verdict = verdicts["cart"]
    assert verdict["basin"]["fraction"] == pytest.approx(0.506, abs=0.01)
    contact = bound_named(verdict, "contact level")
    assert contact["level_estimated"] == pytest.approx(0.0476, abs=1e-4)
    assert contact["level"] > 0.99 * contact["level_estimated"]
    assert contact["strength"] == "proved"


def test_mast_digital(verdicts):
    verdict = verdicts["mast_digital"]
    # One period by the matrix exponential of the linearisation and a delay of half of it (computed independently).
    assert verdict["sampled"]["spectral_radius"] == pytest.approx(0.932477, abs=1e-6)
    assert verdict["stability"] == "stable"
    counts = verdict["basin"]["counts"]
    assert counts["converged"] + counts["converged_over_limit"] + counts["escaped"] == SAMPLES
    assert 0 < verdict["basin"]["safe"]["fraction"] < verdict["basin"]["fraction"]
    # The delay costs a part of the basin that the continuous loop has.
    assert 0.43 < verdict["basin"]["fraction"] < verdicts["mast"]["basin"]["fraction"]
    # Proved from sample to sample, delay included; the target is a ball, since the set is of the waiting command too.
    contact = bound_named(verdict, "contact level")
    assert contact["strength"] == "proved"
    assert 0.99 < contact["level"] / contact["level_estimated"] < 1
    assert contact["level"] < bound_named(verdict, "unfalsified level")["level"]
    assert "ball" in verdict["target"]


def test_tracker(verdicts):
    # A fixed-step Runge–Kutta simulation with scipy's PchipInterpolator on a grid of 160 by 160 cells: 0.518.
    verdict = verdicts["tracker"]
    assert verdict["basin"]["fraction"] == pytest.approx(0.518, abs=0.006)
    assert verdict["basin"]["counts"]["failed"] == 0
    contact = bound_named(verdict, "contact level")
    assert contact["strength"] == "proved"
    assert contact["level"] > 0.99 * contact["level_estimated"]


@pytest.mark.parametrize("name", ["mast", "van_der_pol", "cart"])
def test_every_bound_lies_below_the_unfalsified_level(verdicts, name):
    levels = {bound["name"]: bound["level"] for bound in verdicts[name]["bounds"]}
    assert 0 < levels["norm bound"] < levels["contact level"] < levels["unfalsified level"]


def test_column(verdicts):
    # The share of the column whose amplifier does not lag, by fixed steps of an integrator of its own: a tenth of a
    # millisecond moves the edge by less than that.
    verdict = verdicts["column"]
    assert verdict["integration"]["method"] == "rodas4"
    assert verdict["basin"]["fraction"] == pytest.approx(column_without_lag(), abs=0.004)
    counts = verdict["basin"]["counts"]
    assert counts["converged"] + counts["escaped"] == SAMPLES
    contact = bound_named(verdict, "contact level")
    assert contact["strength"] == "proved"
    assert 0.99 < contact["level"] / contact["level_estimated"] <= 1


def column_without_lag():
    """Share of the starts that come to rest, by the classical Runge-Kutta method on a grid of midpoints."""

    def slopes(lean, rate):
        current = np.clip(-52 * lean - 16 * rate, -8, 8)
        return rate, (210 * np.sin(lean) - 9 * rate + 14 * current) / 38

    middles = (np.arange(128) + 0.5) / 64 - 1
    lean, rate = np.meshgrid(middles, 2.5 * middles)
    h = 0.01
    for _ in range(800):
        a = slopes(lean, rate)
        b = slopes(lean + h / 2 * a[0], rate + h / 2 * a[1])
        c = slopes(lean + h / 2 * b[0], rate + h / 2 * b[1])
        d = slopes(lean + h * c[0], rate + h * c[1])
        lean = lean + h / 6 * (a[0] + 2 * b[0] + 2 * c[0] + d[0])
        rate = rate + h / 6 * (a[1] + 2 * b[1] + 2 * c[1] + d[1])
        gone = np.abs(lean) > 1.4
        lean, rate = np.where(gone, 1.5, lean), np.where(gone, 0.0, rate)
    return float((np.abs(lean) < 0.5).mean())
