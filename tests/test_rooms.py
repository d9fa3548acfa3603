"""The rooms: who may import whom, and which room alone may open which door."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

import sampler

ROOT = Path(sampler.__file__).parent
LEVELS = [["errors"], ["panel"], ["model"], ["uncertainty"], ["route", "optimise", "estimation"], ["tasks"],
          ["files", "figures", "report"], ["cli"]]
LEVEL = {room: level for level, rooms in enumerate(LEVELS) for room in rooms}
DOORS = {"shapely": {"panel"}, "cvxpy": {"optimise"}, "highspy": {"optimise"}, "matplotlib": {"figures"},
         "click": {"cli"}, "tomllib": {"files"}, "csv": {"files"}, "json": {"files"}, "pyarrow": {"files"},
         "jinja2": {"report"}, "ezdxf": {"files"}, "gdstk": {"files"}, "gerbonara": {"files"}}
BANNED_NAMES = {"utils", "misc", "helpers", "base", "common"}
MODULES = sorted(ROOT.rglob("*.py"))


def room_of(path: Path) -> str:
    return path.relative_to(ROOT).parts[0].removesuffix(".py")


def imports(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_imports_go_down(path):
    room = room_of(path)
    if room in ("__init__", "__main__"):
        return
    assert room in LEVEL, f"{path}: a room that the design does not know"
    for name in imports(path):
        parts = name.split(".")
        if parts[0] != "sampler" or len(parts) == 1 or parts[1] not in LEVEL:
            continue
        assert parts[1] == room or LEVEL[parts[1]] < LEVEL[room], f"{path} imports {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_doors(path):
    for name in imports(path):
        package = name.split(".")[0]
        assert room_of(path) in DOORS.get(package, {room_of(path)}), f"{path} imports {name}"
    if room_of(path) != "files":
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            assert not (isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "open"), path


def test_optimise_sees_arrays_only():
    for path in (ROOT / "optimise").rglob("*.py"):
        assert not [name for name in imports(path) if name.startswith(("sampler.panel", "sampler.model"))], path


def test_witness_is_independent():
    """verify and estimation never use the optimiser or the information code."""
    for path in [ROOT / "tasks" / "verify.py", *(ROOT / "estimation").rglob("*.py")]:
        if path.exists():
            assert not [name for name in imports(path)
                        if name.startswith(("sampler.optimise", "sampler.uncertainty.information"))], path


def reached(path, seen):
    """Every file of the package that importing a file brings in."""
    for name in imports(path):
        parts = name.split(".")[1:]
        for end in range(1, len(parts) + 1):
            for found in (ROOT.joinpath(*parts[:end]).with_suffix(".py"), ROOT.joinpath(*parts[:end], "__init__.py")):
                if name.startswith("sampler.") and found.exists() and found not in seen:
                    seen.add(found)
                    reached(found, seen)
    return seen


def test_witness_reaches_nothing_of_the_search_either():
    """Not through what it imports: the optimiser and the information code stay out of its process."""
    found = {str(path.relative_to(ROOT)) for path in reached(ROOT / "tasks" / "verify.py", set())}
    assert "estimation/least_squares.py" in found
    assert not [name for name in found if name.startswith("optimise") or name == "uncertainty/information.py"], found
    assert "uncertainty/information.py" in {str(path.relative_to(ROOT)) for path in reached(ROOT / "tasks" / "plan.py", set())}


def test_no_room_for_everything():
    assert not BANNED_NAMES & {path.stem for path in MODULES} | BANNED_NAMES & {path.parent.name for path in MODULES}
