"""The line register: which file holds which line, and where that line ran (``lines.csv``).

Start and end are in walking order in the grid's local frame, so zigzag, partial and reversed lines need no other flag.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from planum.errors import Problem, Severity, SurveyError, printable
from planum.survey.config import SurveyConfig, name_or_complaint
from planum.survey.names import Names
from planum.survey.safety import inside, is_file, posix
from planum.survey.table import Row, read_sheet

__all__ = ["Register", "RegisterRow", "read_register"]

NEEDED = ("grid", "line", "file", "start_x_m", "start_y_m", "end_x_m", "end_y_m")
OPTIONAL = ("first_trace", "last_trace", "channel", "visit", "superseded_by", "note", "part", "radar")
SHORTEST_M = 0.01
MOST_LOOKED_FOR = 50
"""Missing files for which the folder is searched for a name in other letters."""


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
        return math.hypot(self.end[0] - self.start[0], self.end[1] - self.start[1])

    def problem(self, key: str, came: str, allowed: str = "", do: str = "", severity: Severity = "error") -> Problem:
        """Return a problem of this row, with its file and line."""
        file, _, line = self.source.rpartition(" line ")
        return Problem(came, allowed, do, file, line, key, severity=severity)


@dataclass
class Register:
    """Rows to work with, and what was wrong: errors stop the survey, the rest is told."""

    rows: list[RegisterRow] = field(default_factory=list)
    superseded: list[RegisterRow] = field(default_factory=list)
    errors: list[Problem] = field(default_factory=list)
    set_aside: list[Problem] = field(default_factory=list)
    notes: list[Problem] = field(default_factory=list)
    named: set[str] = field(default_factory=set)
    """Grids that have a row at all, whatever became of it."""

    def take(self, entry: RegisterRow, folder: Path, roots: Sequence[Path]) -> None:
        """Add a row to the work when its file is there, else set it aside."""
        self.named.add(entry.grid)
        try:
            path = inside(folder, entry.file, roots=roots)
        except SurveyError as error:
            why = error.problems[0]
            self.errors.append(entry.problem("file", why.came, why.allowed, why.do))
            return
        if is_file(path):
            self.rows.append(entry)
            return
        came = f"line {entry.grid}/{entry.line} is set aside: {entry.file} is not there"
        do = _lookalike(path) if len(self.set_aside) < MOST_LOOKED_FOR else ""
        self.set_aside.append(entry.problem("file", came, "", do, "warning"))

    def join(self, other: Register) -> None:
        """Add what another register found."""
        for name in ("rows", "superseded", "errors", "set_aside", "notes"):
            getattr(self, name).extend(getattr(other, name))
        self.named |= other.named


def read_register(folder: Path, name: str, config: SurveyConfig | None, *, roots: Sequence[Path] = ()) -> Register:
    """Return the rows of a register that name the survey's grids.

    A row whose file is missing is set aside; every other mistake is an error. Nothing is raised. Without ``config``
    only the cells are checked.
    """
    found = Register()
    try:
        sheet = read_sheet(folder, name, needed=NEEDED, optional=OPTIONAL, roots=roots)
    except SurveyError as error:
        found.errors.extend(error.problems)
        return found
    own = [g for g in (config.grid if config else ()) if g.files is None and g.register_name == posix(name)]
    names = Names(config, own)
    for row in sheet.rows:
        if sheet.full():
            break
        before = len(sheet.problems)
        entry = _entry(row, names)
        if len(sheet.problems) > before or entry is None:
            continue
        if entry.superseded_by:
            found.named.add(entry.grid)
            found.superseded.append(entry)
        else:
            found.take(entry, folder, roots)
    if not sheet.rows and not sheet.problems:
        sheet.complain(None, "", f"{name} holds no lines", "one row per line under the row of column names")
    found.errors.extend(sheet.problems)
    found.notes.extend(_superseded(found))
    return found


def _lookalike(path: Path) -> str:
    """Say whether a file of the same folder differs in case only."""
    try:
        same = [p.name for p in path.parent.iterdir() if p.name.casefold() == path.name.casefold()]
    except OSError:
        return "the folder it should be in is not there"
    if same:
        return f"there is {same[0]!r}: mind upper and lower case"
    return "copy it into the survey folder, or remove the row"


def _entry(row: Row, names: Names) -> RegisterRow | None:
    """One row as a record; complaints go to the sheet, and then the record is not to be used."""
    grid = names.grid(row)
    line, file = row.needed("line"), row.needed("file")
    if line and (complaint := name_or_complaint(line, longest=40)):
        row.sheet.complain(row, "line", f"the line {line!r} cannot be used in file names", complaint)
    x0, y0, x1, y1 = (row.number(column) for column in NEEDED[3:])
    first, last = row.index("first_trace"), row.index("last_trace")
    if last is not None and last <= (first or 0):
        came = f"last_trace {last} is not after first_trace {first or 0}"
        row.sheet.complain(row, "last_trace", came, "both count from the file's first trace, 0")
    if row.text("channel"):
        came = "not supported yet: an antenna array (channel)"
        row.sheet.complain(row, "channel", came, "", "give one file and one row per channel, and leave the cell empty")
    radar, visit, part = names.radar(row, grid), names.visit(row, grid), row.index("part")
    if x0 is None or y0 is None or x1 is None or y1 is None:
        return None
    if math.hypot(x1 - x0, y1 - y0) < SHORTEST_M:
        row.sheet.complain(row, "end_x_m", "start and end are the same place", "a line has a length")
    if grid is None or not file:
        return None
    return RegisterRow(
        grid=grid.name,
        line=line,
        file=posix(file),
        start=(x0, y0),
        end=(x1, y1),
        first_trace=first,
        last_trace=last,
        radar=radar,
        visit=visit,
        note=printable(row.text("note"), longest=1000),
        superseded_by=row.text("superseded_by"),
        source=row.source,
        part=part,
    )


def _superseded(found: Register) -> list[Problem]:
    """Return one note per row that another one replaces; a warning when that one is not there."""
    known: Counter[tuple[str, str]] = Counter()
    for row in (*found.rows, *found.superseded):
        known.update({(row.grid, row.line.casefold()), (row.grid, row.file.casefold())})
    notes = []
    for old in found.superseded:
        word = (old.grid, posix(old.superseded_by).casefold())
        itself = word[1] in (old.line.casefold(), old.file.casefold())
        there = known[word] > (1 if itself else 0)
        came = f"line {old.grid}/{old.line} ({old.file}) is left out: superseded by {old.superseded_by!r}"
        if there:
            notes.append(old.problem("superseded_by", came, severity="note"))
            continue
        came += ", which is no line and no file in this register"
        do = "mend the name, or clear the cell to use the line"
        notes.append(old.problem("superseded_by", came, "", do, "warning"))
    return notes
