"""The line register: which file holds which line, and where that line ran (``lines.csv``).

Start and end are in walking order in the grid's local frame, so zigzag, partial and reversed lines need no other flag.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

from planum.errors import Problem, SurveyError, nearest
from planum.survey.config import Grid, SurveyConfig, name_or_complaint
from planum.survey.safety import inside, is_file, posix
from planum.survey.table import Row, read_sheet

__all__ = ["Register", "RegisterRow", "read_register"]

NEEDED = ("grid", "line", "file", "start_x_m", "start_y_m", "end_x_m", "end_y_m")
OPTIONAL = ("first_trace", "last_trace", "channel", "visit", "superseded_by", "note", "part", "radar")


@dataclass(frozen=True)
class RegisterRow:
    """One piece of one line. ``start`` and ``end`` are local m, in walking order; trace numbers are inclusive."""

    grid: str
    line: str
    file: str
    start: tuple[float, float]
    end: tuple[float, float]
    first_trace: int | None = None
    last_trace: int | None = None
    channel: int | None = None
    radar: str = ""
    visit: str = ""
    note: str = ""
    superseded_by: str = ""
    source: str = ""
    part: int | None = None

    @property
    def length_m(self) -> float:
        """Straight distance from start to end, m."""
        return float(((self.end[0] - self.start[0]) ** 2 + (self.end[1] - self.start[1]) ** 2) ** 0.5)


@dataclass
class Register:
    """Rows to work with, and what was wrong: errors stop the survey, the rest is told."""

    rows: list[RegisterRow] = field(default_factory=list)
    superseded: list[RegisterRow] = field(default_factory=list)
    errors: list[Problem] = field(default_factory=list)
    set_aside: list[Problem] = field(default_factory=list)
    notes: list[Problem] = field(default_factory=list)


def read_register(folder: Path, name: str, config: SurveyConfig, *, roots: Sequence[Path] = ()) -> Register:
    """Return the rows of a register that name the survey's grids.

    A row whose file is missing is set aside; every other mistake is an error. Nothing is raised.
    """
    found = Register()
    try:
        sheet = read_sheet(folder, name, needed=NEEDED, optional=OPTIONAL, roots=roots)
    except SurveyError as error:
        found.errors.extend(error.problems)
        return found
    own = [g for g in config.grid if g.files is None and posix(g.register_file or "lines.csv") == posix(name)]
    for row in sheet.rows:
        before = len(sheet.problems)
        entry = _entry(row, config, own)
        if len(sheet.problems) > before or entry is None:
            continue
        if entry.superseded_by:
            found.superseded.append(entry)
        else:
            keep_if_there(found, folder, entry, roots)
    if not sheet.rows and not sheet.problems:
        sheet.complain(None, "", f"{name} holds no lines", "one row per line under the row of column names")
    found.errors.extend(sheet.problems)
    found.notes.extend(_superseded(found))
    return found


def keep_if_there(found: Register, folder: Path, entry: RegisterRow, roots: Sequence[Path]) -> None:
    """Add a row to the work when its file is there, else set it aside."""
    file, _, line = entry.source.rpartition(" line ")
    try:
        path = inside(folder, entry.file, roots=roots)
    except SurveyError as error:
        found.errors.append(replace(error.problems[0], file=file, line=line, key="file"))
        return
    if is_file(path):
        found.rows.append(entry)
        return
    found.set_aside.append(
        Problem(
            f"line {entry.grid}/{entry.line} is set aside: {entry.file} is not there",
            "",
            _lookalike(path),
            file=file,
            line=line,
            key="file",
            severity="warning",
        )
    )


def _lookalike(path: Path) -> str:
    """Name a file of the same folder that differs in case only, or is nearly called the same."""
    try:
        names = [p.name for p in path.parent.iterdir()][:100_000]
    except OSError:
        return "the folder it should be in is not there"
    same = [n for n in names if n.casefold() == path.name.casefold()]
    if same:
        return f"there is {same[0]!r}: mind upper and lower case"
    return "copy it into the survey folder, or remove the row"


def _entry(row: Row, config: SurveyConfig, own: Sequence[Grid]) -> RegisterRow | None:
    """One row as a record; complaints go to the sheet, and then the record is not to be used."""
    grid = _grid(row, own)
    line = row.needed("line")
    if line and (complaint := name_or_complaint(line, longest=40)):
        row.sheet.complain(row, "line", f"the line {line!r} cannot be used in file names", complaint)
    x0, y0, x1, y1 = (row.number(column) for column in NEEDED[3:])
    first, last = row.index("first_trace"), row.index("last_trace")
    if first is not None and last is not None and last <= first:
        row.sheet.complain(
            row, "last_trace", f"last_trace {last} is not after first_trace {first}", "both count in the file, from 0"
        )
    if row.text("channel"):
        row.sheet.complain(
            row,
            "channel",
            "an antenna array (channel) is not supported yet",
            "",
            "give one line file and one row per channel, and leave the column empty",
        )
    file = row.needed("file")
    radar, visit = _radar(row, config, grid), _visit(row, config, grid)
    part = row.index("part")
    if x0 is None or y0 is None or x1 is None or y1 is None or grid is None or not file:
        return None
    entry = RegisterRow(
        grid=grid.name,
        line=line,
        file=posix(file),
        start=(x0, y0),
        end=(x1, y1),
        first_trace=first,
        last_trace=last,
        radar=radar,
        visit=visit,
        note=row.text("note"),
        superseded_by=row.text("superseded_by"),
        source=row.source,
        part=part,
    )
    if entry.length_m < 0.01:
        row.sheet.complain(row, "end_x_m", "start and end are the same place", "a line has a length")
    return entry


def _grid(row: Row, own: Sequence[Grid]) -> Grid | None:
    """Return the row's grid in any case; a blank cell is filled when there is only one."""
    word = row.text("grid")
    if not word and len(own) == 1:
        return own[0]
    if not row.needed("grid"):
        return None
    for grid in own:
        if grid.name.casefold() == word.casefold():
            return grid
    row.sheet.complain(
        row,
        "grid",
        f"no [[grid]] with this register is called {word!r}",
        nearest(word, {g.name for g in own}),
        "add a [[grid]] to survey.toml or mend the name",
    )
    return None


