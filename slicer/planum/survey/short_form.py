"""The short form of a grid: a file pattern with the spacing and length of its lines, expanded to register rows."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from itertools import pairwise
from pathlib import Path

from planum.errors import Problem, Severity, SurveyError
from planum.survey.config import MOST_LINES, Grid, SurveyConfig
from planum.survey.register import Register, RegisterRow
from planum.survey.safety import inside, is_file, posix

__all__ = ["expand"]


def expand(folder: Path, config: SurveyConfig, grid: Grid, *, source: str, roots: Sequence[Path] = ()) -> Register:
    """Return the rows of a grid given in the short form; a missing number leaves a gap. Nothing is raised.

    ``source`` says where the pattern stands, such as ``survey.toml line 12``.
    """
    found = Register()
    file, _, line = source.rpartition(" line ")

    def note(key: str, came: str, do: str = "", *, severity: Severity = "error") -> None:
        problem = Problem(came, "", do, file, line, f"grid[{grid.name}].{key}", severity=severity)
        (found.errors if severity == "error" else found.notes).append(problem)

    found.named.add(grid.name)
    try:
        there = _numbered(folder, posix(grid.files or ""), roots)
    except SurveyError as error:
        note("files", error.problems[0].came, error.problems[0].do)
        return found
    first = 1 if grid.first_line is None else grid.first_line
    last = _last(grid, first, there)
    if not any(first <= n <= last for n in there):
        note("files", f"no file fits {grid.files!r} from line {first} on", "mend the pattern, or copy the files")
        return found
    if last - first >= MOST_LINES:
        note(
            "files", f"files of {grid.name!r} are numbered up to {last}", f"give last_line: at most {MOST_LINES} lines"
        )
        return found
    radar, visit = (_only(config, kind, grid) for kind in ("radar", "visit"))
    for kind, name, several in (("radar", radar, config.radar), ("visit", visit, config.visit)):
        if not name and several:
            note(kind, f"the survey has several {kind}s, and the grid {grid.name!r} names none", f"add {kind} = ...")
    if found.errors:
        return found
    if grid.walk is None:
        came = "walk is not stated: every line is taken to start at the baseline (one-way)"
        note("walk", came, 'give walk = "one-way" or "zigzag"', severity="note")
    for gap in _gaps([first - 1, *(n for n in sorted(there) if first <= n <= last), last + 1]):
        note("files", f"no file fits {grid.files!r} for {gap}: a gap stays", severity="note")
    for number in sorted(n for n in there if first <= n <= last):
        start, end = _ends(grid, number - first)
        row = RegisterRow(grid.name, str(number), there[number], start, end, radar=radar, visit=visit, source=source)
        found.take(row, folder, roots)
    return found


def _last(grid: Grid, first: int, there: dict[int, str]) -> int:
    if grid.last_line is not None:
        return grid.last_line
    return max(there, default=first) if grid.line_count is None else first + grid.line_count - 1


def _gaps(numbers: Sequence[int]) -> Iterator[str]:
    for a, b in pairwise(numbers):
        if b - a == 2:
            yield f"line {a + 1}"
        elif b - a > 2:
            yield f"lines {a + 1} to {b - 1}"


def _only(config: SurveyConfig, kind: str, grid: Grid) -> str:
    """Return the name of a grid's radar or visit, filled in when there is only one; "" when it is not clear."""
    if kind == "radar":
        return grid.radar or (config.radar[0].name if len(config.radar) == 1 else "")
    if grid.visit:
        visit = config.visit_named(grid.visit)
        return visit.name if visit else ""
    return config.visit[0].name if len(config.visit) == 1 else ""


def _numbered(folder: Path, pattern: str, roots: Sequence[Path]) -> dict[int, str]:
    """Return the files that fit a pattern by their number; leading zeros do not matter.

    Raises
    ------
    SurveyError
        When the pattern leaves the folder, or two files have one number.
    """
    inside(folder, pattern.replace("{line}", "1"), roots=roots)
    parent, _, name = pattern.rpartition("/")
    where = inside(folder, parent or ".", roots=roots)
    before, _, after = name.partition("{line}")
    shape = re.compile(re.escape(before) + r"([0-9]{1,6})" + re.escape(after))
    try:
        names = sorted(p.name for p in where.iterdir() if shape.fullmatch(p.name) and is_file(p))
    except OSError as error:
        raise SurveyError(Problem(f"the folder {parent!r} of files cannot be listed ({error.strerror})")) from error
    found: dict[int, str] = {}
    for file in names:
        number = int(file[len(before) : len(file) - len(after)])
        if number in found:
            came = f"{found[number]!r} and {file!r} are both line {number}"
            raise SurveyError(Problem(came, "one file per line", "move one of them away"))
        found[number] = posix(f"{parent}/{file}" if parent else file)
    return found


def _ends(grid: Grid, steps: int) -> tuple[tuple[float, float], tuple[float, float]]:
    """Return start and end of the line ``steps`` numbers after the first, in walking order."""
    # rounded to the micrometre: 3 × 0.1 is not 0.3, and registers are compared by place
    across = round((grid.first_line_m or 0.0) + steps * (grid.line_spacing_m or 0.0), 6)
    near, far = (0.0, across), (grid.line_length_m or 0.0, across)
    if grid.along == "y":
        near, far = (near[1], near[0]), (far[1], far[0])
    back = (grid.first_walk == "-") != (grid.walk == "zigzag" and steps % 2 == 1)
    return (far, near) if back else (near, far)
