"""Can this machine draw? Asked of a second process, because VTK dies with a signal where libraries are missing."""

from __future__ import annotations

import functools
import os
import signal
import subprocess
import sys
from collections.abc import Sequence

from planum.errors import Problem
from planum.scene.environment import has_screen, prepare_environment

__all__ = ["drawing_failure", "rendering_problem", "run_drawing"]

TIMEOUT_S = 120.0
"""A first import and a software render take seconds on a slow disk; two minutes mean it hangs."""

_DONE = "planum drew"
_PROBE = f"""
import pyvista
plotter = pyvista.Plotter(off_screen=True, window_size=(64, 48))
plotter.add_mesh(pyvista.Sphere(), color="black")
image = plotter.screenshot(return_img=True)
assert image.std() > 1, "the picture is blank"
print("{_DONE}")
"""

_PACKAGES = {
    "libEGL": "libegl1",
    "libGL.": "libgl1",
    "libOpenGL": "libopengl0",
    "libexpat": "libexpat1",
    "libX11": "libx11-6",
    "libXrender": "libxrender1",
    "libXcursor": "libxcursor1",
    "libSM": "libsm6",
    "libICE": "libice6",
}
"""Shared library named by the loader, and the Debian package that holds it."""
_ALL = "libegl1 libgl1-mesa-dri libexpat1"


def rendering_problem(*, command: Sequence[str] | None = None, timeout_s: float = TIMEOUT_S) -> Problem | None:
    """Return what keeps this machine from drawing, or None when a small picture came out.

    Parameters
    ----------
    command
        The command that draws and says so, by default this interpreter with a tiny picture. The answer for the
        default is remembered for the rest of the process.
    timeout_s
        Seconds after which the command counts as hanging.

    Returns
    -------
    Problem or None
        One sentence with the Debian package to install.
    """
    return _default_probe(timeout_s) if command is None else _probe(tuple(command), timeout_s)


@functools.cache
def _default_probe(timeout_s: float) -> Problem | None:
    return _probe((sys.executable, "-c", _PROBE), timeout_s)


def _probe(command: tuple[str, ...], timeout_s: float) -> Problem | None:
    done = run_drawing(command, timeout_s=timeout_s)
    if isinstance(done, Problem):
        return done
    return None if _DONE in done else drawing_failure(0, "the drawing command ended without drawing")


def run_drawing(command: Sequence[str], *, text: str = "", timeout_s: float = TIMEOUT_S) -> str | Problem:
    """Run a command that draws, away from this process; return what it wrote or the problem it met.

    Parameters
    ----------
    command
        Program and arguments; no shell is involved.
    text
        Standard input of the command.
    timeout_s
        Seconds after which it is ended.
    """
    environ = dict(os.environ)
    prepare_environment(environ)
    try:
        done = subprocess.run(  # noqa: S603 - our own interpreter, arguments as a list
            list(command),
            input=text,
            capture_output=True,
            text=True,
            errors="replace",
            timeout=timeout_s,
            check=False,
            env=environ,
        )
    except subprocess.TimeoutExpired:
        return drawing_failure(None, f"no picture after {timeout_s:g} s")
    except OSError as error:
        return drawing_failure(None, f"{command[0]} cannot be started ({error.strerror or error})")
    if done.returncode == 0:
        return done.stdout
    return drawing_failure(done.returncode, done.stderr)


def drawing_failure(code: int | None, stderr: str) -> Problem:
    """Return the one sentence for a drawing process that failed.

    Parameters
    ----------
    code
        Its return code, negative or above 128 for a signal (POSIX and shell custom); None when it never ended.
    stderr
        What it said; a library named there is looked up.
    """
    said = [row.strip() for row in stderr.splitlines() if row.strip()]
    last = said[-1] if said else "no message"
    number = -code if code is not None and code < 0 else (code or 0) - 128
    if number > 0:
        try:
            last = f"the drawing library ended by {signal.Signals(number).name}"
        except ValueError:
            last = f"the drawing process ended with code {code}"
    if any("ModuleNotFoundError" in row for row in said):
        return Problem(came=f"nothing can be drawn: {last}", do="install it with: pip install pyvista", key="pyvista")
    named = [package for library, package in _PACKAGES.items() if library in stderr]
    packages = " ".join(dict.fromkeys(named)) if named else _ALL
    if has_screen():
        do = f"on Debian: apt install {packages}; where the screen itself fails, run without DISPLAY or under xvfb-run"
    else:
        do = f"on Debian: apt install {packages} (for windows also xvfb, or a screen)"
    return Problem(came=f"nothing can be drawn: {last}", do=do, key="rendering")
