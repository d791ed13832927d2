"""A survey folder, read whole: everything wrong with it is told at once."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from planum.errors import Problem, SurveyError
from planum.survey.checking import load_config
from planum.survey.config import MOST_LINES, Grid, Radar, SurveyConfig, Visit
from planum.survey.control import ControlPoint, read_control
from planum.survey.places import check_places
from planum.survey.register import Register, RegisterRow, keep_if_there, read_register
from planum.survey.safety import MOST_TOML_BYTES, inside, is_file, natural_key, posix, read_text_capped

__all__ = ["Survey", "read_survey"]

NOT_YET = {
    "obstacles.geojson": "obstacles",
    "elevation.csv": "the ground surface",
    "elevation.tif": "the ground surface",
    "elevation.tiff": "the ground surface",
    "channels.csv": "antenna arrays",
    "marks": "distance marks",
    "tracks": "tracks of moving positions",
}
"""Files of the survey contract this version cannot use yet: refused by name, never ignored."""


@dataclass(frozen=True)
class Survey:
    """What the crew wrote down, checked. ``rows`` are in natural order: grid, line, then along the line.

    ``set_aside`` holds a warning for each register row that cannot be worked on; ``warnings`` the rest worth telling.
    """

    folder: Path
    config: SurveyConfig
    rows: tuple[RegisterRow, ...]
    control: tuple[ControlPoint, ...] = ()
    warnings: tuple[Problem, ...] = ()
    set_aside: tuple[Problem, ...] = ()
    roots: tuple[Path, ...] = field(default=(), compare=False)

    def path(self, row: RegisterRow) -> Path:
        """Return the resolved path of a row's file, checked again to be inside the folder or a root.

        Raises
        ------
        SurveyError
            When the path leaves them.
        """
        return inside(self.folder, row.file, roots=self.roots)

    def grid(self, row: RegisterRow) -> Grid:
        """Return the row's ``[[grid]]``."""
        return self.config.grid_named(row.grid)

    def radar(self, row: RegisterRow) -> Radar:
        """Return the row's ``[[radar]]``."""
        return self.config.radar_named(row.radar)

    def visit(self, row: RegisterRow) -> Visit | None:
        """Return the row's ``[[visit]]``; None in a survey that lists none."""
        return self.config.visit_named(row.visit)


def read_survey(folder: Path, *, roots: Sequence[Path] = ()) -> Survey:
    """Return a survey folder, checked; line files are not opened.

    Parameters
    ----------
    folder
        Holds ``survey.toml``, the registers it names and, where there is one, ``control.csv``.
    roots
        Further folders in which line files may lie; named by the user, never by a file.

    Raises
    ------
    SurveyError
        With all problems found. A missing line file is no such problem: its row is in ``Survey.set_aside``.
    """
    folder = Path(folder)
    text = _survey_text(folder, roots)
    problems = list(_unsupported(folder))
    try:
        config = load_config(text)
    except SurveyError as error:
        raise SurveyError([*error.problems, *problems]) from error
    register = _registers(folder, config, roots)
    problems.extend(register.errors)
    problems.extend(check_places(register.rows))
    control: tuple[ControlPoint, ...] = ()
    if (folder / "control.csv").exists() or (folder / "control.csv").is_symlink():
        try:
            control = read_control(folder, config, roots=roots)
        except SurveyError as error:
            problems.extend(error.problems)
    if not problems:
        problems.extend(_empty_grids(config, register))
    if problems:
        raise SurveyError(problems)
    return Survey(
        folder=folder,
        config=config,
        rows=tuple(sorted(register.rows, key=lambda row: _order(config, row))),
        control=control,
        warnings=tuple(register.notes),
        set_aside=tuple(register.set_aside),
        roots=tuple(Path(root) for root in roots),
    )


def _survey_text(folder: Path, roots: Sequence[Path]) -> str:
    try:
        there = folder.is_dir()
    except (OSError, ValueError):
        there = False
    if not there:
        raise SurveyError(Problem(f"there is no folder {str(folder)!r}", "a survey folder holds survey.toml"))
    if not (folder / "survey.toml").exists() and not (folder / "survey.toml").is_symlink():
        raise SurveyError(
            Problem(
                f"{folder.name!r} holds no survey.toml",
                "a survey folder holds survey.toml",
                "planum new drafts one",
                file="survey.toml",
            )
        )
    return read_text_capped(folder, "survey.toml", most_bytes=MOST_TOML_BYTES, roots=roots)


def _unsupported(folder: Path) -> Iterator[Problem]:
    for name, what in NOT_YET.items():
        path = folder / name
        try:
            there = path.exists() and (not path.is_dir() or any(path.iterdir()))
        except OSError:
            there = True
        if there:
            yield Problem(
                f"{what} ({name}) are not supported yet"
                if what[-1] == "s"
                else f"{what} ({name}) is not supported yet",
                "",
                "move it out of the survey folder to go on without it",
                file=name,
            )


def _registers(folder: Path, config: SurveyConfig, roots: Sequence[Path]) -> Register:
    """Read every register once, expand every short form, and join what was found."""
    found = Register()
    names = dict.fromkeys(posix(g.register_file or "lines.csv") for g in config.grid if g.files is None)
    parts = [read_register(folder, name, config, roots=roots) for name in names]
    parts += [_short_form(folder, config, grid, roots) for grid in config.grid if grid.files is not None]
    for part in parts:
        found.rows.extend(part.rows)
        found.superseded.extend(part.superseded)
        found.errors.extend(part.errors)
        found.set_aside.extend(part.set_aside)
        found.notes.extend(part.notes)
    return found


