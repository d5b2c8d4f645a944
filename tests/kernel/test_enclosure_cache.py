"""The compiled interpreter is found again by the next process, and never after its sources have changed."""

import os
import subprocess
import sys
import types

from roa.kernel import machine_code


def twice(x):
    return 2 * x


def test_changed_sources_have_another_folder(tmp_path, monkeypatch):
    monkeypatch.setenv("ROA_CACHE_DIR", str(tmp_path))
    folders = {machine_code._folder_of(texts) for texts in (["a", "b"], ["a", "c"], ["ab", ""])}
    assert len(folders) == 3
    assert machine_code._folder_of(["a", "b"]) in folders


def test_compiled_code_is_kept_in_the_folder_of_its_sources(tmp_path, monkeypatch):
    monkeypatch.setenv("ROA_CACHE_DIR", str(tmp_path))
    module = types.ModuleType("used")
    module.__file__ = str(tmp_path / "used.py")
    (tmp_path / "used.py").write_text("FACTOR = 2\n")
    assert machine_code.compiled(twice, uses=(module,))(4) == 8
    assert len(list(tmp_path.rglob("*.nbc"))) == 1


def test_a_folder_that_cannot_be_made_costs_only_time(tmp_path, monkeypatch):
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("ROA_CACHE_DIR", str(tmp_path / "file" / "below"))
    assert machine_code.compiled(twice, uses=())(4) == 8


def test_second_process_does_not_compile_again():
    script = (
        "import numpy as np\n"
        "from roa.kernel import enclosure\n"
        "from roa.kernel.tape import Tape\n"
        "enclosure.enclose(Tape(2).program([0]), np.zeros((1, 2)), np.ones((1, 2)), 2)\n"
        "stats = enclosure._interpret.stats\n"
        "print(sum(stats.cache_hits.values()), sum(stats.cache_misses.values()))\n"
    )
    for _ in range(2):  # the first may have to compile
        run = subprocess.run(
            [sys.executable, "-c", script], capture_output=True, text=True, check=True, env=os.environ, timeout=300
        )
    assert run.stdout.split() == ["1", "0"]
