"""A night's list: detached, one broken configuration among it, the summary and the exit code of the morning."""

import shutil
import subprocess
import sys
import time
from pathlib import Path

import gallery

CLONE = Path(__file__).parents[2]


def test_detached_night(tmp_path):
    scripts = tmp_path / "clone" / "scripts"
    scripts.mkdir(parents=True)
    shutil.copy(CLONE / "scripts" / "overnight", scripts)
    # In place of the one that sets an environment up; and a night of sweeps alone, since figures take longest.
    (scripts / "roa").write_text(
        f'#!/bin/sh\nif [ "$1" = run ]; then shift; set -- sweep "$@"; fi\n'
        f'PYTHONPATH="{CLONE}" exec "{sys.executable}" -m roa "$@"\n'
    )
    (scripts / "roa").chmod(0o755)
    (tmp_path / "good.toml").write_text(gallery.van_der_pol(sweep="samples = 1024").text)
    (tmp_path / "broken.toml").write_text("[sweep]\nsamplse = 1\n")
    night = tmp_path / "a night"
    files = [str(tmp_path / name) for name in ("broken.toml", "good.toml")]
    begun = subprocess.run(
        [str(scripts / "overnight"), "--out", str(night), *files], capture_output=True, text=True, timeout=60
    )
    assert (begun.returncode, begun.stderr) == (0, "")
    assert "works through 2 configurations" in begun.stdout
    assert not (night / "exit_code").exists()
    for _ in range(2400):
        if (night / "exit_code").exists():
            break
        time.sleep(0.1)
    # The night goes on behind what fails, and says so in the morning.
    summary = (night / "summary.txt").read_text()
    assert (night / "exit_code").read_text() == "2\n", summary
    assert "broken: exit code 2" in summary
    assert 'did you mean "samples"' in summary
    assert "good: exit code 0" in summary
    assert (night / "good" / "sweep.h5").exists()
