"""Tables typed by people and saved by spreadsheet programs: separators, decimal commas, encodings, blank rows.

Read are ``,`` ``;`` and tab as separator, a decimal point or comma, quoted cells, a ``sep=`` line, column names in any
case with blanks for ``_``, UTF-8, UTF-16 and Windows-1252. Every bad cell is a Problem with its line and column.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from planum.errors import Problem, SurveyError, nearest
from planum.survey.safety import MOST_TABLE_BYTES, read_text_capped

__all__ = ["Row", "Sheet", "read_sheet"]

_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]{1,3})?")
_GROUPED = re.compile(r"[+-]?[0-9]{1,3}([ '][0-9]{3})+(?![0-9])")
_LARGEST = 1e9
MOST_PROBLEMS = 300
_AND_MORE = "more problems are not listed"


@dataclass
class Sheet:
    """A table of text cells with the problems met while its cells are asked for."""

    file: str
    rows: list[Row] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    decimal: str = "."

    def full(self) -> bool:
        """Whether there are so many problems that more would not help; says so once."""
        if len(self.problems) >= MOST_PROBLEMS and self.problems[-1].came != _AND_MORE:
            self.problems.append(Problem(_AND_MORE, "", "mend the first ones and try again", file=self.file))
        return len(self.problems) >= MOST_PROBLEMS

    def complain(self, row: Row | None, column: str, came: str, allowed: str = "", do: str = "") -> None:
        """Keep a problem of one cell."""
        line = str(row.line) if row is not None else ""
        self.problems.append(Problem(came, allowed, do, file=self.file, line=line, key=column))


@dataclass(frozen=True)
class Row:
    """One row: its line in the file (1-based) and its cells by column name."""

    sheet: Sheet
    line: int
    cells: Mapping[str, str]

    @property
    def source(self) -> str:
        """File and line for people."""
        return f"{self.sheet.file} line {self.line}"

    def text(self, column: str) -> str:
        """Return a cell, "" when the column is not there."""
        return self.cells.get(column, "")

    def needed(self, column: str) -> str:
        """Return a cell and complain when it is empty."""
        value = self.text(column)
        if not value:
            self.sheet.complain(self, column, f"{column} is empty", "each row needs it")
        return value

    def number(self, column: str, *, needed: bool = True) -> float | None:
        """Return a finite number; None, with a complaint, where the cell holds none."""
        raw = self.needed(column) if needed else self.text(column)
        if not raw:
            return None
        plain = _plain_number(raw)
        if re.search(r"[0-9],[0-9]|,[0-9]", plain):
            if self.sheet.decimal == "both":
                self.sheet.complain(
                    self,
                    column,
                    f"{column} is {raw!r}, and other cells use a decimal point",
                    "one decimal mark in the whole file",
                    "write all numbers without separators of thousands",
                )
                return None
            plain = plain.replace(",", ".", 1)
        value = float(plain) if _NUMBER.fullmatch(plain) else math.nan
        if not math.isfinite(value) or abs(value) > _LARGEST:
            self.sheet.complain(
                self, column, f"{column} is {raw!r}", f"a finite number up to {_LARGEST:.0e}, without unit"
            )
            return None
        return value

    def index(self, column: str) -> int | None:
        """Return a whole number from 0 on, or None for an empty cell; complain about anything else."""
        raw = self.text(column)
        if not raw:
            return None
        if not re.fullmatch(r"[0-9]{1,9}([.,]0*)?", raw):
            self.sheet.complain(self, column, f"{column} is {raw!r}", "a whole number, counted from 0")
            return None
        return int(re.split(r"[.,]", raw)[0])


def _plain_number(raw: str) -> str:
    """Minus signs and thousands' blanks as typed by spreadsheet programs made plain."""
    plain = raw.replace("\u2212", "-").replace("\u2013", "-")
    plain = re.sub("[\u00a0\u202f\u2009]", " ", plain).replace("\u2019", "'").strip()
    return re.sub("[ ']", "", plain) if _GROUPED.match(plain) else plain


