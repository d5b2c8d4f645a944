"""The pendulum with friction and its energy: proved by invariance below its saddles, never above, never as strict."""

import json

import pytest

import gallery
from roa.cli import main


@pytest.mark.parametrize(("level", "code", "result"), [(1.99, 0, "proved"), (2.01, 3, "not_settled")])
def test_energy_of_the_pendulum(tmp_path, capsys, level, code, result):
    config = tmp_path / "pendulum.toml"
    bound = f'V = "0.5*w**2 + 1 - cos(a)"\nlevel = {level}'
    loop = ["a", "w"], ["w", "-sin(a) - 0.3*w"], [(-3.2, 3.2), (-3.0, 3.0)]
    config.write_text(gallery.toml(*loop, bound=bound), encoding="utf-8")
    found = main(["validate", str(config), "--out", str(tmp_path / "run"), "--quiet", "--json"])
    claim = json.loads(capsys.readouterr().out)["claim"]
    assert (found, claim["result"], claim["decrease"]) == (code, result, "undecided")
    assert ("invariance principle" in claim["reason"]) == (result == "proved")
