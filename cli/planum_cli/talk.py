"""How the command speaks: results on standard output, everything else on standard error.

::

    Talk
     ├ result   what was asked for: stdout
     ├ say      where we are: stderr, silent with --quiet
     ├ tell     a problem as one line: stderr, always
     ├ tell_all problems as few lines: those that differ only in their file and line are one sentence
     ├ next     the next useful command: stderr, silent with --quiet
     └ progress a live bar on a terminal, a line at every quarter elsewhere
"""

from __future__ import annotations

import os
import sys
import time
import warnings
from collections.abc import Iterable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import replace
from pathlib import Path
from typing import Any

import click

from planum.errors import PlanumWarning, Problem, printable

__all__ = ["Talk", "aligned", "folded", "several"]

BAR = 24
"""Characters of the live bar."""
REDRAW_S = 0.1
"""A live bar is redrawn at most ten times a second."""
FEW = 3
"""Of many names that do not count on, so many are written out."""
LINE_S = 2.0
"""Lines of one stage come at most every two seconds, but for its first and its last."""


def aligned(pairs: Iterable[tuple[str, object]], *, indent: int = 0) -> str:
    """Return label and value per line, the values below each other."""
    rows = [(str(label), printable(value, longest=2000)) for label, value in pairs]
    wide = max((len(label) for label, _ in rows), default=0)
    return "\n".join(f"{' ' * indent}{label:<{wide}}  {value}".rstrip() for label, value in rows)


def folded(problems: Iterable[Problem]) -> list[list[Problem]]:
    """Return problems in groups that differ only in file, line and byte, in the order of their first."""
    groups: dict[Problem, list[Problem]] = {}
    for problem in problems:
        groups.setdefault(replace(problem, file="", line="", byte=None), []).append(problem)
    return list(groups.values())


def several(names: Iterable[str]) -> str:
    """Return names as "1 to 25" where they count on, else the first three and how many more there are."""
    names = list(dict.fromkeys(names))
    if len(names) > 2 and all(n.isascii() and n.isdigit() and len(n) < 10 for n in names):
        numbers = sorted(map(int, names))
        if numbers == list(range(numbers[0], numbers[-1] + 1)):
            return f"{numbers[0]} to {numbers[-1]}"
    if len(names) <= FEW + 1:  # "and 1 more" is as long as the name
        return ", ".join(names)
    return f"{', '.join(names[:FEW])} and {len(names) - FEW} more"


def _as_one(same: list[Problem]) -> Problem:
    """Return several problems that differ only in their places as one that counts them."""
    same = list({(p.file, p.line): p for p in reversed(same)}.values())[::-1]
    if len(same) == 1:
        return same[0]
    files, lines = list(dict.fromkeys(p.file for p in same)), list(dict.fromkeys(p.line for p in same))
    if lines == [""]:
        where = f"{len(files)} files ({several(files)})"
    elif len(files) == 1:
        where = f"{f'{files[0]}, ' if files[0] else ''}{len(lines)} lines ({several(n or 'none' for n in lines)})"
    else:
        where = f"{len(lines)} lines ({several(n or '?' for n in lines)}; {several(f for f in files if f)})"
    first = same[0]
    key = f", {first.key}" if first.key else ""
    return replace(first, came=f"{where}{key}: {first.came}", file="", line="", key="", byte=None)


