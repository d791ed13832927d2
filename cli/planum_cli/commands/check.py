"""`planum check`: everything wrong with a survey at once, and what it would give."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from planum_cli import codes, options
from planum_cli.running import count, quoted
from planum_cli.talk import Talk, aligned

if TYPE_CHECKING:
    from planum.pipeline.outlook import Outlook, SetOutlook


@click.command(
    "check",
    cls=options.PlainCommand,
    examples=("planum check marrowby                   before the crew leaves the field",),
)
@options.site
@options.root
@options.manner
@click.pass_obj
def command(talk: Talk, site: Path, roots: tuple[Path, ...]) -> int:
    """Say all that is wrong with the survey folder SITE, and what a map of it would hold.

    Every mistake comes with its file, line and key, all at once. Each line file is read and every setting tried on what
    it holds; nothing is processed and nothing is written.
    """
    from planum.pipeline.outlook import outlook

    with talk.progress() as progress:
        seen = outlook(site, roots=roots, progress=progress)
    talk.tell_all(seen.warnings, last=seen.set_aside)
    talk.result("\n".join(_report(seen)))
    aside = len(seen.set_aside)
    if aside:
        talk.say(f"{count(aside, 'line')} would be set aside; the rest can be mapped")
    talk.next(f"planum map {quoted(site)}")
    return codes.SET_ASIDE if aside else codes.DONE


def _report(seen: Outlook) -> list[str]:
    points = count(seen.control, "control point")
    placed = f"the frame of {points} (no crs given)" if seen.control else "local frame (no crs given)"
    frame = f"{seen.crs}, {points}" if seen.crs else placed
    head = [("survey", f"{seen.title} ({seen.code})"), ("frame", frame), ("steps", ", ".join(seen.steps))]
    parts = [aligned(head)]
    for one in seen.sets:
        parts += ["", f"grid {one.name}", aligned(_pairs(one), indent=2)]
    return parts


def _pairs(one: SetOutlook) -> list[tuple[str, str]]:
    slow, fast = one.reach_m
    reach = f"{slow:.1f} m" if f"{slow:.1f}" == f"{fast:.1f}" else f"{slow:.1f} to {fast:.1f} m"
    across = "y" if one.direction == "x" else "x"
    missing = ", ".join(f"{m:g}" for m in one.missing_m[:20]) + (" ..." if len(one.missing_m) > 20 else "")
    return [
        ("lines", f"{one.lines} along {one.direction}, up to {one.longest_m:g} m long, {one.spacing_m:g} m apart"),
        ("missing", f"at {across} = {missing} m" if missing else "none"),
        ("traces", f"{one.trace_spacing_m:.3g} m apart"),
        ("window", f"{one.window_ns:.4g} ns, which reaches about {reach}"),
        ("resolution", one.resolution()),
    ]
