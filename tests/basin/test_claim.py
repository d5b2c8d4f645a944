"""Claims about x' = Sx - (1 - |x|²)x, whose basin is the unit ball: every way in which a claim can end."""

from dataclasses import replace
from decimal import Decimal

import numpy as np
import pytest

import gallery
from roa.basin.claim import Decrease, Result, judge
from roa.basin.verdict import exit_code
from roa.bound.bounds import Bounds
from roa.bound.lyapunov_function import FormulaV, Quadratic
from roa.bound.statement import Bound, Strength
from roa.kernel.integration import Integration
from roa.kernel.outcomes import Outcome
from roa.kernel.target import Target
from roa.kernel.trajectories import Trajectories
from roa.loop.equilibrium import find_equilibrium

SETTINGS = Integration("tsitouras5", rtol=1e-6, atol=1e-9, horizon=60.0, longest=200.0, escape=10.0)


class Case:
    """A claim about the ball in n states, judged with lanes that know the closed form."""

    def __init__(self, level, P=None, n=2, norm_level=0.1, verdict=""):
        P = np.eye(n) if P is None else np.asarray(P, float)
        rows = ", ".join(f"[{', '.join(map(repr, row))}]" for row in P.tolist())
        self.configuration = gallery.ball(n, bound=f"P = [{rows}]\nlevel = {level!r}", verdict=verdict)
        self.loop = self.configuration.loop
        self.equilibrium = find_equilibrium(self.loop, "gallery.toml")
        V = Quadratic(self.loop, self.equilibrium.x, P)
        self.bounds = Bounds(V, (Bound("norm bound", V, norm_level, Strength.PROVED),))
        self.target = Target("level", np.zeros(n), self.loop.half_widths, P=np.eye(n), level=0.0625)
        self.starts = []
        self.seed = 1

    def run(self, x):
        """|x|²/(1 - |x|²) falls like e^(-2t) (computed independently); the target is |x| = 1/4."""
        self.starts.append(x)
        size = (x**2).sum(axis=1)
        with np.errstate(all="ignore"):
            time = np.where(size < 1, 0.5 * np.log(15 * size / (1 - size)), 1.0)
        outcome = np.where(size < 1, Outcome.CONVERGED, Outcome.ESCAPED)
        m = len(x)
        return Trajectories(
            x, outcome.astype(np.uint8), np.maximum(time, 0), x, np.abs(x), np.ones(m, np.int32), np.zeros(m, np.uint8)
        )

    def judge(self, run=None):
        return judge(
            self.configuration,
            self.bounds,
            self.target,
            SETTINGS,
            run or self.run,
            self.seed,
        )


def spoiled(case, outcome, condition):
    """Lanes that give another outcome where the condition holds for a start."""

    def run(x):
        trajectories = case.run(x)
        trajectories.outcome[condition(x)] = outcome
        return trajectories

    return run


def test_proved_by_the_norm_bound_without_a_trajectory():
    case = Case(0.25, norm_level=0.25)
    claim = case.judge()
    assert (claim.result, claim.decrease) == (Result.PROVED, Decrease.PROVED)
    assert "norm bound" in claim.reason
    assert case.starts == []
    assert claim.bound.strength is Strength.PROVED


def test_one_unit_in_the_last_place_above_the_norm_bound_is_not_proved():
    assert Case(0.25, norm_level=float(np.nextafter(0.25, 0))).judge().result is Result.SUPPORTED


def test_decimal_level_is_not_rounded_into_the_proof():
    # 0.1 as a float lies above the decimal 0.1; the next one down lies below it.
    case = Case(0.1, norm_level=float(np.nextafter(0.1, 0)))
    assert case.configuration.bound.level == Decimal("0.1")
    assert case.judge().result is Result.SUPPORTED
    assert Case(0.1, norm_level=0.1).judge().result is Result.PROVED


def test_norm_bound_that_is_only_estimated_proves_nothing():
    case = Case(0.25, norm_level=0.3)
    estimated = replace(case.bounds.stated[0], strength=Strength.ESTIMATED)
    case.bounds = replace(case.bounds, stated=(estimated,))
    assert case.judge().result is Result.SUPPORTED


def test_supported_by_the_number_of_draws_fixed_beforehand():
    case = Case(0.9)
    claim = case.judge()
    assert (claim.result, claim.decrease) == (Result.SUPPORTED, Decrease.UNDECIDED)
    # 4603 without a failure for .999 at 99 %.
    assert (claim.draws, claim.failures, len(case.starts[-1])) == (4603, 0, 4603)
    assert claim.nonconverging_fraction_upper == pytest.approx(1 - 0.01 ** (1 / 4603))
    assert claim.nonconverging_fraction_upper <= 0.001
    assert claim.counterexample is claim.witness is None
    assert claim.reason.endswith(".")


