"""The house: a folder imports only from folders with smaller numbers, never from its equals."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "kspipe"
FLOORS = {
    "core": 0,
    "kernels": 1,
    "relations": 2,
    "conversions": 2,
    "maps": 2,
    "recipe": 3,
    "matching": 3,
    "simulate": 3,
    "comparison": 4,
    "stages": 5,
    "trials": 6,
    "products": 7,
    "api": 8,
    "cli": 9,
}
MODULES = sorted(p for p in PACKAGE.rglob("*.py") if p.parent != PACKAGE or p.stem == "api")
# Kernels see arrays, errors and constants only.
KERNELS_MAY_IMPORT = {"kspipe.core.errors", "kspipe.core.constants"}


def room_of(name: str) -> str:
    return name.split(".")[1] if "." in name else ""


def imports_of(path: Path) -> set[str]:
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module:
            names.add(node.module)
            names |= {f"{node.module}.{alias.name}" for alias in node.names}
        elif isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
    return names


def own(path: Path) -> str:
    relative = path.relative_to(PACKAGE)
    return relative.parts[0] if len(relative.parts) > 1 else relative.stem


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_go_down(path):
    room = own(path)
    for name in imports_of(path):
        other = room_of(name) if name.startswith("kspipe.") else ""
        if other in FLOORS and other != room:
            assert FLOORS[other] < FLOORS[room], f"{room} imports {name}"


@pytest.mark.parametrize("path", sorted((PACKAGE / "kernels").glob("*.py")), ids=lambda p: p.stem)
def test_kernels_see_arrays_only(path):
    for name in imports_of(path):
        if name.startswith(("kspipe.core",)):
            assert any(name.startswith(allowed) for allowed in KERNELS_MAY_IMPORT), name
        assert not name.startswith(("astropy", "logging", "pathlib", "reproject")), name


def test_every_folder_has_a_floor():
    folders = {p.name for p in PACKAGE.iterdir() if p.is_dir() and p.name != "__pycache__"}
    assert folders <= set(FLOORS)


def test_top_level_is_as_promised():
    root = PACKAGE.parent
    visible = {p.name for p in root.iterdir() if not p.name.startswith(".")}
    promised = {"pyproject.toml", "README.md", "DEVELOPERS.md", "kspipe", "tests", "recipes"}
    made = {"demo_run", "build", "dist"}
    assert visible - made == promised | {"demo_maps"}
