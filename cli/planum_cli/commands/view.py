"""`planum view`: a run in three dimensions."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from planum_cli import options
from planum_cli.running import quoted
from planum_cli.talk import Talk


@click.command(
    "view",
    cls=options.PlainCommand,
    examples=(
        "planum view marrowby                    a window",
        "planum view marrowby --picture m.png --depth 0.6",
    ),
)
@options.site
@options.name
@click.option(
    "--picture",
    metavar="PNG",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Write a picture instead of opening a window; needs no screen.",
)
@click.option("--level", metavar="X", type=float, help="Amplitude of the surface that is drawn.")
@click.option("--depth", metavar="M", type=float, help="Depth of the slice that is drawn, m below ground.")
@options.manner
@click.pass_obj
def command(talk: Talk, site: Path, name: str | None, picture: Path | None, **rest: Any) -> int:
    """Look at the slices of SITE in three dimensions, or write a picture of them.

    SITE is a survey folder, or the run folder itself where it lies elsewhere.
    """
    from planum.viewer.load import load_run, statements_of

    out = site / (f"out-{options.plain_name(name)}" if name else "out")
    if name is None and (site / "slices.nc").is_file():
        out = site  # a run folder itself, such as one written with --out
    if picture is not None and picture.suffix.lower() != ".png":
        raise click.BadParameter(f"{quoted(picture)}: a picture's name ends in .png", param_hint="--picture")
    slices, lines = load_run(out)
    chosen = {"level": rest["level"], "slice_depth": rest["depth"]}
    with slices:
        if picture is None:
            from planum.viewer.window import open_window

            if (level := chosen["level"]) is not None:
                known = slices["amplitude"]
                low, high = float(known.min()), float(known.max())
                if not low <= level <= high:
                    talk.say(f"no isosurface is drawn at {level:g}: amplitudes reach from {low:.4g} to {high:.4g}")
            try:
                open_window(slices, lines, statements=statements_of(slices), **chosen)
            except ValueError as wrong:
                raise _as_usage(wrong) from wrong
            talk.next(f"planum view {quoted(site)} --picture FILE.png   keeps a picture")
            return 0
        _draw(talk, slices, lines, picture, chosen)
    talk.result(str(picture))
    talk.next(f"planum view {quoted(site)}   opens a window where there is a screen")
    return 0


def _draw(talk: Talk, slices: Any, lines: Any, picture: Path, chosen: dict[str, float | None]) -> None:
    """Draw off screen, after asking in another process whether the drawing library works here."""
    import numpy as np

    from planum.errors import MachineError
    from planum.scene.build import build_scene
    from planum.scene.picture import render
    from planum.scene.probe import rendering_problem

    problem = rendering_problem()
    if problem is not None:
        raise MachineError(problem)
    try:
        scene = build_scene(slices, lines=lines, **chosen)
    except ValueError as wrong:
        raise _as_usage(wrong) from wrong
    if not scene.isosurface.n_cells:
        low, high = np.nanmin(scene.soft.amplitude), np.nanmax(scene.soft.amplitude)
        talk.say(f"no isosurface is drawn: {scene.level_text()}; the smoothed slices hold {low:.4g} to {high:.4g}")
    render(scene, picture)


def _as_usage(wrong: ValueError) -> Exception:
    """Return a number out of range as a usage error; errors of the library stay as they are."""
    from planum.errors import PlanumError

    return wrong if isinstance(wrong, PlanumError) else click.UsageError(str(wrong))
