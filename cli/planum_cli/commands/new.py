"""`planum new`: a survey folder drafted from line files."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from planum.errors import SurveyError
from planum_cli import options
from planum_cli.running import count, quoted
from planum_cli.talk import Talk

if TYPE_CHECKING:
    from planum.pipeline.draft import Answers, Draft
    from planum.pipeline.found import Found

MOST_QUESTIONS = 6
INTERVAL = click.FloatRange(0, 100, min_open=True)


@click.command(
    "new",
    cls=options.PlainCommand,
    examples=(
        "planum new myfield --lines stick/day1              asks at most six questions",
        "planum new myfield --lines stick/day1 --yes        asks none, and says what it guessed",
        "planum new myfield --lines stick/day1 --spacing-m 0.25 --length-m 20 --yes",
    ),
)
@click.argument("folder", metavar="DIR", type=click.Path(file_okay=False, path_type=Path))
@click.option(
    "--lines",
    metavar="FOLDER",
    required=True,
    type=click.Path(exists=True, file_okay=False, path_type=Path),
    help="The folder with the line files; they are copied to DIR/lines unless they lie in DIR.",
)
@click.option("--yes", is_flag=True, help="Ask nothing: guess what is not given.")
@click.option("--title", help="What the survey is called in reports.")
@click.option(
    "--frequency-mhz", metavar="MHZ", type=click.FloatRange(10, 3000), help="Centre frequency of the antenna."
)
@click.option(
    "--separation-m", metavar="M", type=click.FloatRange(0, 10), help="Distance from transmitter to receiver."
)
@click.option("--spacing-m", metavar="M", type=click.FloatRange(0.01, 100), help="Distance between lines.")
@click.option("--length-m", metavar="M", type=click.FloatRange(0.1, 10000), help="Length of a line.")
@click.option("--walk", type=click.Choice(["zigzag", "one-way"]), help="Every second line walked back, or none.")
@click.option(
    "--interval-ns",
    metavar="NS",
    type=INTERVAL,
    help="Time between samples, where the files do not say it.",
)
@options.manner
@click.pass_obj
def command(talk: Talk, folder: Path, lines: Path, yes: bool, interval_ns: float | None, **given: Any) -> int:
    """Draft a survey folder DIR from a folder of line files.

    Writes survey.toml and lines.csv. What the files do not say is asked, or guessed and marked as guessed: open both
    and correct them, they are meant to be edited. Nothing that is there is overwritten.
    """
    from planum.pipeline.draft import Answers, draft, free_for, write_draft
    from planum.pipeline.found import look_through

    free_for(folder)
    answers = Answers(
        title=given["title"],
        centre_frequency_mhz=given["frequency_mhz"],
        antenna_separation_m=given["separation_m"],
        line_spacing_m=given["spacing_m"],
        line_length_m=given["length_m"],
        walk=given["walk"],
    )

    def look(interval_ns: float | None) -> Found:
        with talk.progress() as progress:
            return look_through(lines, interval_ns=interval_ns, progress=progress)

    most = MOST_QUESTIONS
    try:
        found = look(interval_ns)
    except SurveyError as silent:
        if yes or interval_ns is not None or not any(p.key == "sample_interval_ns" for p in silent.problems):
            raise
        talk.say("the interval field of the line files is empty: it is the recording window over the number of samples")
        found = look(click.prompt("Time between samples, ns", type=INTERVAL, err=True))
        most -= 1
    talk.say(_seen(found))
    if not yes:
        answers = _ask(talk, found, answers, folder, most)
    made = draft(found, answers, site=folder)
    with talk.progress() as progress:
        write_draft(made, progress=progress)
    _tell(talk, made, folder)
    return 0


def _seen(found: Found) -> str:
    """Say what the files are, in a sentence."""
    files = len({line.file for line in found.lines})
    least, most = min(line.n_traces for line in found.lines), max(line.n_traces for line in found.lines)
    traces = count(least, "trace") if least == most else f"{least} to {most} traces"
    unit = f" (interval field read as {found.units[0]})" if found.units else ""
    text = (
        f"{count(len(found.lines), 'line')} in {count(files, 'file')}: {traces}, window {found.window_ns:.4g} ns{unit}"
    )
    length, spacing = found.length_m(), found.spacing_m()
    if length is not None:
        text += f", {length:.4g} m long by their coordinates"
    if spacing is not None:
        text += f", {spacing:g} m apart"
    return text


def _ask(talk: Talk, found: Found, answers: Answers, folder: Path, most: int) -> Answers:
    """Ask what is not given, a guess to accept by the return key; of more than ``most`` questions not the first."""
    from planum.pipeline.draft import guesses

    guess = guesses(found, folder)
    questions: list[tuple[str, str, Any]] = [
        ("title", "What is the survey called", str),
        ("centre_frequency_mhz", "Centre frequency of the antenna, MHz", click.FloatRange(10, 3000)),
        ("antenna_separation_m", "Distance from transmitter to receiver, m", click.FloatRange(0, 10)),
    ]
    if found.placed is None:
        length = ("line_length_m", "Length of a line, m", click.FloatRange(0.1, 10000))
        spacing = ("line_spacing_m", "Distance between lines, m", click.FloatRange(0.01, 100))
        walk = ("walk", "Walked zigzag (every second line back) or one-way", click.Choice(["zigzag", "one-way"]))
        questions += [spacing, length, walk] if len(found.lines) > 1 else [length]
    wanted = [q for q in questions if getattr(answers, q[0]) is None][-most:]
    if wanted:
        talk.say("the return key takes the guess in brackets; everything can be changed later")
    for key, text, kind in wanted:
        default = getattr(guess, key)
        shown = f"{default:g}" if isinstance(default, float) else default
        answers = replace(answers, **{key: click.prompt(text, default=shown, type=kind, err=True)})
    return answers


def _tell(talk: Talk, made: Draft, folder: Path) -> None:
    talk.tell_all(made.notes)
    if made.guessed:
        talk.say("guessed, so check it:\n" + "\n".join(f"  {line}" for line in made.guessed))
    copied = f"{count(len(made.files), 'line file')} copied to {quoted(folder / 'lines')}; " if made.copies else ""
    talk.result(f"{copied}{quoted(folder / 'survey.toml')} and {quoted(folder / 'lines.csv')} are drafted")
    first = folder / made.files[0][1]
    talk.next(
        f"open both files and correct what was guessed, then planum check {quoted(folder)}"
        if made.guessed
        else f"planum check {quoted(folder)}   says what a map would hold, and what is wrong",
        f"planum look {quoted(first)}   to see the first line",
    )
