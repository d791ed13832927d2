"""`planum about`: what a result says of itself."""

from __future__ import annotations

from pathlib import Path

import click

from planum_cli import options
from planum_cli.talk import Talk, aligned

MOST = 4
"""Values of single slices that are written out."""


@click.command(
    "about",
    cls=options.PlainCommand,
    examples=("planum about out/slices/MBF1_d040-050cm.tif",),
)
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@options.manner
@click.pass_obj
def command(talk: Talk, file: Path) -> int:
    """Print what FILE says of itself: depths and their error, velocity, surface, steps, cautions.

    Reads every kind of file a run writes: GeoTIFF, NetCDF, GeoPackage, PNG, run.json and report.html.
    """
    from planum.outputs.about import statement_in

    said = statement_in(file)
    talk.result(aligned((name.replace("_", " "), _short(value)) for name, value in said.items()))
    talk.next("planum recipe SITE   prints the steps behind it")
    return 0


def _short(value: str) -> str:
    """Return the values of many slices as their first, their last and how many there are."""
    parts = value.split(" | ")
    return value if len(parts) <= MOST else f"{parts[0]} ... {parts[-1]} ({len(parts)} slices)"
