"""Contract: a floor of the package imports only the floors below it."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "converter_calc"
FLOORS = {
    "basis": 0,
    "data": 1,
    "thermo": 2,
    "laws": 2,
    "balance": 3,
    "tapping": 4,
    "planning": 5,
    "metallurgy": 6,
    "heatlog": 6,
    "learning": 7,
    "register": 7,
    "reporting": 8,
    "page": 9,
    "commands": 10,
    "cli": 11,
    "__main__": 12,
    "__init__": 12,
}
MODULES = sorted(PACKAGE.rglob("*.py"))


def floor_of(module: str) -> int:
    parts = module.split(".")
    return FLOORS[parts[1]] if len(parts) > 1 else FLOORS["__init__"]


def imports(path: Path) -> list[str]:
    names = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names.append(node.module or "")
            names += [f"{node.module}.{alias.name}" for alias in node.names]
    return [name for name in names if name.split(".")[0] == "converter_calc" and "." in name]


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_no_upward_import(path: Path) -> None:
    first = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
    for name in imports(path):
        room = name.split(".")[1]
        if room in FLOORS:
            assert floor_of(name) <= FLOORS[first], f"{path} imports {name}"
            same_floor = FLOORS[room] == FLOORS[first] and room != first
            assert not same_floor, f"{path} imports its neighbour {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_no_wildcard_import(path: Path) -> None:
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            assert all(alias.name != "*" for alias in node.names), path


def test_modules_are_readable_in_one_sitting() -> None:
    long = {str(p): n for p in MODULES if (n := len(p.read_text("utf-8").splitlines())) > 500}
    assert not long
