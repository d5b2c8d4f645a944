import re

import pytest

from roa.report.answer import answer
from roa.report.summary import summary

STRENGTHS = ("proved", "supported", "simulated", "estimated")


def sections(text):
    return text.rstrip().split("\n\n")


def test_leads_with_the_answer(verdict):
    first = " ".join(sections(summary(verdict))[0].split())
    assert first == " ".join(answer(verdict))
    assert first.startswith("The simulated basin fills 41.9 % (99 % interval 41.7 to 42.1 %, simulated) of the domain.")
    assert "the norm bound (proved) covers 3.1 % by volume (17.6 % by radius)" in first
    assert "the contact level (estimated) covers 23.4 % by volume (48.4 % by radius)" in first
    assert "unfalsified" not in first


@pytest.mark.parametrize("result", ["proved", "supported", "refuted", "not_settled"])
def test_at_most_80_columns_whatever_the_result(claimed, result):
    verdict = claimed(result=result, nonconverging_fraction_upper=0.001)
    for line in summary(verdict, ["report.html", "verdict.json"] * 8, "results/disc").splitlines():
        assert len(line) <= 80
        assert line == line.rstrip()


def test_every_row_of_numbers_carries_a_strength(verdict):
    text = summary(verdict)
    tables = [part for part in sections(text) if part.startswith(("Bounds", "Outcomes"))]
    rows = [line for line in "\n".join(tables).splitlines() if re.search(r"\d", line)]
    assert len(rows) == 8
    for row in rows:
        assert row.rsplit(maxsplit=1)[-1] in STRENGTHS, row
    for sentence in answer(verdict):
        assert any(word in sentence for word in STRENGTHS), sentence


def test_rows_hold_the_numbers_of_the_verdict(verdict):
    text = summary(verdict)
    assert re.search(r"norm bound +0\.041199 +3\.1 % +17\.6 % +proved", text)
    assert re.search(r"converged +109,794 +41\.88 % +simulated", text)
    assert "absent" not in text
    assert "over limit" not in text


def test_says_what_next_where_the_files_are_and_the_cautions(verdict):
    text = summary(verdict, ["report.html"], "results/disc")
    assert "Files in results/disc\n  report.html" in text
    assert "roa validate" in text
    joined = " ".join(text.split())
    for caution in verdict["cautions"]:
        assert caution in joined
    verdict["basin"]["counts"] |= {"unresolved": 5, "failed": 2}
    verdict["basin"] |= {"partial": True, "samples_wanted": 99_999}
    text = summary(verdict)
    assert text.startswith(f"Partial sweep: the first {verdict['basin']['samples']:,} of 99,999 starts (simulated).")
    assert "Some starts are unresolved" in text
    assert "Some starts failed" in text
    assert "not complete" in text


def test_bounds_alone(verdict):
    verdict |= {"basin": None, "levels": []}
    for bound in verdict["bounds"]:
        bound |= {key: None for key in bound if "ratio" in key}
    del verdict["bounds"][2]
    text = summary(verdict)
    assert answer(verdict) == (
        "The norm bound (proved) reaches level 0.041199 and the contact level (estimated) reaches level 0.31.",
    )
    assert re.search(r"norm bound +0\.041199 +– +– +proved", text)
    assert "Outcomes" not in text


def test_no_bound_and_no_basin_are_said(verdict):
    verdict["bounds"] = [verdict["bounds"][0] | {"level": 0.0}]
    assert answer(verdict)[1] == "No bound above level zero was found for this V (estimated)."
    verdict["bounds_note"] = "P is not positive definite by proof: it bounds nothing."
    assert answer(verdict)[1].endswith("(estimated). P is not positive definite by proof: it bounds nothing.")


def test_says_why_a_bound_is_missing(verdict):
    note = "A V that is not quadratic has no norm bound."
    assert note not in summary(verdict)
    assert f"\n  {note}\n" in summary(verdict | {"bounds_note": note})


def test_only_what_can_be_extended_is_to_be_extended(verdict):
    assert "extend the sweep" in summary(verdict)
    verdict["basin"]["by_replicate"] = {"converged": [41], "samples": [100]}  # a grid
    assert "extend the sweep" not in summary(verdict)


def test_an_empty_basin_has_nothing_to_compare(verdict):
    verdict["basin"] |= {"fraction": 0.0, "interval": [0.0, 1.4e-5]}
    for bound in verdict["bounds"]:
        bound |= {"volume_ratio": None, "radius_ratio": None}
    sentences = answer(verdict)
    assert sentences[0].startswith("The simulated basin fills 0.000 % (99 % interval 0.000 to 0.002 %, simulated)")
    assert sentences[1] == "There is no simulated basin to compare the bounds with."


def test_a_refuted_claim_shows_its_counterexample(claimed):
    verdict = claimed()
    assert answer(verdict)[0] == (
        "Refuted: the start x = 0.9 m, y = 0.6 m/s lies in the claimed set V ≤ 2 and escapes (simulated)."
    )
    assert "  roa replay disc.toml --from x=0.9,y=0.6\n" in summary(verdict)
    assert "Do not use the claim" in summary(verdict)


def test_a_long_replay_command_can_still_be_copied(claimed):
    command = "roa replay configurations/with/a/long/path/disc.toml --from x=0.123456789012345,y=-0.123456789012345"
    verdict = claimed()
    verdict["claim"]["counterexample"]["replay"] = command
    lines = summary(verdict).split("See the counterexample again (simulated)\n")[1].split("\n\n")[0]
    assert max(map(len, lines.splitlines())) <= 80
    assert lines.replace("\\\n", "").split() == command.split()


def test_other_results_lead_with_the_result(claimed):
    nothing = {"counterexample": None, "witness": None}
    proved = claimed(result="proved", decrease="proved", **nothing)
    assert answer(proved) == (
        "Proved: every start in the claimed set V ≤ 2 converges.",
        "It covers 3.1 % of the simulated basin by volume, 17.6 % by radius (simulated).",
    )
    supported = claimed(result="supported", decrease="undecided", nonconverging_fraction_upper=0.00099999, **nothing)
    assert answer(supported)[0] == (
        "Supported, not proved: at 99 % confidence at most 0.1 % of the claimed set V ≤ 2 does not converge."
    )
    supported = {"result": "supported", "nonconverging_fraction_upper": 0.001, "counterexample": None}
    doubtful = claimed(decrease="refuted", reason="V̇ > 0 there.", **supported)
    assert answer(doubtful)[1] == "V̇ > 0 there."
    open_ = claimed(result="not_settled", reason="The claimed set leaves the domain.", **nothing)
    assert answer(open_)[0].startswith("Not settled: ")
    assert answer(open_)[1] == "The claimed set leaves the domain."
    indefinite = claimed(result="refuted", reason="P is not positive definite.", **nothing)
    assert answer(indefinite) == ("Refuted: the claimed set V ≤ 2 is no bound.", "P is not positive definite.")


def test_ratios_have_the_digits_of_their_intervals(verdict):
    verdict["bounds"][0] |= {"volume_ratio": 0.0041452, "volume_ratio_interval": [0.004134, 0.004157]}
    verdict["bounds"][1] |= {"volume_ratio_interval": [0.2, None]}
    text = summary(verdict)
    assert re.search(r"norm bound +0\.041199 +0\.415 % ", text)
    assert re.search(r"contact level +0\.31 +23\.4 % ", text)
