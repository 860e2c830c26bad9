"""The rooms: who may import whom, and what a reader may rely on in each module."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
MAY_IMPORT = {
    "sweeps": set(),
    "circuits": {"sweeps"},
    "runner": {"sweeps", "circuits", "reports"},
    "reports": {"sweeps"},
}
MODULES = [
    path
    for room in MAY_IMPORT
    for path in sorted((ROOT / room).rglob("*.py*"))
    if path.suffix in {".py", ".pyi"}
]


def imported(path: Path) -> Iterator[str]:
    """Every module that a file imports, anywhere in it."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            if node.level:
                package = path.relative_to(ROOT).parts[: -node.level]
                yield ".".join(("modepair", *package, node.module or ""))
            else:
                yield node.module or ""


def test_there_are_modules_to_check() -> None:
    assert {path.relative_to(ROOT).parts[0] for path in MODULES} == set(MAY_IMPORT)


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_room_imports_only_what_it_may(path: Path) -> None:
    room = path.relative_to(ROOT).parts[0]
    rooms = {name.split(".")[1] for name in imported(path) if name.startswith("modepair.")}
    assert rooms <= MAY_IMPORT[room] | {room}
    assert "tests" not in {name.split(".")[0] for name in imported(path)}


def test_pyspice_is_imported_in_two_modules_only() -> None:
    users = {
        str(path.relative_to(ROOT))
        for path in MODULES
        if any(name.split(".")[0] == "PySpice" for name in imported(path))
    }
    assert users == {"circuits/netlist.py", "runner/engine.py"}


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_module_says_what_it_is_about_and_stays_small(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    if path.suffix == ".py":
        assert ast.get_docstring(ast.parse(text)), "a module begins with a docstring"
    assert text.count("\n") <= 450
    assert not {"util", "utils", "helper", "helpers", "common", "misc", "manager"} & set(path.stem.split("_"))
