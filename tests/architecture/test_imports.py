"""Imports: the drawing library stays in scene and viewer; modules import modules, never a package's face."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
SOURCES = {"planum": ROOT / "slicer" / "planum", "planum_cli": ROOT / "cli" / "planum_cli"}
DRAWING = {"pyvista", "vtk", "vtkmodules", "pyvistaqt", "trame"}
MAY_DRAW = ("planum.scene", "planum.viewer")

FACTS = {"__version__", "__file__", "__path__"}
"""What a package itself may be asked: no code of a sibling runs for it."""

Found = tuple[str, int, str, str]
"""Importing module, line, module named, name taken from it ("" for a plain import)."""


def module_files() -> Iterator[tuple[str, Path]]:
    for root, folder in SOURCES.items():
        for path in sorted(folder.rglob("*.py")):
            parts = [root, *path.relative_to(folder).with_suffix("").parts]
            yield ".".join(parts[:-1] if parts[-1] == "__init__" else parts), path


def imports_in(module: str, text: str, *, package: bool = False) -> Iterator[Found]:
    """Yield every import of a module, inside functions and under TYPE_CHECKING too, relative ones made absolute."""
    tree = ast.parse(text)
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                for taken in used_of(tree, alias) or [""]:
                    yield module, node.lineno, alias.name, taken
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                here = module.split(".")
                up = here[: len(here) - node.level + (1 if package else 0)]
                base = ".".join([*up, *([base] if base else [])])
            for alias in node.names:
                yield module, node.lineno, base, alias.name


def used_of(tree: ast.AST, alias: ast.alias) -> list[str]:
    """Return what a module takes from a name bound by a plain import without dots, as ``name.this``."""
    bound = alias.asname or alias.name
    reads = (node for node in ast.walk(tree) if isinstance(node, ast.Attribute))
    return sorted({node.attr for node in reads if isinstance(node.value, ast.Name) and node.value.id == bound})


def all_imports() -> list[Found]:
    found: list[Found] = []
    for module, path in module_files():
        found += imports_in(module, path.read_text(encoding="utf-8"), package=path.name == "__init__.py")
    return found


def draws_outside(found: Iterator[Found] | list[Found]) -> list[str]:
    return [
        f"{module} line {line} imports {name}"
        for module, line, name, _ in found
        if name.split(".")[0] in DRAWING and not module.startswith(MAY_DRAW)
    ]


def through_a_face(found: Iterator[Found] | list[Found], modules: set[str], packages: set[str]) -> list[str]:
    """Return imports that take from a package what is not one of its modules."""
    wrong = []
    for module, line, name, taken in found:
        if name in packages and taken in FACTS:
            continue
        if name in packages and taken and f"{name}.{taken}" not in modules:
            wrong.append(f"{module} line {line}: from {name} import {taken}")
        elif name in packages and not taken:
            wrong.append(f"{module} line {line}: import {name}")
    return wrong


def known_modules() -> tuple[set[str], set[str]]:
    files = list(module_files())
    return {name for name, _ in files}, {name for name, path in files if path.name == "__init__.py"}


def test_only_scene_and_viewer_draw() -> None:
    """Everything else runs where no drawing library works."""
    assert draws_outside(all_imports()) == []
    assert any(name == "pyvista" for _, _, name, _ in all_imports())  # the test sees them at all


def test_modules_import_modules() -> None:
    """An import through a package's face ties a module to all its siblings: the usual source of import cycles."""
    modules, packages = known_modules()
    assert {"planum", "planum.scene", "planum.lines"} <= packages
    assert through_a_face(all_imports(), modules, packages) == []


def test_packages_hold_no_code_that_imports() -> None:
    """Only the root package may name things, for users, when asked."""
    inits = [(name, path) for name, path in module_files() if path.name == "__init__.py"]
    wrong = [
        name
        for name, path in inits
        if name != "planum"
        and [f for f in imports_in(name, path.read_text(encoding="utf-8"), package=True) if f[2] != "__future__"]
    ]
    assert wrong == []


@pytest.mark.parametrize(
    ("text", "caught"),
    [
        ("from planum.lines import Recording", True),
        ("from planum.lines import *", True),
        ("import planum.lines", True),
        ("def f():\n    from . import Recording", True),
        ("import planum\nplanum.read_survey", True),
        ("import planum\nplanum.__version__", False),
        ("from planum import __version__", False),
        ("from planum.lines import segy", False),
        ("from . import segy", False),
        ("from planum.lines.recording import Recording", False),
        ("import planum.lines.segy", False),
    ],
)
def test_the_rule_catches_what_it_should(text: str, caught: bool) -> None:
    modules = {"planum", "planum.lines", "planum.lines.segy", "planum.lines.recording"}
    found = list(imports_in("planum.lines.other", text))
    assert bool(through_a_face(found, modules, {"planum", "planum.lines"})) is caught


@pytest.mark.parametrize("text", ["import pyvista as pv", "def f():\n    from vtkmodules.all import vtkActor"])
def test_drawing_elsewhere_is_caught(text: str) -> None:
    assert draws_outside(imports_in("planum.outputs.report", text))
    assert not draws_outside(imports_in("planum.scene.build", text))
