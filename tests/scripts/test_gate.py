"""The release gate of three lines: green, red, not settled, and no answer at all."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

import gallery

GATE = Path(__file__).parents[2] / "scripts" / "gate"


def test_three_lines():
    assert len(GATE.read_text(encoding="utf-8").splitlines()) == 3


@pytest.mark.parametrize(("level", "code", "light"), [
    (2.25, 0, "green"),  # drawn by Khalil (from memory), below the contact level 2.304478
    (7.0, 1, "red"),  # beyond the limit cycle
    (20.0, 3, "not settled"),  # leaves the domain
    (-1.0, 2, "no answer"),
])  # fmt: skip
def test_light(tmp_path, level, code, light):
    config = tmp_path / "loop.toml"
    config.write_text(gallery.van_der_pol(bound="level = 1").text.replace("level = 1", f"level = {level}"))
    roa = tmp_path / "roa"
    roa.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m roa "$@"\n')
    roa.chmod(0o755)
    environment = os.environ | {
        "PATH": f"{tmp_path}{os.pathsep}{os.environ['PATH']}",
        "PYTHONPATH": str(GATE.parents[1]),
    }
    done = subprocess.run(
        ["sh", str(GATE), str(config), "--out", str(tmp_path / "run")],
        capture_output=True, text=True, env=environment, timeout=300,
    )  # fmt: skip
    assert (done.returncode, done.stdout.splitlines()[-1].split(":")[0]) == (code, light)
