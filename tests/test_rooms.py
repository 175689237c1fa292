"""The rooms of the house, read from the code itself: who may know whom, where time is kept, what ships."""

import ast
import re
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
ROOMS = ("analysis", "bench", "drivers", "simulated_instruments")
MODULES = [path.relative_to(ROOT) for room in ROOMS for path in sorted((ROOT / room).rglob("*.py"))]

# room: prefixes of ours it may import besides itself
MAY_KNOW = {
    "analysis": (),
    "drivers": (),
    "simulated_instruments": ("bandproof.analysis.network",),
    "bench": ("bandproof.analysis", "bandproof.drivers"),
}
KNOWS_SIMULATOR = Path("bench/verbs/rehearse.py")
KEEPS_TIME = {Path("drivers/clock.py"), Path("drivers/link.py"), Path("simulated_instruments/timebase.py")}
NEVER_AT_RUN_TIME = ("scipy.stats", "scipy.signal", "matplotlib.pyplot", "pylab")  # 0.7 s of start-up each, measured


def imports(path):
    """Return every module a file imports, inside functions too."""
    tree = ast.parse((ROOT / path).read_text(encoding="utf-8"))
    found = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}:{node.lineno}: imports are absolute"
            found |= {node.module, *(f"{node.module}.{alias.name}" for alias in node.names)}
    return found


def within(name, prefix):
    return name == prefix or name.startswith(prefix + ".")


@pytest.mark.parametrize("path", MODULES, ids=str)
def test_a_room_imports_only_the_rooms_it_may_know(path):
    room = path.parts[0]
    allowed = [f"bandproof.{room}", *MAY_KNOW[room]]
    if path == KNOWS_SIMULATOR:
        allowed.append("bandproof.simulated_instruments")
    ours = {name for name in imports(path) if within(name, "bandproof") and name != "bandproof"}
    strangers = sorted(name for name in ours if not any(within(name, prefix) for prefix in allowed))
    assert not strangers


@pytest.mark.parametrize("path", MODULES, ids=str)
def test_time_is_kept_in_three_places(path):
    keeps = imports(path) & {"time"}
    assert not keeps or path in KEEPS_TIME


@pytest.mark.parametrize("path", MODULES, ids=str)
def test_slow_libraries_are_never_imported(path):
    assert not [name for name in imports(path) for slow in NEVER_AT_RUN_TIME if within(name, slow)]


@pytest.mark.parametrize("path", [p for p in MODULES if p.parts[0] == "analysis"], ids=str)
def test_analysis_touches_no_file_and_prints_nothing(path):
    assert not imports(path) & {"os", "pathlib", "io", "logging", "sys"}
    assert not re.search(r"^\s*print\(|\bopen\(", (ROOT / path).read_text(encoding="utf-8"), re.MULTILINE)


def test_every_package_is_listed_for_the_wheel():
    """An unlisted sub-package goes missing from the wheel without a word."""
    import tomllib

    listed = set(tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["packages"])
    there = {".".join(("bandproof", *path.parent.parts)) for path in MODULES if path.name == "__init__.py"}
    assert listed == there


def test_top_level_folders_are_the_rooms_and_nothing_else():
    tracked = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    if tracked.returncode:
        pytest.skip("not a git checkout")
    folders = {line.split("/")[0] for line in tracked.stdout.splitlines() if "/" in line}
    assert folders <= {*ROOMS, "tests", ".ci"}
