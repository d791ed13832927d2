"""What the rows of a grid must agree on: one direction, parallel to a local axis, each place recorded once."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterator, Sequence

from planum.errors import Problem
from planum.survey.register import RegisterRow

__all__ = ["check_places", "direction"]

OFF_AXIS_M = 0.05
OFF_AXIS_SHARE = 0.01
"""A line may leave its axis by 5 cm (the reading error of a tape) or 1 % of its length, whichever is more."""
OVERLAP_M = 0.10
OVERLAP_SHARE = 0.05
"""Pieces of one line may overlap by 10 cm or 5 % of the shorter one: nobody stops on the centimetre."""


def direction(row: RegisterRow) -> str:
    """Return the local axis a line runs along, "x" or "y", or "" when it is parallel to neither."""
    dx, dy = abs(row.end[0] - row.start[0]), abs(row.end[1] - row.start[1])
    if min(dx, dy) > max(OFF_AXIS_M, OFF_AXIS_SHARE * row.length_m):
        return ""
    return "x" if dx >= dy else "y"


def check_places(rows: Sequence[RegisterRow]) -> list[Problem]:
    """Return what does not fit between the rows of a survey; superseded rows are not among them."""
    problems: list[Problem] = []
    by_grid: dict[str, list[RegisterRow]] = defaultdict(list)
    for row in rows:
        if direction(row):
            by_grid[row.grid].append(row)
        else:
            problems.append(
                row.problem(
                    "end_x_m",
                    f"line {row.grid}/{row.line} is not parallel to local x or y",
                    "not supported yet: lines at an angle to the local axes",
                    "turn the local frame of this grid",
                )
            )
    for grid, own in by_grid.items():
        problems.extend(_one_direction(grid, own))
    problems.extend(_one_recording(rows))
    sets: dict[tuple[str, str, str, str], list[RegisterRow]] = defaultdict(list)
    for own in by_grid.values():
        for row in own:
            sets[row.grid, row.radar, row.visit, direction(row)].append(row)
    for members in sets.values():
        problems.extend(_one_place(members))
    return problems


def _one_direction(grid: str, rows: Sequence[RegisterRow]) -> Iterator[Problem]:
    first = rows[0]
    for row in rows:
        if direction(row) != direction(first):
            yield row.problem(
                "end_x_m",
                f"grid {grid} has lines along {direction(first)} (line {first.line}) and along {direction(row)}"
                f" (line {row.line})",
                "not supported yet: two directions in one grid",
                "give each direction its own [[grid]]",
            )
            return


def _one_recording(rows: Sequence[RegisterRow]) -> Iterator[Problem]:
    """Complain about traces of a file that stand in two rows."""
    by_file: dict[tuple[str, int | None, int | None], list[RegisterRow]] = defaultdict(list)
    for row in rows:
        by_file[row.file, row.part, row.channel].append(row)

    def last(row: RegisterRow) -> float:
        return math.inf if row.last_trace is None else row.last_trace

    for own in by_file.values():
        ordered = sorted(own, key=lambda r: (r.first_trace or 0, last(r)))
        furthest = ordered[0]
        for row in ordered[1:]:
            if (row.first_trace or 0) <= last(furthest):
                yield row.problem(
                    "file",
                    f"{row.file} is already used for line {furthest.grid}/{furthest.line} ({furthest.source})",
                    "the same traces stand in one row only",
                    "mend the file name, or tell the pieces apart by first_trace and last_trace, or by part",
                )
            furthest = max(furthest, row, key=last)


def _one_place(rows: Sequence[RegisterRow]) -> Iterator[Problem]:
    """Complain about pieces of a line that lie apart, and about places recorded twice, in one set."""
    along = 0 if direction(rows[0]) == "x" else 1

    def across(row: RegisterRow) -> float:
        return (row.start[1 - along] + row.end[1 - along]) / 2

    def extent(row: RegisterRow) -> tuple[float, float]:
        return min(row.start[along], row.end[along]), max(row.start[along], row.end[along])

    lines: dict[str, list[RegisterRow]] = defaultdict(list)
    places: dict[int, list[RegisterRow]] = defaultdict(list)
    for row in rows:
        lines[row.line.casefold()].append(row)
        places[round(across(row) * 1000)].append(row)
    for own in lines.values():
        for row in own[1:]:
            if abs(across(row) - across(own[0])) > 2 * OFF_AXIS_M:
                yield row.problem(
                    "line",
                    f"line {row.grid}/{row.line} stands at {across(own[0]):g} m and at {across(row):g} m",
                    "the pieces of a line lie in one row",
                    "mend the line's number or its place",
                )
    for own in places.values():
        ordered = sorted(own, key=extent)
        furthest = ordered[0]
        for row in ordered[1:]:
            shared = min(extent(furthest)[1], extent(row)[1]) - extent(row)[0]
            if shared > max(OVERLAP_M, OVERLAP_SHARE * min(furthest.length_m, row.length_m)):
                same = row.line.casefold() == furthest.line.casefold()
                other = "its other piece" if same else f"line {furthest.line}"
                yield row.problem(
                    "line",
                    f"line {row.grid}/{row.line} covers {shared:.2f} m of {other} ({furthest.source})",
                    "each place is recorded once per radar and visit",
                    "put the number of the good line in superseded_by of the other, or mend the places",
                )
            furthest = max(furthest, row, key=lambda r: extent(r)[1])
