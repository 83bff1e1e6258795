"""Who may import whom. The data's way through the house runs one way; a wall broken is named with its line."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
COMMON = {"runner.errors", "runner.arrays", "runner.shipped", "runner.versions"}

# room: what it may import of the house, besides itself
MAY_IMPORT = {
    "drivers": set(),
    "mock_instruments": set(),
    "runner.plan": COMMON,
    "runner.record": COMMON | {"runner.plan"},
    "runner.extraction": COMMON | {"runner.plan", "runner.record"},
    "runner.report": COMMON | {"runner.plan", "runner.record"},
    "runner.sweep": COMMON | {"runner.plan", "runner.record", "drivers", "mock_instruments"},
    "runner.commands": COMMON
    | {
        "runner.plan",
        "runner.record",
        "runner.extraction",
        "runner.report",
        "runner.sweep",
        "mock_instruments",
    },
}


def house_imports(path: Path) -> list[tuple[int, str]]:
    """Line and dotted name of every import of a room of ours, wherever it stands in the file."""
    found = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        names = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            names = [f"{node.module}.{alias.name}" for alias in node.names]
        found += [
            (node.lineno, name)
            for name in names
            if name.split(".")[0] in ("runner", "drivers", "mock_instruments")
        ]
    return found


def room_of(dotted: str) -> str:
    parts = dotted.split(".")
    return parts[0] if parts[0] != "runner" else ".".join(parts[:2])


@pytest.mark.parametrize("room", sorted(MAY_IMPORT))
def test_a_room_imports_only_what_the_design_allows(room):
    folder = ROOT / room.replace(".", "/")
    files = sorted(folder.rglob("*.py"))
    assert files, f"{room} has no files"
    broken = [
        f"{path.relative_to(ROOT)}:{line}: {room} may not import {name}"
        for path in files
        for line, name in house_imports(path)
        if room_of(name) not in MAY_IMPORT[room] | {room}
    ]
    assert not broken, "\n".join(broken)


@pytest.mark.parametrize("room", sorted(MAY_IMPORT))
def test_other_rooms_come_in_by_the_door(room):
    """From outside, names are imported from the front door of a room and not from the files behind it."""
    behind = [
        f"{path.relative_to(ROOT)}:{line}: {name} stands behind the door of {room}"
        for other in MAY_IMPORT
        if other != room
        for path in sorted((ROOT / other.replace(".", "/")).rglob("*.py"))
        for line, name in house_imports(path)
        if room_of(name) == room and len(name.split(".")) > len(room.split(".")) + 1
    ]
    assert not behind, "\n".join(behind)


def test_the_wall_reader_sees_a_broken_wall(tmp_path):
    source = tmp_path / "late.py"
    source.write_text("def f():\n    from runner.sweep import carry_out\n    import drivers\n")
    assert house_imports(source) == [(2, "runner.sweep.carry_out"), (3, "drivers")]


def test_the_top_level_holds_no_other_folders():
    tracked = {
        path.name
        for path in ROOT.iterdir()
        if path.is_dir() and not path.name.startswith(".") and path.name != "__pycache__"
    }
    assert tracked - {"runs", "build", "dist"} == {"runner", "drivers", "plans", "tests", "mock_instruments"}


def test_tests_are_no_packages():
    """A folder `tests/runner` with an `__init__.py` could pass for `runner` on the import path."""
    assert not list((ROOT / "tests").rglob("__init__.py"))
