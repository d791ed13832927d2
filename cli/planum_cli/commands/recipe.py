"""`planum recipe`: the steps with every setting filled in."""

from __future__ import annotations

from pathlib import Path

import click

from planum_cli import options
from planum_cli.running import quoted
from planum_cli.talk import Talk


@click.command(
    "recipe",
    cls=options.PlainCommand,
    examples=(
        "planum recipe marrowby                  on the screen",
        "planum recipe marrowby > steps.toml     to compare, or to paste into survey.toml",
    ),
)
@options.site
@options.root
@options.manner
@click.pass_obj
def command(talk: Talk, site: Path, roots: tuple[Path, ...]) -> int:
    """Print the processing steps of SITE as TOML, with every setting the survey leaves open filled in.

    The numbers are learned from the lines themselves. Any of them can be pasted into survey.toml and changed there.
    """
    from planum.pipeline.outlook import resolved_toml

    with talk.progress() as progress:
        text = resolved_toml(site, roots=roots, progress=progress)
    talk.result(text.rstrip("\n"))
    talk.next(f"planum map {quoted(site)}   runs these steps")
    return 0
