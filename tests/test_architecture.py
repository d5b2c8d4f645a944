"""The order of the rooms, who may import what, how fast the front door opens, and what no file may name."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

PROJECT = Path(__file__).parents[1]
PACKAGE = PROJECT / "roa"

ROOMS = ("loop", "kernel", "bound", "sweep", "basin", "report")
"""In the order in which the data flows; a room imports from itself and from those before it."""

FREE = {"roa.errors", "roa.__version__"}
"""What every room may import."""

OWNERS = {
    "numba": ("roa/kernel/",),
    "llvmlite": ("roa/kernel/",),
    "sympy": ("roa/loop/",),
    "h5py": ("roa/sweep/store.py",),
    "joblib": ("roa/sweep/executors/threads.py", "roa/sweep/executors/processes.py"),
    "dask": ("roa/sweep/executors/cluster.py",),
    "distributed": ("roa/sweep/executors/cluster.py",),
    "rich": ("roa/sweep/progress.py", "roa/report/"),
    "matplotlib": ("roa/report/",),
}
"""The only places where a package may be imported."""

HEAVY = ("numba", "h5py", "matplotlib", "scipy", "sympy", "pydantic", "numpy", "joblib", "rich", "jinja2")
"""What `roa --help` and `import roa` must not wait for."""

SAYS_NOTHING = {"util", "utils", "helper", "helpers", "misc", "manager", "core", "common"}


def sources() -> list[Path]:
    found = sorted(PACKAGE.rglob("*.py"))
    assert len(found) > len(ROOMS), "the package was not found"
    return found


def name_of(path: Path) -> str:
    """The dotted name, or that of the folder for __init__.py."""
    parts = path.relative_to(PROJECT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imports(path: Path) -> Iterator[str]:
    """Every module that a file imports, wherever in the file; for `from a import b`, both a and a.b."""
    package = name_of(path).split(".")
    if path.name != "__init__.py":
        package.pop()
    for node in ast.walk(ast.parse(path.read_bytes())):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            above = package[: len(package) + 1 - node.level] if node.level else []
            module = ".".join([*above, *([node.module] if node.module else [])])
            yield module
            yield from (f"{module}.{alias.name}" for alias in node.names)


def room_of(name: str) -> str | None:
    parts = name.split(".")
    return parts[1] if len(parts) > 1 and parts[0] == "roa" and parts[1] in ROOMS else None


def test_a_room_imports_only_from_rooms_above_it() -> None:
    faults = []
    for path in sources():
        room = room_of(name_of(path))
        if room is None:
            continue  # the front: it may open every room
        for name in imports(path):
            other = room_of(name)
            if other and ROOMS.index(other) > ROOMS.index(room):
                faults.append(f"{path.relative_to(PROJECT)} imports {name}, from a room below")
            elif not other and name.startswith("roa.") and ".".join(name.split(".")[:2]) not in FREE:
                faults.append(f"{path.relative_to(PROJECT)} imports {name}, from the front")
    assert faults == []


def test_every_folder_of_the_package_is_a_room() -> None:
    folders = {path.parent.name for path in PACKAGE.glob("*/__init__.py")}
    assert folders == set(ROOMS)


def test_the_errors_stand_alone() -> None:
    assert [name for name in imports(PACKAGE / "errors.py") if name.split(".")[0] == "roa"] == []


def test_a_package_is_imported_only_by_its_owner() -> None:
    faults = [
        f"{path.relative_to(PROJECT)} imports {name}"
        for path in sources()
        for name in imports(path)
        if (owners := OWNERS.get(name.split(".")[0])) and not path.relative_to(PROJECT).as_posix().startswith(owners)
    ]
    assert faults == []


def test_the_checks_see_imports_of_every_form(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(globals(), "PROJECT", tmp_path)
    file = tmp_path / "roa" / "loop" / "read.py"
    file.parent.mkdir(parents=True)
    file.write_text("import h5py.h5f as h\ndef f():\n    from roa import basin\n    from ..sweep import store\n")
    assert set(imports(file)) == {"h5py.h5f", "roa", "roa.basin", "roa.sweep", "roa.sweep.store"}


def test_no_module_has_a_name_that_says_nothing() -> None:
    files = [*sources(), *(PROJECT / "scripts").iterdir(), *(PROJECT / "tests").rglob("*.py")]
    assert [path for path in files if path.stem in SAYS_NOTHING or path.parent.name in SAYS_NOTHING] == []


@pytest.mark.parametrize("entry", ["import roa", "from roa.cli import main; sys.argv = ['roa', '--help']; main()"])
def test_the_front_door_imports_nothing_heavy(entry: str) -> None:
    program = f"""
import atexit, sys
atexit.register(lambda: print("heavy:", *sorted(set({HEAVY!r}) & set(sys.modules))))
{entry}
"""
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, timeout=60)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.splitlines()[-1] == "heavy:"


FOLDERS = (".ci", "configs", "results/reference", "roa", "scripts", "tests")
TEXT = {"", ".css", ".csv", ".html", ".jinja", ".json", ".md", ".py", ".svg", ".toml"}


def project_texts() -> Iterator[Path]:
    """The texts that are ours; git is not asked, since it may be absent where the tests run."""
    yield from (PROJECT / name for name in (".gitignore", "pyproject.toml"))
    yield from PROJECT.glob("*.md")
    for folder in FOLDERS:
        for path in (PROJECT / folder).rglob("*"):
            if path.is_file() and path.suffix in TEXT and "__pycache__" not in path.parts:
                yield path


def test_no_file_names_a_place_of_one_machine() -> None:
    places = ["/" + folder + "/" for folder in ("work", "root", "home", "Users")]
    hosts = ["pypi" + ".org", "pythonhosted" + ".org", "anaconda" + ".org", "proxy.golang" + ".org"]
    texts = {path: path.read_text(encoding="utf-8") for path in project_texts()}
    assert PROJECT / "scripts" / "set_up" in texts
    assert [f"{path}: {word}" for path, text in texts.items() for word in places + hosts if word in text] == []
