"""TOML with line numbers: the standard parser gives values without places, so keys are found again in the text."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Sequence
from typing import Any

from planum.errors import Problem, SurveyError

__all__ = ["Places", "parse"]

DEEPEST = 8
"""Nesting of tables, arrays and dotted keys; the survey contract needs 3."""

Place = tuple[str | int, ...]


class Places:
    """Line numbers (1-based) of the tables and keys of a TOML text."""

    def __init__(self, lines: dict[Place, int]) -> None:
        self._lines = lines

    def line(self, path: Sequence[str | int]) -> str:
        """Return the line of a key, or of the nearest table around it, as text; "" when nothing is known.

        ``("radar", 0, "name")`` is also found in a plain ``[radar]``.
        """
        wanted: Place = tuple(path)
        while wanted:
            plain = tuple(part for part in wanted if isinstance(part, str))
            found = self._lines.get(wanted) or self._lines.get(plain) or self._lines.get((*wanted, 0))
            if found:
                return str(found)
            wanted = wanted[:-1]
        return ""


def parse(text: str, *, file: str) -> tuple[dict[str, Any], Places]:
    """Return the values of a TOML text and the places of its keys.

    Raises
    ------
    SurveyError
        When the text is not TOML 1.0 or is nested deeper than 8 levels.
    """
    statements = list(_statements(text, file))  # first: the parser's cost explodes with hostile nesting
    try:
        values = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # ValueError: also dates and numbers that cannot be
        line, reason = _reason(error)
        raise SurveyError(Problem(f"this is not TOML: {reason}", file=file, line=line)) from error
    return values, Places(_places(statements))


def _reason(error: Exception) -> tuple[str, str]:
    """Split ``Expected '=' (at line 3, column 5)`` in its line and its words."""
    text = str(error)
    words, _, place = text.rpartition(" (at line ")
    if not words:
        return "", text
    return place.partition(",")[0], f"{words} (column {place.rpartition(' ')[2].rstrip(')')})"


def _statements(text: str, file: str) -> Iterator[tuple[int, str]]:
    """Yield (line number, text up to ``=`` or the whole header) of every statement, checking depth on the way."""
    line, begin, start_line, depth, dots = 1, 0, 1, 0, 0
    head: str | None = None
    at = 0
    while at < len(text):
        c = text[at]
        if c in "\"'":
            at, lines = _skip_string(text, at)
            line += lines
            continue
        if c == "#":
            end = text.find("\n", at)
            if head is None:
                head = text[begin:at]
            at = len(text) if end < 0 else end
            continue
        depth += (c in "[{") - (c in "]}")
        dots = 0 if c in "=,[]{}\n" else dots + (c == ".")
        if depth > DEEPEST or dots >= DEEPEST:
            raise SurveyError(
                Problem(f"nested deeper than {DEEPEST} levels", "the survey needs 3", "", file=file, line=str(line))
            )
        if c == "=" and depth == 0 and head is None:
            head = text[begin:at]
        if c == "\n":
            if depth <= 0:
                yield start_line, text[begin:at] if head is None else head
                begin, start_line, head, depth = at + 1, line + 1, None, 0
            line += 1
        at += 1
    yield start_line, text[begin:] if head is None else head


def _skip_string(text: str, at: int) -> tuple[int, int]:
    """Return the place after the string that starts at ``at`` and the number of line ends in it."""
    quote = text[at]
    if text.startswith(quote * 3, at):
        end = at + 3
        while end < len(text) and not text.startswith(quote * 3, end):
            end += 2 if quote == '"' and text[end] == "\\" else 1
        end = min(end + 3, len(text))
        while end < len(text) and text[end] == quote:  # one or two quotes may stand before the closing three
            end += 1
        return end, text.count("\n", at, end)
    end = at + 1
    while end < len(text) and text[end] not in (quote, "\n"):
        end += 2 if quote == '"' and text[end] == "\\" else 1
    end = min(end, len(text))
    return (end, 0) if end < len(text) and text[end] == "\n" else (min(end + 1, len(text)), 0)


def _key_parts(text: str) -> Place:
    """Split a dotted key; quoted parts lose their quotes."""
    parts, word, at = [], "", 0
    while at < len(text):
        if text[at] in "\"'":
            end, _ = _skip_string(text, at)
            word += text[at + 1 : end - 1]
            at = end
            continue
        if text[at] == ".":
            parts.append(word)
            word = ""
        elif not text[at].isspace():
            word += text[at]
        at += 1
    return (*parts, word)


def _places(statements: Sequence[tuple[int, str]]) -> dict[Place, int]:
    lines: dict[Place, int] = {}
    counts: dict[Place, int] = {}
    table: Place = ()
    for line, raw in statements:
        head = raw.strip()
        if not head:
            continue
        if head.startswith("["):
            names = _key_parts(head.strip("[] \t"))
            table = ()
            for i, name in enumerate(names):
                table = (*table, name)
                last = i == len(names) - 1
                if last and head.startswith("[["):
                    counts[table] = counts.get(table, -1) + 1
                if table in counts:
                    table = (*table, counts[table])
            lines.setdefault(table, line)
        else:
            path = table
            for name in _key_parts(head):
                path = (*path, name)
                lines.setdefault(path, line)
    return lines
