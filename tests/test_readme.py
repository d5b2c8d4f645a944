"""The README shows what its commands gave: the stored summary and picture, word for word."""

import re
from pathlib import Path

ROOT = Path(__file__).parents[1]


def test_summary_in_the_readme_is_the_stored_one():
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    (shown,) = re.findall(r"```text\n(.*?)```", readme, flags=re.DOTALL)
    stored = (ROOT / "results" / "reference" / "mast" / "summary.txt").read_text(encoding="utf-8")
    assert stored.startswith(shown.rstrip("\n"))


def test_files_that_the_readme_names_exist():
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    named = re.findall(r"\]\(([^)#]+)\)", readme) + re.findall(r"(?:scripts|configs)/[a-z_]+(?:\.[a-z]+)?", readme)
    assert len(named) > 5
    for name in named:
        assert (ROOT / name).exists(), name
