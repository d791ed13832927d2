"""The command `planum`: finds the command that was typed, loads it, and turns what happens into an exit code.

Only click and the standard library are imported until a command runs; the rest would cost a person seconds of waiting
for a page of help.
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from typing import Any, NoReturn

import click

from planum import __version__
from planum.constants import CAUTIONS
from planum.errors import nearest
from planum_cli import codes
from planum_cli.options import manner
from planum_cli.talk import Talk

__all__ = ["COMMANDS", "HEADINGS", "cli", "main"]

HEADINGS = {
    "start": "Start, with something to try",
    "evening": "Evening, back from the field",
    "night": "Night, making the slices",
    "house": "House, what is what and where it goes",
}

COMMANDS: dict[str, tuple[str, str, str]] = {
    # name: (heading, module, one line)
    "demo": ("start", "demo", "Make slices of an example survey, to see what comes out."),
    "new": ("start", "new", "Draft a survey folder from a folder of line files."),
    "check": ("evening", "check", "Say all that is wrong with a survey, and what it would give."),
    "look": ("evening", "look", "Draw one recorded line and say what the file holds."),
    "map": ("night", "map", "Make depth slices of a survey, for GIS, print and the dig."),
    "recipe": ("night", "recipe", "Print the processing steps with every setting filled in."),
    "view": ("night", "view", "Look at the slices of a run in three dimensions."),
    "about": ("house", "about", "Print what a slice file says of itself."),
    "tidy": ("house", "tidy", "Free the space of a survey's work folder."),
}


class House(click.Group):
    """A group that loads a command only when it is called for, and lists them under headings."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002
        """Return the names in the order of the help."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        """Load one command's module."""
        if cmd_name not in COMMANDS:
            return None
        _, module, line = COMMANDS[cmd_name]
        command = importlib.import_module(f"planum_cli.commands.{module}").command
        assert isinstance(command, click.Command)  # noqa: S101 - ours, and a test loads each
        command.short_help = line
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Find the command; name the nearest when there is none of that name."""
        word = str(args[0])
        if word not in COMMANDS and not word.startswith("-") and not ctx.resilient_parsing:
            raise click.UsageError(f"there is no command {word!r}; {nearest(word, COMMANDS)}", ctx=ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        """List the commands under their headings, from the table alone: nothing is loaded."""
        wide = max(map(len, COMMANDS)) + 2
        for heading, title in HEADINGS.items():
            rows = [(name.ljust(wide), line) for name, (under, _, line) in COMMANDS.items() if under == heading]
            with formatter.section(title):
                formatter.write_dl(rows)

    def format_epilog(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        """Give a first example, the exit codes and the cautions."""
        with formatter.section("First steps"):
            formatter.write_dl(
                [
                    ("planum demo", "an example, from lines to slices"),
                    ("planum new MYSITE --lines FOLDER", "a survey folder for your own lines"),
                    ("planum check MYSITE", "what is wrong with it, before the night"),
                    ("planum map MYSITE", "its slices"),
                    ("planum map --help", "more on one command"),
                ],
                col_max=36,
            )
        with formatter.section("Exit codes"):
            formatter.write_dl([(str(code), meaning) for code, meaning in codes.MEANING.items()])
        with formatter.section("Cautions"):
            for caution in CAUTIONS:
                formatter.write_text(caution)

    def make_context(self, *args: Any, **named: Any) -> click.Context:
        """Parse what was typed; help that nobody reads to its end is no error."""
        with _enough():
            return super().make_context(*args, **named)

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; output that nobody reads to its end is no error."""
        with _enough():
            return super().invoke(ctx)

    def main(self, args: Sequence[str] | None = None, prog_name: str | None = None, **extra: Any) -> NoReturn:  # type: ignore[override]
        """Run, and end the program with one of the fixed exit codes; never with a traceback nobody asked for."""
        extra.pop("standalone_mode", None)
        talk = Talk()
        try:
            with talk.warnings():
                code = super().main(args, prog_name or "planum", standalone_mode=False, obj=talk, **extra)
        except click.Abort as stop:
            code = _stopped(talk, stop)
        except KeyboardInterrupt as stop:
            code = _stopped(talk, stop)
        except click.ClickException as wrong:
            wrong.show()
            code = codes.USAGE
        except Exception as error:
            code = _failed(talk, error)
        sys.exit(code or codes.DONE)


@contextmanager
def _enough() -> Iterator[None]:
    """End quietly, as done, when the reader of standard output has seen enough (`planum recipe SITE | head`)."""
    try:
        yield
    except BrokenPipeError:
        with suppress(OSError, ValueError):  # what is still buffered would complain when the program ends
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise click.exceptions.Exit(codes.DONE) from None


def _stopped(talk: Talk, stop: BaseException) -> int:
    if isinstance(stop.__cause__ or stop.__context__, EOFError):
        click.echo("error: a question found nobody to answer it; give the answers as options, or --yes", err=True)
        return codes.USAGE
    if talk.debug:
        traceback.print_exception(stop)
    left = ""
    if talk.run is not None:
        there = (talk.run / "run.json").is_file()
        left = "; the former run is untouched" if there else "; there is no run yet, and the next goes on from here"
    click.echo(f"stopped{left}", err=True)
    return codes.INTERRUPTED


def _failed(talk: Talk, error: Exception) -> int:
    if talk.debug:
        traceback.print_exception(error)
    talk.tell_all(codes.problems_of(error))
    return codes.code_of(error)


@click.group(
    cls=House,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)
@click.version_option(__version__, "--version", prog_name="planum", message="%(prog)s %(version)s")
@manner
def cli() -> None:
    """Depth slices from parallel ground-penetrating-radar lines, for excavation.

    A planum is the level surface an excavator opens to read the ground in plan. This program opens it before the dig:
    it reads a folder of radar lines and writes slices that any GIS can lay over the site.
    """


def main() -> NoReturn:
    """Enter from the console script."""
    cli.main()


if __name__ == "__main__":
    main()
