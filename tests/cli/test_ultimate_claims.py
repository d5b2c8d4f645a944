"""Claims of an ultimate bound: what is proved of every disturbance, and what is not to be had by simulation."""

import json

import pytest

import gallery
from roa.cli import main


def pushed(push, bound):
    """A damped spring pushed by |d| <= push: with V = x² + x v + v² the ring can be had in closed form."""
    text = gallery.toml(["x", "v"], ["v", "-x - v + d"], [(-3.0, 3.0), (-3.0, 3.0)], bound=bound)
    return f"{text}\n[disturbance]\nd = [{-push}, {push}]\n"


def validate(tmp_path, capsys, text):
    config = tmp_path / "loop.toml"
    config.write_text(text, encoding="utf-8")
    code = main(["validate", str(config), "--out", str(tmp_path / "run"), "--quiet", "--json"])
    printed = capsys.readouterr()
    return code, json.loads(printed.out) if printed.out else printed.err


# V̇ = -V + d (x + 2 v) and |x + 2 v| <= 2 sqrt(V), reached at x = 0: the ring begins at 4 d².
V = 'V = "x**2 + x*v + v**2"\n'


@pytest.mark.parametrize(("inner", "code", "result", "decrease"), [
    (0.1601, 0, "proved", "proved"),
    (0.1599, 3, "not_settled", "refuted"),
])  # fmt: skip
def test_ring_in_closed_form(tmp_path, capsys, inner, code, result, decrease):
    found, verdict = validate(tmp_path, capsys, pushed(0.2, f"{V}inner = {inner}\nlevel = 2"))
    claim = verdict["claim"]
    assert (found, claim["result"], claim["decrease"]) == (code, result, decrease)
    assert (claim["inner"], claim["disturbance"]) == (inner, {"d": [-0.2, 0.2]})
    if decrease == "refuted":
        x, v = claim["witness"]
        d = claim["witness_disturbance"]["d"]
        assert -(x**2 + x * v + v**2) + d * (x + 2 * v) >= -1e-9
    ring = next(one for one in verdict["bounds"] if one["name"] == "ultimate bound")
    assert ring["strength"] == "proved"
    assert 0.16 < ring["inner"] < 0.161
    assert any("not simulated" in caution for caution in verdict["cautions"])


def test_a_disturbance_is_never_supported(tmp_path, capsys):
    # Without an inner level the claim is convergence, and the loop rests where the push lets it.
    text = pushed(0.2, f"{V}level = 2") + '[verdict]\naccept = "supported"\n'
    code, verdict = validate(tmp_path, capsys, text.replace("[verdict]\n\n", "", 1))
    assert (code, verdict["claim"]["result"], verdict["claim"]["draws"]) == (3, "not_settled", 0)
    assert "`inner`" in verdict["claim"]["reason"]


def test_a_nominal_start_that_escapes_refutes(tmp_path, capsys):
    text = gallery.toml(["x"], ["-x + x**3 + d"], [(-2.0, 2.0)], bound='V = "x**2"\ninner = 0.1\nlevel = 2')
    code, verdict = validate(tmp_path, capsys, f"{text}\n[disturbance]\nd = [-0.1, 0.1]\n")
    assert (code, verdict["claim"]["result"], verdict["claim"]["decrease"]) == (1, "refuted", "refuted")
    assert verdict["claim"]["counterexample"]["outcome"] == "escaped"


def test_an_unstable_equilibrium_needs_a_V(tmp_path, capsys):
    text = gallery.toml(["x"], ["x - x**3"], [(-2.0, 2.0)], bound="inner = 1")
    code, message = validate(tmp_path, capsys, text)
    assert code == 2
    assert "unstable" in message
    assert "give P or V" in message


def test_run_ends_in_the_residual_set(tmp_path, capsys):
    # The rest at 0 is unstable and both at ±1 attract: V = x² falls beyond them.
    config = tmp_path / "loop.toml"
    bound = 'V = "x**2"\ninner = 1.21'
    config.write_text(gallery.toml(["x"], ["x - x**3"], [(-2.0, 2.0)], bound=bound), encoding="utf-8")
    out = str(tmp_path / "run")
    assert main(["sweep", str(config), "--out", out, "--samples", "4096", "--quiet", "--json"]) == 0
    verdict = json.loads(capsys.readouterr().out)
    assert "residual set" in verdict["target"]
    assert verdict["basin"]["fraction"] == 1.0
    assert verdict["stability"] == "unstable"