class Progress:
    """Told ``(stage, done, total)`` as often as one likes; speaks only when a person gains by it."""

    def __init__(self, *, live: bool, quiet: bool) -> None:
        self._live, self._quiet = live, quiet
        self._stage = ""
        self._quarter = -1
        self._began = self._drawn = 0.0
        self._width = 0

    def __call__(self, stage: str, done: int, total: int) -> None:
        """Show that ``done`` of ``total`` of a stage is finished (``total`` 0: not known)."""
        if self._quiet:
            return
        now = time.monotonic()
        new = stage != self._stage
        if new:
            self.close()
            self._stage, self._quarter, self._began, self._drawn = stage, -1, now, 0.0
        if self._live:
            if new or done >= total or now - self._drawn >= REDRAW_S:
                self._drawn = now
                self._draw(done, total, now - self._began)
        else:
            self._line(done, total, now - self._began)

    def clear(self) -> None:
        """Take the live bar off the terminal, so that a line can be written; the next call draws it again."""
        if self._width:
            _to_stderr("\r" + " " * self._width + "\r", newline=False)
            self._width = 0

    def close(self) -> None:
        """Leave the finished bar standing and go to the next line."""
        if self._width:
            _to_stderr("")
            self._width = 0

    def _draw(self, done: int, total: int, seconds: float) -> None:
        full, empty = ("█", "░") if _speaks_unicode() else ("#", ".")
        share = min(done / total, 1.0) if total > 0 else 0.0
        bar = full * round(BAR * share) + empty * (BAR - round(BAR * share))
        count = f"{done}/{total}" if total > 0 else f"{done}"
        text = f"{printable(self._stage, longest=28):<28} {bar} {count:>11}  {_clock(seconds)}"
        _to_stderr("\r" + text.ljust(self._width), newline=False)
        self._width = len(text)

    def _line(self, done: int, total: int, seconds: float) -> None:
        quarter = min(4 * done // total, 4) if total > 0 else 0
        first = self._quarter < 0
        if quarter <= self._quarter or (not first and quarter < 4 and seconds - self._drawn < LINE_S):
            return
        self._quarter, self._drawn = quarter, seconds
        if first and quarter < 4:
            _to_stderr(f"{printable(self._stage)} ..." + (f" ({total})" if total > 0 else ""))
        else:
            _to_stderr(f"{printable(self._stage)} {25 * quarter} % ({done} of {total}, {_clock(seconds)})")


class Talk:
    """The command's voice during one call."""

    def __init__(self, *, quiet: bool = False, debug: bool | None = None) -> None:
        self.quiet = quiet
        self.debug = os.environ.get("PLANUM_DEBUG", "") not in ("", "0") if debug is None else debug
        self.run: Path | None = None
        """The run folder being made, if one is."""
        self._progress: Progress | None = None
        self._said: set[str] = set()

    @property
    def live(self) -> bool:
        """Whether standard error is a terminal."""
        return bool(getattr(sys.stderr, "isatty", lambda: False)())

    def result(self, text: str) -> None:
        """Write what was asked for."""
        self._clear()
        click.echo(text)

    def say(self, text: str) -> None:
        """Write where we are."""
        if not self.quiet:
            self._clear()
            _to_stderr(text)

    def next(self, *commands: str) -> None:
        """Name what to do next."""
        if commands:
            self.say("next: " + "\n      ".join(commands))

    def tell(self, problem: Problem) -> None:
        """Write a problem as one line; the same line only once."""
        line = f"{problem.severity}: {problem}"
        if line not in self._said:
            self._said.add(line)
            self._clear()
            _to_stderr(line)

    def tell_all(self, problems: Iterable[Problem], *, last: Iterable[Problem] = ()) -> None:
        """Write problems, those of many lines in one sentence each; what concerns few, errors and ``last`` at the end.

        The summary that follows then stands right below what a person must act on.
        """
        groups = folded(problems)
        groups.sort(key=lambda same: (same[0].severity == "error", len(same) == 1))
        for same in (*groups, *folded(last)):
            self.tell(_as_one(same))

    @contextmanager
    def progress(self) -> Iterator[Progress]:
        """Give a function to report progress to; its bar ends with the block."""
        self._progress = Progress(live=self.live, quiet=self.quiet)
        try:
            yield self._progress
        finally:
            self._progress.close()
            self._progress = None

    @contextmanager
    def warnings(self) -> Iterator[None]:
        """Show this library's warnings as sentences, once each, and others only with ``--debug``."""
        with warnings.catch_warnings():
            warnings.simplefilter("default")
            warnings.simplefilter("always", PlanumWarning)

            def show(message: Warning | str, category: type[Warning], filename: str, lineno: int, *_: Any) -> None:
                if isinstance(message, PlanumWarning):
                    self.tell(message.problem)
                elif issubclass(category, PlanumWarning):
                    self.tell(Problem(str(message), severity="warning"))
                elif self.debug:
                    self._clear()
                    _to_stderr(warnings.formatwarning(message, category, filename, lineno).rstrip())

            warnings.showwarning = show  # type: ignore[assignment]  # it is called by position
            yield

    def _clear(self) -> None:
        if self._progress is not None:
            self._progress.clear()


def _clock(seconds: float) -> str:
    minutes, rest = divmod(int(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


def _speaks_unicode() -> bool:
    try:
        "█░".encode(getattr(sys.stderr, "encoding", None) or "ascii")
    except (UnicodeEncodeError, LookupError):
        return False
    return True


def _to_stderr(text: str, *, newline: bool = True) -> None:
    with suppress(BrokenPipeError):  # nobody reads the progress any more: that is no reason to stop the work
        click.echo(text, err=True, nl=newline)
