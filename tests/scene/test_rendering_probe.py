"""The probe: what it says when the machine cannot draw, and that it never loads the library itself."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from planum.scene.environment import has_screen, prepare_environment
from planum.scene.probe import rendering_problem


def script(code: str) -> list[str]:
    return [sys.executable, "-c", code]


def test_a_signal_names_the_packages() -> None:
    """VTK without its libraries ends by a segmentation fault."""
    problem = rendering_problem(command=script("import os, signal; os.kill(os.getpid(), signal.SIGSEGV)"))
    assert problem is not None
    assert "SIGSEGV" in problem.came
    assert "apt install libegl1 libgl1-mesa-dri libexpat1" in problem.do


@pytest.mark.parametrize(
    ("library", "package"),
    [("libEGL.so.1", "libegl1"), ("libGL.so.1", "libgl1"), ("libexpat.so.1", "libexpat1"), ("libSM.so.6", "libsm6")],
)
def test_a_library_the_loader_misses_names_its_package(library: str, package: str) -> None:
    message = f"ImportError: {library}: cannot open shared object file: No such file or directory"
    problem = rendering_problem(command=script(f"import sys; sys.exit({message!r})"))
    assert problem is not None
    assert library in problem.came
    assert f"apt install {package}" in problem.do
    assert "\n" not in str(problem)


def test_a_process_that_hangs_is_ended_and_told() -> None:
    problem = rendering_problem(command=script("import time; time.sleep(60)"), timeout_s=0.5)
    assert problem is not None
    assert "no picture after 0.5 s" in problem.came


def test_a_process_that_draws_nothing_or_cannot_start_is_a_problem(tmp_path: Path) -> None:
    silent = rendering_problem(command=script(""))
    assert silent is not None
    assert "without drawing" in silent.came
    absent = rendering_problem(command=[str(tmp_path / "no-python")])
    assert absent is not None
    assert "cannot be started" in absent.came


def test_a_missing_pyvista_is_named() -> None:
    problem = rendering_problem(command=script("raise ModuleNotFoundError(\"No module named 'pyvista'\")"))
    assert problem is not None
    assert problem.do == "install it with: pip install pyvista"


@pytest.mark.usefixtures("_drawing")
def test_a_machine_that_draws_has_no_problem() -> None:
    assert rendering_problem() is None


@pytest.mark.parametrize(
    "use",
    [
        "from planum.scene.probe import rendering_problem; rendering_problem(command=['/nowhere'])",
        "from planum.scene.picture import render_safely; render_safely(sys.executable, 'b.png', command=['/nowhere'])",
    ],
)
def test_asking_does_not_load_the_drawing_library(use: str) -> None:
    """A run must outlive a machine where the library cannot even be loaded."""
    code = (
        f"import sys; {use};sys.exit(any(m.split('.')[0] in {{'pyvista', 'vtkmodules', 'vtk'}} for m in sys.modules))"
    )
    assert subprocess.run(script(code), check=False).returncode == 0


def test_without_a_screen_drawing_goes_through_egl(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "platform", "linux")
    blind: dict[str, str] = {}
    prepare_environment(blind)
    assert blind == {"VTK_DEFAULT_OPENGL_WINDOW": "vtkEGLRenderWindow"}
    chosen = {"VTK_DEFAULT_OPENGL_WINDOW": "vtkOSOpenGLRenderWindow"}
    prepare_environment(chosen)
    assert chosen["VTK_DEFAULT_OPENGL_WINDOW"] == "vtkOSOpenGLRenderWindow"
    seeing = {"DISPLAY": ":7"}
    prepare_environment(seeing)
    assert seeing == {"DISPLAY": ":7"}
    assert not has_screen({})
    monkeypatch.setattr(sys, "platform", "darwin")
    assert has_screen({})