def test_draws_are_uniform_in_the_set_and_apart_from_the_search():
    case = Case(0.9, P=np.diag([1.0, 4.0]))
    case.judge()
    draws = case.starts[-1]
    size = (draws**2 * [1.0, 4.0]).sum(axis=1) / 0.9
    # In two states V/level of a uniform point is uniform, and so is its angle.
    assert np.abs(np.sort(size) - (np.arange(len(size)) + 0.5) / len(size)).max() < 1.63 / np.sqrt(len(size))
    angle = np.sort(np.arctan2(2 * draws[:, 1], draws[:, 0]) / (2 * np.pi) + 0.5)
    assert np.abs(angle - (np.arange(len(angle)) + 0.5) / len(angle)).max() < 1.63 / np.sqrt(len(angle))
    searched = {tuple(x) for x in np.concatenate(case.starts[:-1])}
    assert not searched & {tuple(x) for x in draws}


@pytest.mark.parametrize("n", [1, 2, 4])
def test_refuted_by_a_start_that_escapes(n):
    case = Case(1.1, n=n)
    claim = case.judge()
    assert claim.result is Result.REFUTED
    found = claim.counterexample
    size = float((found.initial**2).sum())
    assert 1 <= size <= 1.1
    assert abs(found.V - size) < 1e-12
    assert found.decision.outcome is Outcome.ESCAPED
    # The replay line carries every digit of the start.
    text = claim.replay.split("--from ")[1].strip("'\"")
    again = [float(part.split("=")[1]) for part in text.split(",")]
    assert again == found.initial.tolist()
    assert claim.replay.startswith("roa replay gallery.toml --from ")


def test_refuted_although_the_lanes_are_wrong_about_the_innermost_suspects():
    case = Case(1.1)
    claim = case.judge(spoiled(case, Outcome.ESCAPED, lambda x: np.abs((x**2).sum(axis=1) - 0.8) < 0.05))
    assert claim.result is Result.REFUTED
    assert claim.counterexample.V >= 1


def test_refuted_where_only_two_tips_of_the_set_leave_the_basin():
    """Tips of 4e-5 of the boundary, which the first starts miss; the search closes in along the times."""
    case = Case(1.0, P=np.diag([1 - 1e-9, 4.0]))
    claim = case.judge()
    assert claim.result is Result.REFUTED
    assert len(case.starts) > 1


@pytest.mark.parametrize("outcome", [Outcome.ESCAPED, Outcome.SETTLED_ELSEWHERE])
def test_suspect_that_the_independent_integrator_does_not_confirm_refutes_nothing_but_counts(outcome):
    case = Case(0.9)
    claim = case.judge(spoiled(case, outcome, lambda x: (x**2).sum(axis=1) > 0.85))
    assert claim.result is Result.NOT_SETTLED
    assert claim.counterexample is None
    assert claim.failures == pytest.approx(4603 * (0.05 / 0.9), rel=0.3)
    assert f"{claim.failures} {outcome.word}" in claim.reason


@pytest.mark.parametrize("outcome", [Outcome.UNRESOLVED, Outcome.FAILED, Outcome.CONVERGED_OVER_LIMIT])
def test_starts_that_never_refute_count_against_support(outcome):
    case = Case(0.9)
    claim = case.judge(spoiled(case, outcome, lambda x: x[:, 0] > 0.9))
    assert claim.result is Result.NOT_SETTLED
    assert claim.counterexample is None
    assert 0 < claim.failures < 100
    assert claim.nonconverging_fraction_upper > 0.001
    assert outcome.word in claim.reason


def test_one_failure_among_the_draws_is_one_too_many():
    case = Case(0.9)

    def run(x):
        trajectories = case.run(x)
        trajectories.outcome[: len(x) == 4603] = Outcome.UNRESOLVED  # the first of the draws alone
        return trajectories

    claim = case.judge(run)
    assert (claim.result, claim.failures) == (Result.NOT_SETTLED, 1)
    p = claim.nonconverging_fraction_upper
    # Computed independently: at most one failure among 4603 is seen with probability 1 - .99.
    assert (1 - p) ** 4603 + 4603 * p * (1 - p) ** 4602 == pytest.approx(0.01)


def test_refuted_by_settling_elsewhere():
    # x1 < x2² settles at (-1, 0) (computed independently); the circle about (1, 0) reaches beyond that parabola.
    configuration = gallery.parabola(bound="P = [[1.0, 0.0], [0.0, 1.0]]\nlevel = 0.98")
    loop, centre = configuration.loop, np.array([1.0, 0.0])
    target = Target("ball", centre, loop.half_widths, dwell=5.0, elsewhere=np.array([[-1.0, 0.0]]))

    def run(x):
        trajectories = Case(0.9).run(x)
        trajectories.outcome[:] = np.where(x[:, 0] > x[:, 1] ** 2, Outcome.CONVERGED, Outcome.SETTLED_ELSEWHERE)
        return trajectories

    claim = judge(configuration, Bounds(Quadratic(loop, centre, np.eye(2)), ()), target, SETTINGS, run, 1)
    assert claim.result is Result.REFUTED
    assert claim.counterexample.decision.outcome is Outcome.SETTLED_ELSEWHERE
    x = claim.counterexample.initial
    assert x[0] < x[1] ** 2
    assert "another equilibrium" in claim.reason


