"""The verdict: keys that scripts rely on, a strength beside every number, and nothing that JSON cannot hold."""

import json
import math

import numpy as np
import pytest

import gallery
from roa.basin.claim import Claim, Decrease, Result
from roa.basin.provenance import processor, provenance
from roa.basin.verdict import conclude
from roa.bound.bounds import Bounds
from roa.bound.lyapunov_function import Quadratic
from roa.bound.statement import Bound, Strength
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.loop.equilibrium import find_equilibrium

STRENGTHS = {str(strength) for strength in Strength}
ORIGIN = provenance("roa run gallery.toml", seed=1, samples=16384, jobs=2, fingerprint="ab" * 32)


class Case:
    """The ball in two states with a norm bound and a contact level."""

    def __init__(self, sweep, rule):
        self.configuration = gallery.ball(2, bound="P = [[1.0, 0.0], [0.0, 1.0]]\nlevel = 0.81")
        self.loop = self.configuration.loop
        self.equilibrium = find_equilibrium(self.loop, "gallery.toml")
        self.V = Quadratic(self.loop, np.zeros(2), np.eye(2))
        stated = (
            Bound("norm bound", self.V, 0.25, Strength.PROVED),
            Bound("contact level", self.V, 0.999, Strength.ESTIMATED),
        )
        self.bounds = Bounds(self.V, stated)
        self.target = Target("ball", np.zeros(2), self.loop.half_widths, dwell=5.0)
        self.samples = sweep(self.loop, rule)

    def claim(self, result=Result.SUPPORTED):
        return Claim(result, Decrease.UNDECIDED, "A reason.", self.V, 0.81, 0.99, 0.999, draws=4603)

    def conclude(self, **keywords):
        return conclude(self.configuration, self.equilibrium, self.bounds, ORIGIN, **keywords)


@pytest.fixture
def case(sweep, inside):
    return Case(sweep, inside(lambda x: (x**2).sum(axis=1) < 1))


def test_keys_that_scripts_rely_on(case):
    verdict = case.conclude(target=case.target, samples=case.samples, claim=case.claim())
    assert verdict["equilibrium"] == [0.0, 0.0]
    assert sorted(verdict["eigenvalues"]) == [[-1.0, -1.0], [-1.0, 1.0]]
    assert verdict["domain"] == [[-1.2, 1.2], [-1.2, 1.2]]
    assert verdict["claim"]["result"] == "supported"
    assert verdict["claim"]["decrease"] == "undecided"
    claim_keys = {"reason", "level", "counterexample", "witness", "nonconverging_fraction_upper", "confidence"}
    assert claim_keys <= verdict["claim"].keys()
    assert [bound["name"] for bound in verdict["bounds"]] == ["norm bound", "contact level", "unfalsified level"]
    bound_keys = {"name", "level", "volume", "volume_ratio", "radius_ratio", "strength", "P"}
    assert all(bound_keys <= bound.keys() for bound in verdict["bounds"])
    low, high = verdict["basin"]["interval"]
    assert low < verdict["basin"]["fraction"] < high
    assert verdict["basin"]["volume"] == pytest.approx(math.pi, rel=0.01)
    assert verdict["basin"]["counts"]["converged"] + verdict["basin"]["counts"]["escaped"] == 16384
    assert verdict["comparison"]["bound"] == "claim"
    low, high = verdict["comparison"]["radius_ratio"]["interval"]
    assert low < 0.9 < high  # the claim has nine tenths of the unit ball's radius
    assert low < verdict["comparison"]["radius_ratio"]["value"] < high
    assert verdict["provenance"]["fingerprint"] == "ab" * 32


def test_without_a_claim_the_largest_proved_bound_is_compared(case):
    verdict = case.conclude(samples=case.samples)
    assert verdict["claim"] is None
    assert verdict["comparison"]["bound"] == "norm bound"
    assert verdict["comparison"]["radius_ratio"]["value"] == pytest.approx(0.5, rel=0.01)


def test_without_a_sweep_nothing_is_said_of_the_basin(case):
    verdict = case.conclude(claim=case.claim())
    assert verdict["basin"] is None
    assert verdict["levels"] == []
    assert verdict["comparison"]["bound"] is None
    assert verdict["comparison"]["volume_ratio"] == {"value": None, "interval": None}
    assert verdict["bounds"][0]["volume"] == pytest.approx(math.pi / 4)
    assert verdict["bounds"][0]["volume_ratio"] is None


def test_every_group_of_numbers_says_its_strength(case):
    verdict = case.conclude(samples=case.samples, claim=case.claim())
    assert [bound["strength"] for bound in verdict["bounds"]] == ["proved", "estimated", "simulated"]
    groups = [verdict["claim"], verdict["basin"], verdict["comparison"], *verdict["bounds"], *verdict["levels"]]
    assert all(group["strength"] in STRENGTHS for group in groups)
    assert all(bound["ratio_strength"] == "simulated" for bound in verdict["bounds"])
    assert all(bound["volume_strength"] == "estimated" for bound in verdict["bounds"])


def test_why_a_bound_is_missing_is_kept(case):
    assert case.conclude()["bounds_note"] == ""
    case.bounds = Bounds(case.V, (), "P bounds nothing.")
    assert case.conclude()["bounds_note"] == "P bounds nothing."


def test_is_json_without_loss_and_without_what_is_not_finite(case):
    verdict = case.conclude(target=case.target, samples=case.samples, claim=case.claim())
    assert json.loads(json.dumps(verdict, allow_nan=False)) == verdict


def test_infinite_end_becomes_null(sweep):
    # One cell of a grid: the basin may be empty, so the ratio has no upper end.
    case = Case(sweep, lambda x: np.where(np.abs(x).max(axis=1) < 0.1, Outcome.CONVERGED, Outcome.ESCAPED))
    grid = sweep(case.loop, lambda x: np.where(np.arange(len(x)) == 60, Outcome.CONVERGED, 3), 121, "grid")
    verdict = case.conclude(samples=grid)
    assert verdict["comparison"]["volume_ratio"]["value"] > 1
    assert verdict["comparison"]["volume_ratio"]["interval"][1] is None
    json.dumps(verdict, allow_nan=False)


def test_levels_are_rows_for_the_figure(case):
    rows = case.conclude(samples=case.samples)["levels"]
    assert sum(row["samples"] for row in rows) == 16384
    for row in rows:
        assert row["interval"][0] <= row["share"] <= row["interval"][1]
        assert row["low"] < row["high"]


def test_cautions_are_always_there_and_fit_the_run(sweep, case):
    bare = case.conclude()["cautions"]
    assert len(bare) == 4
    assert any("ball" in caution for caution in case.conclude(target=case.target)["cautions"])
    unresolved = Case(sweep, lambda x: np.full(len(x), Outcome.UNRESOLVED))
    unresolved.samples.missing = 4
    cautions = unresolved.conclude(samples=unresolved.samples)["cautions"]
    assert any("16384 unresolved of 16384" in caution for caution in cautions)
    assert any("partial" in caution for caution in cautions)


def test_provenance_names_what_can_change_a_result():
    assert {"python", "roa", "numpy", "scipy", "numba"} <= ORIGIN["versions"].keys()
    assert ORIGIN["processor"] == processor() != ""
    assert (ORIGIN["seed"], ORIGIN["jobs"], ORIGIN["samples"]) == (1, 2, 16384)
    assert ORIGIN["created"].endswith("+00:00")
