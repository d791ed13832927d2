"""Files are data: no module unpickles, evaluates, imports by a path from a file, or asks a shell."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
MODULES = sorted([*(ROOT / "slicer").rglob("*.py"), *(ROOT / "cli").rglob("*.py")])
FORBIDDEN_IMPORTS = {"pickle", "marshal", "shelve", "dill", "cloudpickle", "lxml", "xml.sax", "xml.dom"}
FORBIDDEN_CALLS = {"eval", "exec", "compile", "__import__"}


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(ROOT)))
def test_no_module_runs_what_a_file_says(path: Path) -> None:
    """XML goes through ElementTree, arrays load without pickles, programs start without a shell."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            assert not FORBIDDEN_IMPORTS & {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.module not in FORBIDDEN_IMPORTS
        elif isinstance(node, ast.Call):
            called = node.func.id if isinstance(node.func, ast.Name) else getattr(node.func, "attr", "")
            assert not (isinstance(node.func, ast.Name) and called in FORBIDDEN_CALLS), node.lineno
            given = {k.arg: k.value for k in node.keywords}
            assert not ("shell" in given and getattr(given["shell"], "value", True)), node.lineno
            if called == "load" and isinstance(node.func, ast.Attribute) and getattr(node.func.value, "id", "") == "np":
                assert getattr(given.get("allow_pickle"), "value", True) is False, node.lineno
