"""Control points: places known both in a local frame and on the map (``control.csv``)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from planum.errors import Problem, SurveyError, printable
from planum.survey.names import Names
from planum.survey.table import Row, read_sheet

__all__ = ["ControlPoint", "read_control"]

NEEDED = ("point", "local_x_m", "local_y_m", "easting_m", "northing_m")
OPTIONAL = ("elevation_m", "grid", "accuracy_m")


@dataclass(frozen=True)
class ControlPoint:
    """One point in a local frame (m) and on the map (m); ``grid`` "" means the site grid."""

    point: str
    local_x_m: float
    local_y_m: float
    easting_m: float
    northing_m: float
    elevation_m: float | None = None
    grid: str = ""
    accuracy_m: float | None = None
    source: str = ""


def read_control(
    folder: Path, names: Names, *, name: str = "control.csv", roots: Sequence[Path] = ()
) -> tuple[ControlPoint, ...]:
    """Return the control points of a survey, in the order of the file.

    Raises
    ------
    SurveyError
        With every bad cell, doubled point, unknown grid, and frame with fewer than two points.
    """
    sheet = read_sheet(folder, name, needed=NEEDED, optional=OPTIONAL, roots=roots)
    points: list[ControlPoint] = []
    seen: dict[tuple[str, str], int] = {}
    for row in sheet.rows:
        if sheet.full():
            break
        before = len(sheet.problems)
        point = _point(row, names)
        where = (point.grid, point.point.casefold())
        if point.point and where in seen:
            sheet.complain(
                row,
                "point",
                f"the point {point.point!r} stands twice, first in line {seen[where]}",
                "each point once per frame",
                "remove one row or rename the point",
            )
        seen.setdefault(where, row.line)
        if len(sheet.problems) == before:
            points.append(point)
    if not sheet.problems:
        sheet.problems.extend(_frames(points, name))
    if sheet.problems:
        raise SurveyError(sheet.problems)
    return tuple(points)


def _point(row: Row, names: Names) -> ControlPoint:
    x, y, east, north = (row.number(column) for column in NEEDED[1:])
    accuracy = row.number("accuracy_m", needed=False)
    if accuracy is not None and accuracy <= 0:
        row.sheet.complain(row, "accuracy_m", f"accuracy_m is {accuracy:g}", "a positive number of metres")
    grid = names.grid(row) if row.text("grid") else None
    return ControlPoint(
        point=printable(row.needed("point"), longest=60),
        local_x_m=x or 0.0,
        local_y_m=y or 0.0,
        easting_m=east or 0.0,
        northing_m=north or 0.0,
        elevation_m=row.number("elevation_m", needed=False),
        grid=grid.name if grid else "",
        accuracy_m=accuracy,
        source=row.source,
    )


def _frames(points: Sequence[ControlPoint], name: str) -> list[Problem]:
    problems = []
    frames = dict.fromkeys(p.grid for p in points)
    for grid in frames:
        own = [p for p in points if p.grid == grid]
        called = f"the grid {grid!r}" if grid else "the site grid"
        places = {(p.local_x_m, p.local_y_m) for p in own}
        if len(places) < 2:
            line = own[0].source.rpartition(" ")[2]
            problems.append(
                Problem(
                    f"{called} has control at {len(places)} place",
                    "a frame needs 2 places, better 4",
                    "measure more corners, or remove the row",
                    file=name,
                    line=line,
                    key="grid",
                )
            )
    if not frames:
        problems.append(Problem(f"{name} holds no points", "2 or more", "remove the file to stay local", file=name))
    return problems
