"""The scene as a PNG, drawn off screen; in a process of its own where a crash must not take the run down.

The drawing library is loaded only by the process that draws: a run on a machine that cannot load it goes on.
"""

from __future__ import annotations

import json
import os
import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from PIL import Image
from PIL.PngImagePlugin import PngInfo

from planum.errors import Problem
from planum.scene.environment import prepare_environment
from planum.scene.probe import run_drawing

if TYPE_CHECKING:
    from planum.scene.build import Lines, Scene

__all__ = ["SIZE", "render", "render_safely"]

SIZE = (1600, 1100)
_FINER = 2  # drawn twice as fine and averaged: clean edges whatever the driver's own smoothing does
TIMEOUT_S = 600.0
STATEMENT_CHUNK = "planum-statement"
"""Keyword of the text chunk that holds the statement, as in every picture of a run."""


def render(scene: Scene, path: Path, *, size: tuple[int, int] = SIZE) -> None:
    """Draw a scene off screen into a PNG, written aside and renamed.

    Parameters
    ----------
    scene
        What to draw.
    path
        The PNG; its folder exists.
    size
        Width and height in pixels.
    """
    prepare_environment()
    from planum.scene.drawing import pixels  # noqa: PLC0415 - see above

    fine = pixels(scene, size=(_FINER * size[0], _FINER * size[1]), scale=_FINER * size[0] / SIZE[0])
    image = Image.fromarray(fine).resize(size, Image.Resampling.BOX)
    _write(image, Path(path), scene)


def render_safely(
    slices_path: Path,
    path: Path,
    *,
    lines: Lines = (),
    size: tuple[int, int] = SIZE,
    timeout_s: float = TIMEOUT_S,
    command: Sequence[str] | None = None,
    **options: Any,
) -> Problem | None:
    """Draw a slice file in a process of its own; a crash of the drawing library becomes a problem, no more.

    Parameters
    ----------
    slices_path
        The NetCDF file of a run.
    path
        The PNG to write.
    lines, size
        As for :func:`~planum.scene.build.build_scene` and :func:`render`.
    timeout_s
        Seconds after which drawing is given up.
    command
        Replaces this interpreter and module; two paths are appended.
    **options
        ``level``, ``slice_depth``, ``exaggeration`` of :func:`~planum.scene.build.build_scene`.

    Returns
    -------
    Problem or None
        What kept the picture from being made.
    """
    if not Path(slices_path).is_file():
        return Problem(came="there is no slice file to draw", file=str(slices_path), do="planum map SITE makes it")
    request = {
        "size": list(size),
        "lines": [[name, np.asarray(places, float).tolist()] for name, places in lines],
        "options": options,
    }
    start = list(command) if command is not None else [sys.executable, "-m", "planum.scene.picture"]
    done = run_drawing([*start, str(slices_path), str(path)], text=json.dumps(request), timeout_s=timeout_s)
    if isinstance(done, Problem):
        return done
    if not Path(path).is_file():
        return Problem(came="the drawing process ended without a picture", file=str(path), key="rendering")
    return None


def _write(image: Image.Image, path: Path, scene: Scene) -> None:
    said = PngInfo()
    said.add_text("Title", scene.title)
    said.add_text("Description", "; ".join([scene.slice_text(), scene.level_text(), *scene.notes()]))
    said.add_text("Warning", scene.caution)
    if scene.statement:
        plain = {name: value.tolist() if hasattr(value, "tolist") else value for name, value in scene.statement.items()}
        said.add_itxt(STATEMENT_CHUNK, json.dumps({"statement": plain}, sort_keys=True))
    handle, aside = tempfile.mkstemp(prefix=f".{path.name}-", suffix=".part", dir=path.parent)
    try:
        with os.fdopen(handle, "wb") as file:
            image.save(file, format="PNG", pnginfo=said)
        Path(aside).chmod(0o644)
        Path(aside).replace(path)
    except BaseException:
        Path(aside).unlink(missing_ok=True)
        raise


def _main(arguments: Sequence[str]) -> None:
    """Draw the NetCDF of the first argument into the PNG of the second; the rest is JSON on standard input."""
    import xarray as xr  # noqa: PLC0415 - see above

    from planum.scene.build import build_scene  # noqa: PLC0415

    source, target = arguments
    request = json.loads(sys.stdin.read() or "{}")
    with xr.open_dataset(source, engine="h5netcdf", decode_times=False, chunks={"depth": 1}) as slices:
        lines = [(name, np.array(places, float)) for name, places in request.get("lines", [])]
        scene = build_scene(slices, lines=lines, **request.get("options", {}))
    render(scene, Path(target), size=tuple(request.get("size", SIZE)))


if __name__ == "__main__":
    _main(sys.argv[1:])