def _radar(row: Row, config: SurveyConfig, grid: Grid | None) -> str:
    word = row.text("radar") or (grid.radar if grid else "")
    names = [r.name for r in config.radar]
    if not word and len(names) == 1:
        return names[0]
    match = [n for n in names if n.casefold() == word.casefold()]
    if match:
        return match[0]
    if grid is not None:
        came = f"no [[radar]] is called {word!r}" if word else "the survey has several radars, and none is named"
        row.sheet.complain(row, "radar", came, nearest(word, names), "name it in this row or in the [[grid]]")
    return ""


def _visit(row: Row, config: SurveyConfig, grid: Grid | None) -> str:
    word = _iso(row.text("visit")) or (grid.visit if grid else "")
    if not word and len(config.visit) <= 1:
        return config.visit[0].name if config.visit else ""
    visit = config.visit_named(word)
    if visit is not None:
        return visit.name
    if grid is not None:
        names = [v.name for v in config.visit]
        came = f"no [[visit]] is called {word!r}" if word else "the survey has several visits, and none is named"
        allowed = nearest(word, names) if names else "none is listed in survey.toml"
        row.sheet.complain(row, "visit", came, allowed, "write its date as 2026-04-18, in this row or in the [[grid]]")
    return ""


def _iso(word: str) -> str:
    """``18.4.2026``, which spreadsheet programs make of a date, as 2026-04-18; anything else unchanged."""
    if parts := re.fullmatch(r"([0-9]{1,2})\.([0-9]{1,2})\.([0-9]{4})", word):
        try:
            return dt.date(int(parts[3]), int(parts[2]), int(parts[1])).isoformat()
        except ValueError:
            return word
    return word


def _superseded(found: Register) -> list[Problem]:
    """One note per row that another one replaces; a warning when that one is not there."""
    notes = []
    everything = [*found.rows, *found.superseded]
    for old in found.superseded:
        file, _, line = old.source.rpartition(" line ")
        word = old.superseded_by.casefold()
        there = any(
            new is not old and new.grid == old.grid and word in (new.line.casefold(), posix(new.file).casefold())
            for new in everything
        ) or any(new is not old and posix(old.superseded_by) == new.file for new in everything)
        came = f"line {old.grid}/{old.line} ({old.file}) is left out: superseded by {old.superseded_by!r}"
        if there:
            notes.append(Problem(came, file=file, line=line, key="superseded_by", severity="note"))
        else:
            notes.append(
                Problem(
                    came + ", which is no line and no file in this register",
                    "",
                    "mend the name, or clear the cell to use the line",
                    file,
                    line,
                    "superseded_by",
                    severity="warning",
                )
            )
    return notes
