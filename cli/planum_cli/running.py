"""How the end of a run is told: by `map` and `demo`."""

from __future__ import annotations

import re
import shlex
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from planum.errors import Problem
from planum_cli import codes
from planum_cli.talk import Talk, aligned, several

if TYPE_CHECKING:
    from planum.pipeline.run import RunResult

__all__ = ["count", "quoted", "tell_run"]

LABELS = {"limit_depth_m": ("ground meets noise at", "m"), "notes": ("mind", "")}
"""Words and units for entries of a run's summary whose name alone would not tell."""

MOST_ROWS = 6
"""Reasons for setting lines aside that the summary names; the report names all."""


def count(number: int, word: str) -> str:
    """Return a number with its word, singular or plural."""
    return f"{number} {word}" if number == 1 else f"{number} {word}s"


def quoted(path: Path) -> str:
    """Return a path as it is typed in a shell."""
    return shlex.quote(str(path))


def tell_run(talk: Talk, result: RunResult, *, site: Path, name: str | None = None, at_home: bool = True) -> int:
    """Tell what was made, what was set aside and what to do next; return the exit code.

    ``at_home``: the run lies in the survey folder, where `planum view SITE` looks for it.
    """
    aside = len(result.set_aside)
    if not result.changed:
        talk.say("nothing has changed since this run was made: it stays as it is")
    talk.tell_all(result.warnings, last=map(_said_aside, result.set_aside))
    if aside:
        talk.say(f"{count(aside, 'line')} set aside; the report names each and why")
    talk.result(aligned([("results", result.out), *_pairs(result.summary), *_aside_rows(result.set_aside)]))
    out = result.out
    view = f"planum view {quoted(site if at_home else out)}" + (f" --name {name}" if name else "")
    talk.next(
        f"open {quoted(out / 'report.html')} in a browser: what was done, and what to be careful with",
        f"load {quoted(out / 'slices')} in a GIS, or {quoted(out / 'slices.nc')} in a notebook",
        f"{view}   to look at them in three dimensions",
    )
    return codes.SET_ASIDE if aside else codes.DONE


def _said_aside(problem: Problem) -> Problem:
    """Return a problem that cost a line with the words that say so; the run went on, so it is a warning."""
    came = problem.came if "set aside" in problem.came else f"set aside: {problem.came}"
    return replace(problem, came=came, severity="warning")


def _aside_rows(problems: Sequence[Problem]) -> list[tuple[str, str]]:
    """Return how many lines were set aside, and which for which reason."""
    rows: dict[str, list[str]] = {}
    for problem in problems:
        named = re.fullmatch(r"line (\S+) is set aside(?:: (.*))?", problem.came)
        line, reason = (named[1], named[2] or "") if named else (problem.line, problem.came)
        rows.setdefault(reason, []).append(line or problem.file or "?")
    texts = []
    for reason, lines in rows.items():
        word = "line" if len(set(lines)) == 1 else "lines"
        texts.append(f"{word} {several(lines)}" + (f" ({reason})" if reason else ""))
    texts = texts if len(texts) <= MOST_ROWS else [*texts[:MOST_ROWS], f"{len(texts) - MOST_ROWS} more reasons: report"]
    return [
        ("set aside", f"{len(problems)}: {text}") if not i else ("", f"{'':{len(str(len(problems))) + 2}}{text}")
        for i, text in enumerate(texts)
    ]


def _pairs(summary: dict[str, Any]) -> list[tuple[str, str]]:
    """Return the summary as label and text, several texts below each other, without what is empty."""
    pairs = []
    for key, value in summary.items():
        label, unit = LABELS.get(key, (key.replace("_", " "), ""))
        texts = [_text(v, unit) for v in (value if isinstance(value, list | tuple) else [value]) if v not in (None, "")]
        pairs += [(label if not i else "", text) for i, text in enumerate(texts)]
    return pairs


def _text(value: object, unit: str) -> str:
    text = f"{value:.4g}" if isinstance(value, float) else str(value)
    return f"{text} {unit}".rstrip()
