"""The independent check of certificates: what holds passes, and what was tampered with does not."""

import ast
import copy
import importlib.util
import json
import subprocess
import sys
from pathlib import Path

import pytest

import gallery
from roa.basin.certificate import certificate
from roa.basin.claim import Claim, Decrease, Result
from roa.bound.bounds import Bounds, lyapunov_function
from roa.loop.equilibrium import find_equilibrium
from roa.loop.read import read_text

LEVEL = 2.29  # of van der Pol's loop, whose contact level is 2.304478 (computed independently)
BOXES = 600  # more than twice what the check at this level takes
SCRIPT = Path(__file__).parents[2] / "scripts" / "recheck_certificate.py"


@pytest.fixture(scope="module")
def recheck():
    spec = importlib.util.spec_from_file_location("recheck_certificate", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def claimed(configuration):
    """The certificate of a claim as if it were proved: whether it is, is what the check is for."""
    V = lyapunov_function(configuration, find_equilibrium(configuration.loop, "a.toml"))
    level = float(configuration.bound.level)
    claim = Claim(Result.PROVED, Decrease.PROVED, "", V, level, 0.99, 0.999)
    return json.loads(json.dumps(certificate(configuration, Bounds(V, ()), claim)))


def van_der_pol(level):
    return claimed(gallery.van_der_pol(bound=f"level = {level}"))


def saturated(level):
    """The pendulum 4 sin θ - 0.3 ω under PD with a clip that is active in the set."""
    return claimed(gallery.configuration(
        ["a", "w"], ["w", "4*sin(a) - 0.3*w + clip(-10*a - 4*w, -m, m)"], [(-1.5, 1.5), (-4.0, 4.0)],
        parameters={"m": 5.0}, bound=f"level = {level}",
    ))  # fmt: skip


def test_what_holds_is_checked(recheck):
    assert recheck.check(van_der_pol(LEVEL), BOXES) < BOXES


@pytest.mark.long
def test_a_clip_that_is_active(recheck):
    assert recheck.check(saturated(0.3), 3000) < 3000


@pytest.mark.long
@pytest.mark.parametrize("level", [2.3046, 2.4, 3.0])
def test_a_level_that_is_too_high(recheck, level):
    with pytest.raises((recheck.NotSo, recheck.Open)):
        recheck.check(van_der_pol(level), 600)


TAMPERED = {
    "level up by 1 %": lambda c: c.update(level=str(float(c["level"]) * 1.01)),
    "a coefficient": lambda c: c["dynamics"].__setitem__(1, "x + (1.02*x**2 - 1)*y"),
    "a sign": lambda c: c["dynamics"].__setitem__(0, "y"),
    "P": lambda c: c["P"][0].__setitem__(0, "2.5"),
    "P not symmetric": lambda c: c["P"][0].__setitem__(1, "-0.45"),
    "P not definite": lambda c: c["P"][0].__setitem__(0, "0.1"),
    "domain": lambda c: c["domain"].__setitem__(0, ["-1.3", "3"]),
    "no equilibrium": lambda c: c["dynamics"].__setitem__(0, "-y + 0.01"),
    "T singular": lambda c: c["T"].__setitem__(0, c["T"][1]),
    "a disturbance": lambda c: c["disturbance"].update(d=["-1", "1"]),
    "a disturbance of a parameter": lambda c: (c["parameters"].update(d="0"), c["disturbance"].update(d=["-1", "1"])),
    "an unknown function": lambda c: c["dynamics"].__setitem__(0, "-y + 0*open(x)"),
    "code": lambda c: c["dynamics"].__setitem__(0, "__import__('os').getpid()"),
}


@pytest.mark.parametrize("case", TAMPERED)
def test_what_was_tampered_with(recheck, case):
    tampered = copy.deepcopy(van_der_pol(LEVEL))
    TAMPERED[case](tampered)
    with pytest.raises((recheck.NotSo, recheck.Open, ValueError)):
        recheck.check(tampered, BOXES)


def ring(inner):
    """With V = x² + x v + v² the ring of the pushed spring begins at 4 d² = 0.16 (by hand)."""
    bound = f"P = [[1, 0.5], [0.5, 1]]\ninner = {inner}\nlevel = 2"
    text = gallery.toml(["x", "v"], ["v", "-x - v + d"], [(-3.0, 3.0)] * 2, bound=bound)
    return claimed(read_text(f"{text}\n[disturbance]\nd = [-0.2, 0.2]\n", "ring.toml"))


def test_rings(recheck):
    assert recheck.check(ring(0.17), 3000) < 3000
    for tampered in (ring(0.15), {**ring(0.17), "disturbance": {"d": ["-0.2", "0.21"]}}):
        with pytest.raises((recheck.NotSo, recheck.Open)):
            recheck.check(tampered, BOXES)


def test_exit_codes(tmp_path):
    def run(document, *options):
        (tmp_path / "verdict.json").write_text(json.dumps(document), encoding="utf-8")
        done = subprocess.run(
            [sys.executable, "-P", str(SCRIPT), str(tmp_path), *options], capture_output=True, text=True, timeout=120
        )
        assert done.stderr == ""
        return done.returncode, done.stdout

    good = {"certificate": van_der_pol(0.5)}
    code, text = run(good)
    assert (code, "Checked with" in text) == (0, True)
    assert run(good, "--boxes", "3")[0] == 3
    assert run({"certificate": van_der_pol(8.0)})[0] == 1
    assert run({"certificate": None})[0] == 1
    assert run({"certificate": {"states": ["x"]}})[0] == 1


def test_shares_nothing_with_the_tool():
    imported = set()
    for node in ast.walk(ast.parse(SCRIPT.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            imported |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            imported.add(node.module.split(".")[0])
    assert imported - set(sys.stdlib_module_names) == {"mpmath"}


@pytest.mark.long
@pytest.mark.parametrize("name", ["mast", "van_der_pol"])
def test_shipped_loops(recheck, name, tmp_path):
    from roa.cli import main

    config = Path(__file__).parents[2] / "configs" / f"{name}.toml"
    assert main(["bound", str(config), "--out", str(tmp_path / "run"), "--quiet"]) == 0
    found = json.loads((tmp_path / "run" / "verdict.json").read_text(encoding="utf-8"))["certificate"]
    assert recheck.check(found, 20_000) < 20_000
    raised = {**found, "level": (float.fromhex(found["level"]) * 1.01).hex()}
    with pytest.raises((recheck.NotSo, recheck.Open)):
        recheck.check(raised, 2000)


@pytest.mark.parametrize("wrong", ["absent", "empty", "no verdict", "boxes"])
def test_what_is_no_verdict_is_said_in_a_sentence(recheck, tmp_path, capsys, wrong):
    path = tmp_path / "verdict.json"
    if wrong != "absent":
        path.write_text({"empty": "", "no verdict": "[1, 2]", "boxes": "{}"}[wrong], encoding="utf-8")
    more = ["--boxes", "many"] if wrong == "boxes" else []
    assert recheck.main([str(tmp_path), *more]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err.count("\n") == 1
    assert "give the folder of a run" in printed.err
