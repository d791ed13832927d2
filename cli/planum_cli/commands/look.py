"""`planum look`: one recorded line."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from planum.errors import LineError, Problem
from planum_cli import options
from planum_cli.nearby import survey_of
from planum_cli.running import quoted
from planum_cli.talk import Talk, aligned

if TYPE_CHECKING:
    from planum.lines.recording import IntervalUnit, ReadOptions, Recording


@click.command(
    "look",
    cls=options.PlainCommand,
    examples=(
        "planum look lines/A_01.sgy              what the file says, and A_01-look.png in this folder",
        "planum look lines/A_01.sgy --unit ps --frequency-mhz 400",
    ),
)
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@click.option(
    "--picture",
    metavar="PNG",
    type=click.Path(dir_okay=False, path_type=Path),
    help="The picture to write; NAME-look.png in the current folder if not given.",
)
@click.option(
    "--interval-ns",
    metavar="NS",
    type=click.FloatRange(0, 100, min_open=True),
    help="Time between samples, ns; beats the file.",
)
@click.option("--unit", type=click.Choice(["ps", "ns", "us"]), help="What the file's interval field holds.")
@click.option(
    "--frequency-mhz",
    metavar="MHZ",
    type=click.FloatRange(10, 3000),
    help="Nominal centre frequency, to compare with.",
)
@options.manner
@click.pass_obj
def command(talk: Talk, file: Path, picture: Path | None, interval_ns: float | None, **rest: Any) -> int:
    """Draw the recorded line FILE as it is, and print what it says of itself.

    What the file leaves open is taken from the survey.toml of its folder, or one or two folders up. Without one the
    likely unit of the interval field is used, and called guessed.
    """
    from planum.lines.recording import ReadOptions
    from planum.outputs.look import draw_look

    unit = rest["unit"]
    if interval_ns is not None and unit is not None:
        raise click.UsageError("--interval-ns and --unit both say how long a sample is; give one of them")
    target = Path(f"{file.stem}-look.png") if picture is None else picture
    _refuse_overwriting(target, file)
    stated, where, kept = survey_of(file)
    for problem in kept:
        talk.tell(problem)
    wanted = stated or ReadOptions()
    who = "survey.toml"
    if interval_ns is not None or unit is not None:
        wanted = replace(wanted, interval_ns=interval_ns, interval_unit=unit)
        who = "--interval-ns" if unit is None else "--unit"
    if rest["frequency_mhz"] is not None:
        wanted = replace(wanted, centre_frequency_ghz=rest["frequency_mhz"] / 1e3)
    recording = _read(talk, file, wanted, who)
    talk.tell_all(recording.problems)
    draw_look(target, recording, title=file.name, centre_frequency_ghz=wanted.centre_frequency_ghz)
    facts = _facts(recording) + ([("settings", where)] if where else [])
    talk.result(aligned([*facts, ("picture", target)]))
    talk.next("planum new MYSITE --lines FOLDER   drafts a survey from a folder of such files")
    return 0


def _read(talk: Talk, file: Path, wanted: ReadOptions, who: str) -> Recording:
    """Read the line; where nobody says the unit of the interval field, in the first that gives a believable window."""
    from planum.lines.reading import read_line

    try:
        recording = read_line(file, wanted)
    except LineError as error:
        unknown = any(p.key == "interval_unit" for p in error.problems)
        guessed = _guessed(file, wanted) if unknown and wanted.interval_unit is None else {}
        if not guessed:
            raise LineError([_said_here(p) for p in error.problems]) from error
        unit, *others = guessed
        rest = f"; {' or '.join(others)} would also give a believable window" if others else ""
        talk.say(f"unit guessed: {unit}{rest}; give --unit if you know it")
        return replace(guessed[unit], interval_origin=f"unit guessed: {unit}")
    origin = recording.interval_origin
    if origin == "given":
        return replace(recording, interval_origin=f"stated by {who}")
    return replace(recording, interval_origin=origin.replace("unit given:", f"unit stated by {who}:"))


def _guessed(file: Path, wanted: ReadOptions) -> dict[str, Recording]:
    """Return the recording under every unit that gives a believable window, the commonest unit first."""
    from planum.lines.reading import read_line

    found: dict[str, Recording] = {}
    units: tuple[IntervalUnit, ...] = ("ps", "ns", "us")
    for unit in units:
        with suppress(LineError):
            found[unit] = read_line(file, replace(wanted, interval_unit=unit))
    return found


_TOLD = ("n_samples", "n_traces_found")
"""Header facts that stand in the lines above them."""


def _refuse_overwriting(target: Path, file: Path) -> None:
    if target.suffix.lower() != ".png":
        raise click.BadParameter(f"{quoted(target)}: a picture's name ends in .png", param_hint="--picture")
    if not target.parent.is_dir():
        raise click.BadParameter(f"the folder {quoted(target.parent)} does not exist", param_hint="--picture")
    if target.exists() and target.samefile(file):
        raise click.BadParameter("the picture would overwrite the line file", param_hint="--picture")


def _said_here(problem: Problem) -> Problem:
    """Return a problem whose cure is an option of this command, not a key of a survey."""
    if problem.key in ("interval_unit", "sample_interval_ns"):
        return replace(problem, do="look again with --unit ps, ns or us, or with --interval-ns")
    return problem


def _facts(recording: Recording) -> list[tuple[str, object]]:
    n_traces, n_samples = recording.data.shape
    facts: list[tuple[str, object]] = [
        ("traces", n_traces),
        ("samples", n_samples),
        ("sample interval", f"{recording.interval_ns:.6g} ns ({recording.interval_origin})"),
        ("window", f"{recording.interval_ns * n_samples:.4g} ns"),
        ("values", f"{recording.data.dtype.name}, {recording.data.min():g} to {recording.data.max():g}"),
    ]
    for key, value in recording.header.items():
        if key == "text":
            rows = [str(row).rstrip() for row in value]
            facts += [
                ("text" if not i else "", row) for i, row in enumerate(r for r in rows if r.strip(" C0123456789"))
            ]
        elif value not in ("", None, 0) and key not in _TOLD:
            facts.append((key.replace("_", " "), value))
    return facts
