"""What VTK must find in the environment before it draws for the first time."""

from __future__ import annotations

import os
import sys
from collections.abc import Mapping, MutableMapping

__all__ = ["has_screen", "prepare_environment"]

_WINDOW = "VTK_DEFAULT_OPENGL_WINDOW"


def has_screen(environ: Mapping[str, str] | None = None) -> bool:
    """Return True where a window can be expected to open: X11 names its screen in DISPLAY, other systems always."""
    environ = os.environ if environ is None else environ
    return not sys.platform.startswith("linux") or bool(environ.get("DISPLAY"))


def prepare_environment(environ: MutableMapping[str, str] | None = None) -> None:
    """Make VTK draw through EGL where there is no screen; a choice already made is left alone.

    Must run before the first render of the process: VTK chooses its window class once.

    Parameters
    ----------
    environ
        The environment to prepare, by default this process's own.
    """
    environ = os.environ if environ is None else environ
    if not has_screen(environ):
        environ.setdefault(_WINDOW, "vtkEGLRenderWindow")
