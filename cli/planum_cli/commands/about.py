"""`planum about`: what a result says of itself."""

from __future__ import annotations

import shutil
import sys
import textwrap
from collections.abc import Iterable, Sequence
from pathlib import Path

import click

from planum_cli import options
from planum_cli.talk import Talk, aligned

NARROW = 20
"""Characters of a value that stand in a row at least."""
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
    told = [(name.replace("_", " "), _short(said[name])) for name in _in_order(said)]
    talk.result(aligned(_wrapped(told, shutil.get_terminal_size().columns) if sys.stdout.isatty() else told))
    talk.next("planum recipe SITE   prints the steps behind it")
    return 0


def _in_order(names: Iterable[str]) -> list[str]:
    """Return names in a statement's own order, whatever the order of the file (GeoTIFF tags come by the alphabet)."""
    from planum.records import Statement

    place = {name: i for i, name in enumerate(Statement.model_fields)}
    return sorted(names, key=lambda name: place.get(name, len(place)))


def _wrapped(told: Sequence[tuple[str, str]], columns: int) -> list[tuple[str, str]]:
    """Return long values as several rows, so that none runs back below the names."""
    room = max(columns - 2 - max(len(name) for name, _ in told), NARROW)
    rows = []
    for name, value in told:
        rows += [(name if not i else "", text) for i, text in enumerate(textwrap.wrap(value, room) or [""])]
    return rows


def _short(value: str) -> str:
    """Return the values of many slices as their first, their last and how many there are."""
    parts = value.split(" | ")
    return value if len(parts) <= MOST else f"{parts[0]} ... {parts[-1]} ({len(parts)} slices)"
