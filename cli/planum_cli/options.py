"""Arguments and options several commands share, written once."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

from planum_cli.talk import Talk

__all__ = ["PlainCommand", "manner", "name", "plain_name", "root", "site"]

F = TypeVar("F", bound=Callable[..., Any])


class PlainCommand(click.Command):
    """A command whose help ends with its examples as they are typed."""

    def __init__(self, *args: Any, examples: tuple[str, ...] = (), **named: Any) -> None:
        super().__init__(*args, **named)
        self.examples = examples

    def format_epilog(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the examples, then the epilog."""
        if self.examples:
            with formatter.section("Example" if len(self.examples) == 1 else "Examples"):
                for text in self.examples:
                    formatter.write(f"{'':>{formatter.current_indent}}{text}\n")
        super().format_epilog(ctx, formatter)


def _hush(ctx: click.Context, _: click.Parameter, on: bool) -> None:
    if on:
        ctx.ensure_object(Talk).quiet = True


def _open_up(ctx: click.Context, _: click.Parameter, on: bool) -> None:
    if on:
        ctx.ensure_object(Talk).debug = True


def manner(command: F) -> F:
    """Add ``--quiet`` and ``--debug``, which may stand before or behind the command's name."""
    quiet = click.option(
        "--quiet", is_flag=True, expose_value=False, callback=_hush, help="No progress; results and problems only."
    )
    debug = click.option(
        "--debug", is_flag=True, expose_value=False, callback=_open_up, help="Show the traceback of an error."
    )
    return quiet(debug(command))


site = click.argument("site", type=click.Path(exists=True, file_okay=False, path_type=Path))
name = click.option("--name", metavar="NAME", help="A run beside the usual one: its results are in out-NAME.")
root = click.option(
    "--root",
    "roots",
    multiple=True,
    metavar="DIR",
    type=click.Path(exists=True, file_okay=False, path_type=Path),
    help="A further folder the survey may take line files from (may be repeated).",
)


def plain_name(text: str) -> str:
    """Return a run's name, refused when it could not be part of a folder's name."""
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_.-]{0,31}", text):
        raise click.BadParameter(
            f"{text!r}: allowed are up to 32 letters, digits, _ - and ., a letter or digit first", param_hint="--name"
        )
    return text