def _empty_grids(config: SurveyConfig, register: Register) -> Iterator[Problem]:
    """Complain about a grid without any line left; what was set aside says why."""
    for grid in config.grid:
        if not any(row.grid == grid.name for row in register.rows):
            yield Problem(
                f"grid {grid.name!r} has no line to work on",
                "at least one line with its file",
                "see the lines set aside" if register.set_aside else "add its lines to the register",
                file="survey.toml",
                key=f"grid[{grid.name}]",
            )
            yield from register.set_aside


def _order(config: SurveyConfig, row: RegisterRow) -> tuple[object, ...]:
    grids = [g.name for g in config.grid]
    along = 0 if abs(row.end[0] - row.start[0]) >= abs(row.end[1] - row.start[1]) else 1
    return grids.index(row.grid), natural_key(row.line), row.radar, row.visit, row.start[along], row.source


def _short_form(folder: Path, config: SurveyConfig, grid: Grid, roots: Sequence[Path]) -> Register:
    """Rows of a grid given as a file pattern with spacing and length; a missing number leaves a gap."""
    found = Register()
    pattern = posix(grid.files or "")
    source = f"survey.toml grid[{grid.name}]"
    try:
        there = _numbered(folder, pattern, roots)
    except SurveyError as error:
        found.errors.extend(Problem(p.came, p.allowed, p.do, "survey.toml", "", source[12:]) for p in error.problems)
        return found
    first = 1 if grid.first_line is None else grid.first_line
    numbers = [n for n in there if n >= first]
    last = max(numbers, default=first)
    if grid.last_line is not None:
        last = grid.last_line
    elif grid.line_count is not None:
        last = first + grid.line_count - 1
    if last - first >= MOST_LINES:
        found.errors.append(
            Problem(
                f"files of {grid.name!r} are numbered up to {last}",
                f"at most {MOST_LINES} lines",
                "give last_line",
                "survey.toml",
                "",
                source[12:] + ".files",
            )
        )
        return found
    radar, visit = _only(config, grid, found)
    if grid.walk is None:
        found.notes.append(
            _note(grid, "walk", "walk is not stated: every line is taken to start at the baseline (one-way)")
        )
    for number in range(first, last + 1):
        if number not in there:
            name = pattern.replace("{line}", str(number))
            found.notes.append(_note(grid, "files", f"{name} is not there: line {number} stays a gap"))
            continue
        start, end = _ends(grid, number - first)
        row = RegisterRow(grid.name, str(number), there[number], start, end, radar=radar, visit=visit, source=source)
        keep_if_there(found, folder, row, roots)
    return found


def _note(grid: Grid, key: str, came: str) -> Problem:
    return Problem(came, file="survey.toml", key=f"grid[{grid.name}].{key}", severity="note")


def _only(config: SurveyConfig, grid: Grid, found: Register) -> tuple[str, str]:
    """Radar and visit of a grid, filled in when there is only one."""
    names = []
    for kind, tables, word in (("radar", config.radar, grid.radar), ("visit", config.visit, grid.visit)):
        if word:
            visit = config.visit_named(word) if kind == "visit" else None
            names.append(visit.name if visit else word)
        elif len(tables) > 1:
            came = f"the survey has several {kind}s, and the grid {grid.name!r} names none"
            found.errors.append(Problem(came, "", f"add {kind} = ...", "survey.toml", "", f"grid[{grid.name}].{kind}"))
            names.append("")
        else:
            names.append(tables[0].name if tables else "")
    return names[0], names[1]


def _numbered(folder: Path, pattern: str, roots: Sequence[Path]) -> dict[int, str]:
    """Files that fit a pattern by their number; leading zeros do not matter.

    Raises
    ------
    SurveyError
        When the pattern leaves the folder, or two files have one number.
    """
    parent, _, name = pattern.rpartition("/")
    where = inside(folder, parent or ".", roots=roots)
    before, _, after = name.partition("{line}")
    shape = re.compile(re.escape(before) + r"([0-9]{1,6})" + re.escape(after))
    found: dict[int, str] = {}
    try:
        names = sorted(p.name for p in where.iterdir() if is_file(p))
    except OSError as error:
        raise SurveyError(Problem(f"the folder {parent!r} of files cannot be listed ({error.strerror})")) from error
    for file in names:
        if fit := shape.fullmatch(file):
            number = int(fit[1])
            if number in found:
                raise SurveyError(
                    Problem(f"{found[number]!r} and {file!r} are both line {number}", "one file per line", "remove one")
                )
            found[number] = posix(f"{parent}/{file}" if parent else file)
    return found


def _ends(grid: Grid, steps: int) -> tuple[tuple[float, float], tuple[float, float]]:
    """Start and end of the line ``steps`` numbers after the first, in walking order."""
    across = (grid.first_line_m or 0.0) + steps * (grid.line_spacing_m or 0.0)
    near, far = (0.0, across), (grid.line_length_m or 0.0, across)
    if grid.along == "y":
        near, far = (near[1], near[0]), (far[1], far[0])
    back = (grid.first_walk == "-") != (grid.walk == "zigzag" and steps % 2 == 1)
    return (far, near) if back else (near, far)
