"""Where the lines of a set lie: direction, nominal spacing, rows, and the cube's regular axes."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np

from planum.errors import Problem, SurveyError
from planum.records import CubeGeometry, LineEntry

__all__ = [
    "ALONE_M",
    "OBLIQUE",
    "cube_geometry",
    "line_direction",
    "line_spacing",
    "place_rows",
    "set_direction",
    "trace_spacing",
]

Direction = Literal["x", "y"]

OBLIQUE = 0.1
"""Largest sideways drift of a straight line per metre along it (5.7 degrees): beyond it a line has no local axis."""

ALONE_M = 0.25
"""Width in m a single line stands for: it has no neighbour to measure a spacing from (common practice at 400 MHz)."""

_SAME_M = 0.01
"""Lines closer than 1 cm across are one line walked again: field tapes are read to the centimetre."""

_OFF_ROW = 0.1
"""Share of the line spacing by which a line may miss its row before it is reported."""

_OFF_GAP = 2 * _OFF_ROW
"""The same for the distance of two neighbours: both may miss their rows, in opposite ways."""

_TOLD_M = 0.01
"""Lines moved onto their rows by more than this are told: field tapes are read to the centimetre."""

_FAR_LINES_M, _FAR_TRACES_M = 5.0, 1.0
"""Spacings beyond which a survey of archaeology is more likely written in other units (common practice: 0.25 to 1 m
between lines, 1 to 10 cm between traces)."""

_FINER = 10.0
"""Most places on the along axis per recorded trace: between traces there is nothing to find, only memory to fill."""


def line_direction(start: Sequence[float], end: Sequence[float]) -> Direction | None:
    """Return the local axis a straight line runs along, or None when it is oblique.

    Parameters
    ----------
    start, end : (x, y) in local m
        The line runs along x when its ends differ in y by no more than a tenth (5.7 degrees) of what they differ in x.

    Returns
    -------
    "x", "y" or None
        None for an oblique line and for one whose ends coincide.
    """
    dx, dy = abs(end[0] - start[0]), abs(end[1] - start[1])
    if dx > 0 and dy <= OBLIQUE * dx:
        return "x"
    if dy > 0 and dx <= OBLIQUE * dy:
        return "y"
    return None


def set_direction(entries: Sequence[LineEntry]) -> Direction:
    """Return the local axis the lines of one set run along.

    Raises
    ------
    SurveyError
        Naming every line that is oblique, has no length, or runs across the others.
    """
    if not entries:
        raise SurveyError(Problem("a set without lines", allowed="at least one line"))
    found = [line_direction(e.start, e.end) for e in entries]
    common: Direction = "x" if found.count("x") >= found.count("y") else "y"
    problems = []
    for entry, way in zip(entries, found, strict=True):
        if way is None:
            came = f"line {entry.line} of grid {entry.grid} runs from {_point(entry.start)} to {_point(entry.end)}"
            allowed = f"along local x or y, drifting sideways by at most {OBLIQUE:g} m per m"
            do = "correct its start and end in the register, or give the lines a grid turned their way"
        elif way != common:
            came = (
                f"line {entry.line} of grid {entry.grid} runs along {way}, the others of set {entry.set} along {common}"
            )
            allowed, do = "one direction in a set", "keep crossing lines in a set of their own"
        else:
            continue
        problems.append(Problem(came, allowed=allowed, do=do, file=entry.file, line=entry.line))
    if problems:
        raise SurveyError(problems)
    return common


def line_spacing(entries: Sequence[LineEntry], *, direction: Direction) -> float:
    """Return the nominal line spacing in m.

    The widest step of which the distances between neighbouring lines, one in ten excepted, are whole multiples within
    a fifth of it: each line may be a tenth off its place, and any number may be missing. It is refined by a straight
    fit of position against row, because tapes read to the centimetre cannot hold a third of a metre. Lines on no common
    step get the median distance. A single line
    returns :data:`ALONE_M`.
    """
    across = _distinct([_across(e, direction) for e in entries])
    if across.size < 2:
        return ALONE_M
    gaps = np.diff(across)
    step = next((c for n in (1, 2, 3) for c in [_smallest(gaps) / n] if _fits(gaps, c)), float(np.median(gaps)))
    rows = np.concatenate([[0.0], np.cumsum(np.maximum(np.round(gaps / step), 1.0))])
    slope = float(np.polyfit(rows - rows.mean(), across - across.mean(), 1)[0])
    return round(slope, 6)  # a micrometre: keeps typed spacings as typed


def _smallest(gaps: np.ndarray) -> float:
    """Mean of the gaps within a fifth of the smallest: one line a little off its place does not set the spacing."""
    return float(gaps[gaps <= (1.0 + _OFF_GAP) * gaps.min()].mean())


def _fits(gaps: np.ndarray, step: float) -> bool:
    """Whether every gap is a whole multiple of ``step`` within a fifth of it, one gap in ten excepted."""
    rows = gaps / step
    return bool(np.mean(np.abs(rows - np.round(rows)) <= _OFF_GAP) >= 0.9 and rows.min() > 0.5)


def trace_spacing(entries: Sequence[LineEntry]) -> float:
    """Return the median distance between traces in m (length of a line over its trace intervals).

    Raises
    ------
    SurveyError
        When no line has two traces and a length.
    """
    found = []
    for e in entries:
        gaps = e.last_trace - e.first_trace
        length = math.dist(e.start, e.end) * e.along_scale
        if gaps > 0 and length > 0:
            found.append(length / gaps)
    if not found:
        raise SurveyError(
            Problem(
                "no line with two traces and a length",
                allowed="at least one",
                do="give trace_spacing_m or correct the register",
            )
        )
    return float(np.median(found))


def cube_geometry(
    entries: Sequence[LineEntry],
    *,
    direction: Direction | None = None,
    line_step_m: float | None = None,
    along_step_m: float | None = None,
    time_step_ns: float,
    n_time: int,
    time0_ns: float,
) -> CubeGeometry:
    """Return the regular axes of one set.

    Parameters
    ----------
    entries
        The set's lines; starts and ends in local m.
    direction
        Local axis the lines run along; None finds it (:func:`set_direction`).
    line_step_m, along_step_m
        Steps in m; None takes the nominal line spacing and the median trace spacing.
    time_step_ns, n_time, time0_ns
        Time axis; ``time0_ns`` is at or a little before time zero.

    Returns
    -------
    CubeGeometry
        The line axis holds every row from the first to the last line, the along axis the smallest to the largest of
        all starts and ends.

    Raises
    ------
    SurveyError
        For oblique or mixed lines, a step that is not positive, or an along step that is finer than a tenth of the
        recorded trace spacing or longer than every line.
    """
    way = set_direction(entries) if direction is None else direction
    step = line_spacing(entries, direction=way) if line_step_m is None else line_step_m
    along_step = trace_spacing(entries) if along_step_m is None else along_step_m
    for name, value in (("line_step_m", step), ("along_step_m", along_step), ("time_step_ns", time_step_ns)):
        if not (math.isfinite(value) and value > 0):
            raise SurveyError(Problem(f"{name} is {value:g}", allowed="a positive number", key=name))
    if along_step_m is not None:
        _check_along(entries, along_step_m)
    across = np.array([_across(e, way) for e in entries])
    first = float(across.min())
    rows = np.round((across - first) / step)
    # The row axis goes through the middle of all lines, not through a first line that may be off.
    line0 = first + float(np.median(across - first - rows * step))
    rows = np.round((across - line0) / step)
    line0 = round(line0 + float(rows.min()) * step, 6)
    ends = np.array([[_along(e.start, way), _along(e.end, way)] for e in entries])
    along0, along1 = float(ends.min()), float(ends.max())
    return CubeGeometry(
        direction=way,
        line0_m=line0,
        line_step_m=step,
        n_lines=int(rows.max() - rows.min()) + 1,
        along0_m=along0,
        along_step_m=along_step,
        n_along=math.ceil((along1 - along0) / along_step - 1e-6) + 1,
        time0_ns=time0_ns,
        time_step_ns=time_step_ns,
        n_time=n_time,
    )


def _check_along(entries: Sequence[LineEntry], step: float) -> None:
    """Refuse a typed step along the lines that the recordings do not bear."""
    recorded = trace_spacing(entries)
    longest = max(math.dist(e.start, e.end) * e.along_scale for e in entries)
    if not recorded / _FINER <= step <= longest:
        raise SurveyError(
            Problem(
                f"trace_spacing_m is {step:g}",
                allowed=f"{recorded / _FINER:.2g} to {longest:g} m: the traces were recorded {recorded:.3g} m apart",
                do="correct it, or leave it out",
                key="grid.trace_spacing_m",
            )
        )


def place_rows(
    entries: Sequence[LineEntry], geometry: CubeGeometry
) -> tuple[tuple[LineEntry, ...], tuple[Problem, ...]]:
    """Return the entries with their ``row`` set, and what is worth telling.

    The row is the nearest one to the middle of the line; rows without an entry simply stay empty. Each line with an end
    more than a tenth of the spacing off its row is warned about; of the others, one note tells the largest offset when
    it is more than a centimetre. A spacing so wide that the register may not be in metres is warned about.

    Raises
    ------
    SurveyError
        When a line lies outside the geometry's rows, or two lines cover the same stretch of one row.
    """
    placed, outside = [], []
    problems = _in_metres(entries, geometry)
    moved, moved_line = 0.0, ""
    for e in entries:
        row = round((_across(e, geometry.direction) - geometry.line0_m) / geometry.line_step_m)
        if not 0 <= row < geometry.n_lines:
            outside.append(
                Problem(
                    f"line {e.line} of grid {e.grid} lies on row {row}",
                    allowed=f"rows 0 to {geometry.n_lines - 1}",
                    file=e.file,
                    line=e.line,
                )
            )
            continue
        here = geometry.line0_m + row * geometry.line_step_m
        side = 1 if geometry.direction == "x" else 0
        off = max(abs(p[side] - here) for p in (e.start, e.end))
        if off > _OFF_ROW * geometry.line_step_m + 1e-9:
            problems.append(
                Problem(
                    f"line {e.line} of grid {e.grid} is {off:.3f} m off its row at {here:.3f} m",
                    allowed=f"within {_OFF_ROW * geometry.line_step_m:.3f} m (a tenth of the spacing)",
                    do="check its start and end in the register",
                    file=e.file,
                    line=e.line,
                    severity="warning",
                )
            )
        elif off > moved:
            moved, moved_line = off, e.line
        placed.append(e if e.row == row else e.model_copy(update={"row": row}))
    outside += _doubled(placed, geometry)
    if outside:
        raise SurveyError(outside)
    if moved > _TOLD_M + 1e-9:
        came = f"grid {entries[0].grid}: lines are put on rows {geometry.line_step_m:g} m apart, moved by up to"
        problems.append(Problem(f"{came} {moved:.3f} m (line {moved_line})", severity="note"))
    return tuple(placed), tuple(problems)


def _in_metres(entries: Sequence[LineEntry], geometry: CubeGeometry) -> list[Problem]:
    """Ask for the unit where lines or traces lie wider apart than archaeology records them."""
    wide = [("lines", geometry.line_step_m, _FAR_LINES_M)]
    if any(e.last_trace > e.first_trace and e.start != e.end for e in entries):
        wide.append(("traces", trace_spacing(entries), _FAR_TRACES_M))
    return [
        Problem(
            f"the {name} of grid {entries[0].grid} are {step:.4g} m apart: is the register in metres?",
            allowed=f"usual are less than {most:g} m",
            do="check the unit of starts and ends, unless it was meant",
            severity="warning",
        )
        for name, step, most in wide
        if step > most
    ]


def _doubled(entries: Sequence[LineEntry], geometry: CubeGeometry) -> list[Problem]:
    """Name lines that share a stretch of one row; pieces of one line may."""
    problems = []
    last: dict[int, tuple[float, str]] = {}
    spans = [sorted((_along(e.start, geometry.direction), _along(e.end, geometry.direction))) for e in entries]
    for (low, high), e in sorted(zip(spans, entries, strict=True), key=lambda pair: pair[0][0]):
        reached, name = last.get(e.row, (-math.inf, e.line))
        if name != e.line and low < reached - geometry.along_step_m:
            problems.append(
                Problem(
                    f"lines {name} and {e.line} of grid {e.grid} both lie on the row at"
                    f" {geometry.line0_m + e.row * geometry.line_step_m:.2f} m",
                    allowed=f"one line in a row (spacing {geometry.line_step_m:g} m)",
                    do="correct a start or end, or name the better line in superseded_by",
                    file=e.file,
                    line=e.line,
                )
            )
        if high > reached:
            last[e.row] = (high, e.line)
    return problems


def _along(point: Sequence[float], direction: Direction) -> float:
    return point[0] if direction == "x" else point[1]


def _across(entry: LineEntry, direction: Direction) -> float:
    side = 1 if direction == "x" else 0
    return (entry.start[side] + entry.end[side]) / 2.0


def _distinct(values: Sequence[float]) -> np.ndarray:
    """Sorted values; those closer than a centimetre to their neighbour are one (pieces, repeated lines)."""
    ordered = np.sort(np.asarray(values, float))
    groups = np.split(ordered, np.flatnonzero(np.diff(ordered) > _SAME_M) + 1)
    return np.array([g.mean() for g in groups])


def _point(p: Sequence[float]) -> str:
    return f"({p[0]:g}, {p[1]:g})"