def read_sheet(
    folder: Path, name: str, *, needed: Sequence[str], optional: Sequence[str], roots: Sequence[Path] = ()
) -> Sheet:
    """Return the rows of a table; problems of its head and its quoting are in ``Sheet.problems``.

    Raises
    ------
    SurveyError
        When the file cannot be read as text, or its head is not that of the table.
    """
    text = read_text_capped(folder, name, most_bytes=MOST_TABLE_BYTES, roots=roots)
    sheet = Sheet(name)
    lines = text.split("\n")
    first = next((i for i, line in enumerate(lines) if line.strip(' ;,\t"')), None)
    if first is not None and (declared := re.fullmatch(r'"?sep=(.)"?[;,\t]*', lines[first], re.IGNORECASE)):
        first = next((i for i, line in enumerate(lines) if i > first and line.strip(' ;,\t"')), None)
    else:
        declared = None
    if first is None:
        raise SurveyError(
            Problem(f"{name} is empty", "the first row names the columns: " + ",".join(needed), file=name)
        )
    mark = declared[1] if declared else _separator(lines[first], {*needed, *optional})
    records = _records(sheet, lines, first, mark)
    try:
        _, head = next(records)
    except StopIteration:
        raise SurveyError(sheet.problems) from None
    columns = _columns(sheet, head, first + 1, needed, optional)
    for line, cells in records:
        if any(cells):
            sheet.rows.append(_row(sheet, line, columns, cells, mark))
    sheet.decimal = _decimal_mark(sheet.rows)
    return sheet


def _separator(head: str, known: set[str]) -> str:
    def hits(mark: str) -> int:
        return sum(_column_name(cell) in known for cell in head.replace('"', "").split(mark))

    return max(",;\t", key=lambda mark: (hits(mark), head.count(mark)))


def _column_name(cell: str) -> str:
    return re.sub(r"[\s_-]+", "_", cell.strip().casefold()).replace("(m)", "m")


def _records(sheet: Sheet, lines: Sequence[str], first: int, mark: str) -> Iterator[tuple[int, list[str]]]:
    """Yield (line number, stripped cells); a quote that is never closed ends the table with a problem."""
    reader = csv.reader((line + "\n" for line in lines[first:]), delimiter=mark, strict=True)
    line = first + 1
    while True:
        try:
            cells = next(reader)
        except StopIteration:
            return
        except csv.Error as error:
            sheet.problems.append(
                Problem(f"the row cannot be split: {error}", "quotes come in pairs", file=sheet.file, line=str(line))
            )
            return
        yield line, [cell.strip().strip("\u00a0") for cell in cells]
        line = first + 1 + reader.line_num


def _columns(sheet: Sheet, head: Sequence[str], line: int, needed: Sequence[str], optional: Sequence[str]) -> list[str]:
    """Return the column names; unknown, doubled and missing ones raise together."""
    known, names, problems = [*needed, *optional], [_column_name(cell) for cell in head], []
    for i, name in enumerate(names):
        if name and name not in known:
            said = nearest(name, known)
            problems.append(Problem(f"unknown column {head[i]!r}", said, "", sheet.file, str(line), name))
        elif name and name in names[:i]:
            problems.append(Problem(f"the column {name!r} stands twice", "once", "", sheet.file, str(line), name))
    for name in needed:
        if name not in names:
            wanted = "needed: " + ",".join(needed)
            problems.append(
                Problem(f"the column {name!r} is missing", wanted, file=sheet.file, line=str(line), key=name)
            )
    if problems:
        raise SurveyError(problems)
    return names


def _row(sheet: Sheet, line: int, columns: Sequence[str], cells: Sequence[str], mark: str) -> Row:
    row = Row(sheet, line, {name: cell for name, cell in zip(columns, cells, strict=False) if name})
    extra = [c for c in cells[len(columns) :] if c] + [
        c for name, c in zip(columns, cells, strict=False) if not name and c
    ]
    if extra:
        hint = "a decimal comma in a table separated by commas? Use ; or quotes" if mark == "," else ""
        sheet.complain(row, "", f"the row has more cells than columns: {extra[0]!r}", f"{len(columns)} columns", hint)
    return row


def _decimal_mark(rows: Sequence[Row]) -> str:
    """``.``, ``,`` or ``both``, from all cells that are numbers of metres."""
    points = commas = False
    for row in rows:
        for name, cell in row.cells.items():
            if name.endswith("_m"):
                points |= "." in cell
                commas |= "," in cell
    return "both" if points and commas else "," if commas else "."
