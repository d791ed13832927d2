"""`planum map`: a survey folder becomes a run folder."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from planum_cli import options
from planum_cli.running import quoted, tell_run
from planum_cli.talk import Talk


@click.command(
    "map",
    cls=options.PlainCommand,
    examples=(
        "planum map marrowby                        slices of the survey in marrowby, in marrowby/out",
        "planum map marrowby --name deep            a second run beside the first, in marrowby/out-deep",
        "planum map marrowby --plan kept/run.json   the same numbers again, from a run's own record",
    ),
)
@options.site
@click.option(
    "--out",
    metavar="DIR",
    type=click.Path(file_okay=False, path_type=Path),
    help="The run folder; SITE/out if not given. A run already there is replaced, whole or not at all.",
)
@options.name
@click.option(
    "--plan",
    metavar="RUN.JSON",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="Repeat the plan of an earlier run instead of working one out.",
)
@click.option(
    "--workers",
    metavar="N",
    type=click.IntRange(1, 1024),
    help="Lines worked on at the same time; all processors if not given. The result does not depend on it.",
)
@options.root
@options.manner
@click.pass_obj
def command(talk: Talk, site: Path, out: Path | None, name: str | None, **rest: Any) -> int:
    """Make depth slices of the survey folder SITE.

    Writes one folder: a GeoTIFF per slice for any GIS, slices.nc with all of them, site.gpkg with lines and grids,
    pictures, a report to read first, and run.json with every number the run used. The line files are only read. What
    cannot be used is set aside and named; a run that is stopped leaves the former result whole.
    """
    from planum.pipeline.run import map_site

    if out is not None and name is not None:
        raise click.UsageError("--out and --name both say where the results go; give one of them")
    if name is not None:
        name = options.plain_name(name)
    if out is not None:
        _only_a_run(out)
    talk.run = out if out is not None else site / (f"out-{name}" if name else "out")
    with talk.progress() as progress:
        result = map_site(site, out=out, name=name, progress=progress, **rest)
    return tell_run(talk, result, site=site, name=name, at_home=out is None)


def _only_a_run(out: Path) -> None:
    """Refuse a folder that holds something else: the run takes the place of the whole folder."""
    if out.is_dir() and any(out.iterdir()) and not (out / "run.json").is_file():
        raise click.BadParameter(
            f"{quoted(out)} holds something that is no run, and a run takes the place of its whole folder",
            param_hint="--out",
        )