def test_refuted_by_an_indefinite_P():
    case = Case(0.5, P=np.diag([1.0, -0.25]))
    claim = case.judge()
    assert claim.result is Result.REFUTED
    assert "-0.25" in claim.reason
    assert claim.counterexample is None
    assert case.starts == []


def test_P_on_the_border_of_definite_is_not_settled():
    # det P = 0 exactly; the floats of the eigenvalue may fall on either side.
    claim = Case(0.5, P=[[1.0, 0.5], [0.5, 0.25]]).judge()
    assert claim.result in (Result.NOT_SETTLED, Result.REFUTED)
    assert claim.decrease is Decrease.UNDECIDED


def test_not_settled_where_the_set_leaves_the_domain():
    case = Case(2.0, norm_level=3.0)
    claim = case.judge()
    assert claim.result is Result.NOT_SETTLED
    assert claim.largest_level_inside == pytest.approx(1.44)
    assert "leaves the domain" in claim.reason
    assert "1.44" in claim.reason
    assert case.starts == []


def test_decrease_refuted_though_the_set_is_supported():
    # V̇ = -6 x1 x2 - 2 (1 - |x|²)(x1² + 4 x2²) > 0 where x1 = -2 x2 and |x|² is near 0.8; the set lies in the ball.
    case = Case(0.9, P=np.diag([1.0, 4.0]))
    claim = case.judge()
    assert (claim.result, claim.decrease) == (Result.SUPPORTED, Decrease.REFUTED)
    x = claim.witness
    assert x @ np.diag([1.0, 4.0]) @ x <= 0.9
    assert case.bounds.V.decrease(x) > 0
    assert "argument" in claim.reason


def test_increase_is_found_just_above_the_contact_level():
    # V̇ = 2 r²(r² - 1) for P = I: the contact level is exactly 1, and every point beyond it is a witness.
    claim = Case(1 + 1e-9).judge()
    assert claim.decrease is Decrease.REFUTED
    assert Case(1 - 1e-9).judge().decrease is Decrease.UNDECIDED


def test_equal_seeds_give_equal_answers_and_others_other_draws():
    first, second, third = Case(0.9), Case(0.9), Case(0.9)
    third.seed = 2
    claims = [case.judge() for case in (first, second, third)]
    assert claims[0].reason == claims[1].reason
    assert np.array_equal(first.starts[-1], second.starts[-1])
    assert not np.array_equal(first.starts[-1], third.starts[-1])


def formula_case(text, level):
    """The same loop with V as a formula, for which no norm bound exists."""
    case = Case(level)
    case.configuration = gallery.ball(2, bound=f'V = "{text}"\nlevel = {level!r}')
    V = FormulaV(case.configuration.loop, np.zeros(2), case.configuration.bound.V, text)
    case.bounds = Bounds(V, ())
    return case


def test_formula_supported_and_refuted():
    supported = formula_case("x0**2 + x1**2 + (x0**2 + x1**2)**2", 0.9 + 0.81).judge()
    assert (supported.result, supported.draws) == (Result.SUPPORTED, 4603)
    refuted = formula_case("x0**2 + x1**2 + (x0**2 + x1**2)**2", 1.1 + 1.21).judge()
    assert (refuted.result, refuted.decrease) == (Result.REFUTED, Decrease.REFUTED)
    assert 1 <= (refuted.counterexample.initial**2).sum() <= 1.1


def test_formula_that_is_not_positive_definite_is_refuted():
    claim = formula_case("x0**2 + 3*x0*x1 + x1**2", 0.5).judge()
    assert claim.result is Result.REFUTED
    assert "not positive definite" in claim.reason


def test_formula_whose_set_leaves_the_domain_is_not_settled():
    # V = 1.44/(1 + 1.44) at the faces, and no more than that where |x| is 1.2.
    claim = formula_case("(x0**2 + x1**2)/(1 + x0**2 + x1**2)", 0.6).judge()
    assert claim.result is Result.NOT_SETTLED
    assert claim.largest_level_inside == pytest.approx(1.44 / 2.44, rel=1e-4)


def test_part_of_the_formulas_set_apart_from_the_equilibrium_is_no_counterexample():
    # Beyond a ridge at x0² = .8 the formula falls to .346 at the face; what escapes from there is not claimed.
    claim = formula_case("2.4*(x0**2 + x1**2) - 1.5*x0**4", 0.5).judge()
    assert claim.result is Result.SUPPORTED
    assert claim.counterexample is None


@pytest.mark.parametrize(
    ("result", "accept", "code"),
    [
        (Result.PROVED, "proved", 0),
        (Result.PROVED, "supported", 0),
        (Result.SUPPORTED, "proved", 3),
        (Result.SUPPORTED, "supported", 0),
        (Result.REFUTED, "proved", 1),
        (Result.REFUTED, "supported", 1),
        (Result.NOT_SETTLED, "proved", 3),
        (Result.NOT_SETTLED, "supported", 3),
    ],
)
def test_exit_codes(result, accept, code):
    claim = replace(Case(0.25, norm_level=0.25).judge(), result=result)
    assert exit_code(claim, accept) == code


def test_exit_code_without_a_claim():
    assert exit_code(None, "proved") == 0
