"""A survey folder, read whole: everything wrong with it is told at once."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from planum.errors import Problem, SurveyError
from planum.survey import toml_text
from planum.survey.checking import load_config
from planum.survey.config import Grid, Radar, SurveyConfig, Visit
from planum.survey.control import ControlPoint, read_control
from planum.survey.names import Names
from planum.survey.places import check_places, direction
from planum.survey.register import Register, RegisterRow, read_register
from planum.survey.safety import MOST_TOML_BYTES, inside, natural_key, read_text_capped
from planum.survey.short_form import expand

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
    problems: list[Problem] = []
    config = None
    try:
        config = load_config(text)
    except SurveyError as error:
        problems.extend(error.problems)
    problems.extend(_unsupported(folder))
    register = _registers(folder, config, text, roots)
    problems.extend(register.errors)
    problems.extend(check_places(register.rows))
    control: tuple[ControlPoint, ...] = ()
    if _there(folder / "control.csv"):
        try:
            control = read_control(folder, Names(config), roots=roots)
        except SurveyError as error:
            problems.extend(error.problems)
    if config is None or problems:
        raise SurveyError(problems)
    _check_work(config, register)
    place = {grid.name: i for i, grid in enumerate(config.grid)}
    return Survey(
        folder=folder,
        config=config,
        rows=tuple(sorted(register.rows, key=lambda row: (place[row.grid], *_order(row)))),
        control=control,
        warnings=tuple(register.notes),
        set_aside=tuple(register.set_aside),
        roots=tuple(Path(root) for root in roots),
    )


def _there(path: Path) -> bool:
    """Whether a name is taken, even by a link that leads nowhere."""
    try:
        return path.exists() or path.is_symlink()
    except (OSError, ValueError, RuntimeError):
        return True


def _survey_text(folder: Path, roots: Sequence[Path]) -> str:
    try:
        there = folder.is_dir()
    except (OSError, ValueError):
        there = False
    if not there:
        raise SurveyError(Problem(f"there is no folder {str(folder)!r}", "a survey folder holds survey.toml"))
    if not _there(folder / "survey.toml"):
        came = f"the folder {folder.name!r} holds no survey.toml"
        raise SurveyError(Problem(came, "each survey folder has one", "planum new drafts one", file="survey.toml"))
    return read_text_capped(folder, "survey.toml", most_bytes=MOST_TOML_BYTES, roots=roots)


def _unsupported(folder: Path) -> Iterator[Problem]:
    """Complain about files that would be silently ignored: not supported yet, or known in other letters."""
    try:
        paths = sorted(folder.iterdir())
    except OSError as error:
        yield Problem(f"the folder {folder.name!r} cannot be listed ({error.strerror})")
        return
    for path in paths:
        name = path.name.casefold()
        if name == "control.csv" != path.name:
            yield Problem(f"{path.name} is not read", "the name is control.csv", "rename it", file=path.name)
        if name not in NOT_YET:
            continue
        try:
            empty = path.is_dir() and not any(path.iterdir())
        except OSError:
            empty = False
        if not empty:
            do = "move it out of the survey folder to go on without it"
            yield Problem(f"not supported yet: {NOT_YET[name]} ({path.name})", "", do, file=path.name)


def _registers(folder: Path, config: SurveyConfig | None, text: str, roots: Sequence[Path]) -> Register:
    """Read every register once, expand every short form, and join what was found."""
    found = Register()
    if config is None:  # survey.toml is wrong: at least the cells of the usual register are checked
        if _there(folder / "lines.csv"):
            found.join(read_register(folder, "lines.csv", None, roots=roots))
        return found
    for name in dict.fromkeys(grid.register_name for grid in config.grid if grid.files is None):
        found.join(read_register(folder, name, config, roots=roots))
    if all(grid.files is None for grid in config.grid):
        return found
    _, places = toml_text.parse(text, file="survey.toml")
    for i, grid in enumerate(config.grid):
        if grid.files is not None:
            source = f"survey.toml line {places.line(('grid', i, 'files'))}"
            found.join(expand(folder, config, grid, source=source, roots=roots))
    return found


def _check_work(config: SurveyConfig, register: Register) -> None:
    """Raise for a grid no row names, and for a survey without any line left to work on."""
    problems = []
    for grid in config.grid:
        if grid.name not in register.named:
            where = grid.files or grid.register_name
            came = f"grid {grid.name!r} has no line in {where}"
            problems.append(Problem(came, "each grid has lines", "", file="survey.toml", key=f"grid[{grid.name}]"))
    if not register.rows and not problems:
        came = "no line is left to work on"
        problems = [Problem(came, "at least one line with its file", file="survey.toml"), *register.set_aside]
    if problems:
        raise SurveyError(problems)


def _order(row: RegisterRow) -> tuple[Any, ...]:
    along = 0 if direction(row) == "x" else 1
    return natural_key(row.line), row.radar, row.visit, min(row.start[along], row.end[along]), natural_key(row.source)
