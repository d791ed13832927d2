"""Where each grid lies: by its control points, or by the positions in its own line files."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from planum.cube.geometry import line_direction
from planum.errors import FrameError, Problem, SurveyError
from planum.pipeline.estimate import Line
from planum.records import Similarity
from planum.site.place import fit_similarity
from planum.survey.folder import Survey

__all__ = ["frame_warnings", "from_headers", "site_frames"]

LARGEST_RESIDUAL_M = 0.05
"""Residuals above it are told (common practice for grid pegs)."""
ODD_SCALE = 0.005
"""No projection and no honest tape changes lengths by more than this."""
LARGEST_BEND_M = 0.10
"""Header positions farther than this from a straight line are told: traces are gridded on their line's row."""


def site_frames(survey: Survey) -> dict[str, Similarity]:
    """Fit every grid to its own control points, or to the site grid's.

    Raises
    ------
    FrameError
        When points are missing or do not fit.
    """
    out = {}
    for grid in survey.config.grid:
        own = [c for c in survey.control if c.grid.casefold() == grid.name.casefold()]
        points = own if len(own) >= 2 else [c for c in survey.control if not c.grid]
        if not points:
            if survey.config.survey.crs and grid.positions == "register":
                raise FrameError(
                    Problem(
                        came=f"grid {grid.name} has no control points, and the survey names a crs",
                        allowed="at least two points with local and map coordinates",
                        do="add control.csv, or leave out crs to stay in the local frame",
                        file="control.csv",
                    )
                )
            out[grid.name] = Similarity()
            continue
        local = np.array([[c.local_x_m, c.local_y_m] for c in points])
        mapped = np.array([[c.easting_m, c.northing_m] for c in points])
        out[grid.name] = fit_similarity([c.point for c in points], local, mapped, grid=grid.name)
    return out


def frame_warnings(frames: Mapping[str, Similarity], survey: Survey) -> list[Problem]:
    """Tell what a fit cannot: handedness from two or collinear points, residuals and scales out of the ordinary."""
    problems = []
    for grid, frame in frames.items():
        points = [c for c in survey.control if c.point in dict(frame.residuals_m)]
        if not frame.residuals_m:
            continue
        local = np.array([[c.local_x_m, c.local_y_m] for c in points])
        spread = np.linalg.svd(local - local.mean(axis=0), compute_uv=False)
        worst, miss = max(frame.residuals_m, key=lambda pair: pair[1])
        for wrong, came, do in (
            (
                spread[-1] < 0.02 * spread[0],
                "the control points lie on one line: they do not tell to which hand y points",
                "add a point off that line; until then the map may be mirrored",
            ),
            (
                miss > LARGEST_RESIDUAL_M,
                f"point {worst} is {miss:.2f} m from where the fit puts it",
                "check its coordinates; the whole grid may be off by as much",
            ),
            (
                abs(frame.scale - 1.0) > ODD_SCALE,
                f"the control points ask for a scale of {frame.scale:.4f}",
                "check them and the tape: distances are changed by as much",
            ),
        ):
            if wrong:
                problems.append(Problem(came=came, do=do, file="control.csv", key=f"grid {grid}", severity="warning"))
    return problems


def from_headers(
    survey: Survey, lines: Sequence[Line], frames: Mapping[str, Similarity], warnings: list[Problem]
) -> tuple[list[Line], dict[str, Similarity]]:
    """Move the lines of grids with ``positions = "header"`` to where their files say they lie.

    Header positions are in the map frame (without a crs: in the local frame). A grid without control points gets a
    local frame of its own when its lines are oblique: x along the longest line, origin at its start. A line whose file
    carries no position keeps the register's, if the grid has control points to relate the two.

    Returns
    -------
    lines, frames
        With start and end in local metres, and the frames of all grids.

    Raises
    ------
    SurveyError
        When a line has neither header positions nor control points that would place it.
    """
    out, placed = list(lines), dict(frames)
    problems = []
    for grid in survey.config.grid:
        mine = [i for i, line in enumerate(out) if line.row.grid == grid.name] if grid.positions == "header" else []
        there = [i for i in mine if out[i].facts.first_xy is not None]
        if placed[grid.name].origin == "local frame":
            problems += [_nowhere(out[i]) for i in mine if i not in there]
            placed[grid.name] = _frame_along([out[i] for i in there])
        for i in there:
            out[i] = _moved(out[i], placed[grid.name])
            warnings += _bent(out[i])
    if problems:
        raise SurveyError(problems)
    return out, placed


def _frame_along(lines: Sequence[Line]) -> Similarity:
    """Return the identity when all lines run along x or y, else a frame turned to the longest line."""
    ends = [(line.facts.first_xy, line.facts.last_xy) for line in lines]
    known = [(a, b) for a, b in ends if a is not None and b is not None]
    if all(line_direction(a, b) for a, b in known):
        return Similarity(origin="header positions")
    start, end = max(known, key=lambda pair: math.dist(*pair))
    turn = math.atan2(end[1] - start[1], end[0] - start[0])
    turn -= math.pi * round(turn / math.pi)  # walked to or fro, x points the same way
    return Similarity(
        a=math.cos(turn), b=math.sin(turn), e0=start[0], n0=start[1], origin="header positions, x along the lines"
    )


def _moved(line: Line, frame: Similarity) -> Line:
    """Return the line with start and end of its own stretch of traces from the header positions."""
    facts, row = line.facts, line.row
    assert facts.first_xy is not None  # noqa: S101 - the caller chose these lines
    assert facts.last_xy is not None  # noqa: S101
    ends = np.column_stack(frame.inverse(*np.array([facts.first_xy, facts.last_xy]).T))
    n = max(1, facts.n_traces - 1)
    shares = (row.first_trace or 0) / n, (n if row.last_trace is None else row.last_trace) / n
    (x0, y0), (x1, y1) = (ends[0] + share * (ends[1] - ends[0]) for share in shares)
    return replace(line, row=replace(row, start=(float(x0), float(y0)), end=(float(x1), float(y1))), header=True)


def _bent(line: Line) -> list[Problem]:
    if line.facts.bend_m <= LARGEST_BEND_M:
        return []
    return [
        Problem(
            came=f"header positions leave the straight line by up to {line.facts.bend_m:.2f} m",
            allowed=f"{LARGEST_BEND_M:g} m: traces are gridded on their line's row",
            do="expect features there to be off by as much",
            file=line.row.file,
            line=line.row.line,
            severity="warning",
        )
    ]


def _nowhere(line: Line) -> Problem:
    return Problem(
        came="the file carries no position, and the grid has no control points",
        allowed='header positions, or positions = "register" with control.csv',
        do="remove the line from the register, or give the grid control points",
        file=line.row.file,
        line=line.row.line,
    )
