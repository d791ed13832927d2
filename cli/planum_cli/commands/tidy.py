"""`planum tidy`: frees a site's work folder."""

from __future__ import annotations

from pathlib import Path

import click

from planum_cli import options
from planum_cli.running import quoted
from planum_cli.talk import Talk


@click.command(
    "tidy",
    cls=options.PlainCommand,
    examples=("planum tidy marrowby",),
)
@options.site
@options.manner
@click.pass_obj
def command(talk: Talk, site: Path) -> int:
    """Remove the work folder of SITE, and nothing else.

    It holds what is quick to read and slow to make; the next map makes it again. Line files and results stay.
    """
    from planum.pipeline.tidy import tidy

    freed = tidy(site)
    talk.result(f"{_size(freed)} freed" if freed else f"{quoted(site)} has no work folder: nothing to free")
    if freed:
        talk.next(f"planum map {quoted(site)}   makes it again when it is needed")
    return 0


def _size(count: int) -> str:
    for unit, factor in (("GB", 1e9), ("MB", 1e6), ("kB", 1e3)):
        if count >= factor:
            return f"{count / factor:.1f} {unit}"
    return f"{count} bytes"
