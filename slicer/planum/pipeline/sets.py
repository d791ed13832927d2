"""Which lines make a set, and where each of them lies on its cube: drafts, before the velocity is known."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import combinations
from typing import Any

import numpy as np

from planum.cube.geometry import cube_geometry, line_direction, place_rows
from planum.errors import Problem, SurveyError
from planum.lines.recording import CUT
from planum.pipeline.estimate import Line, TimeZero, balance, time_zero
from planum.records import CubeGeometry, Estimate, Facts, LineEntry, Similarity
from planum.survey.config import Grid, Radar
from planum.survey.folder import Survey

__all__ = ["Draft", "draft_sets"]

MOST_SAMPLES = 500_000_000
"""Samples of one line on its cube: beyond it a spacing is mistyped."""
LEAST_SAMPLES = 8
SPACING_TOLERANCE = 0.1
REACHED_BY = 0.8
"""Share of a set's lines that must reach its last sample; shorter recordings are set aside."""


@dataclass(frozen=True)
class Draft:
    """A set before its velocity is known."""

    name: str
    lines: tuple[Line, ...]
    radar: Radar
    entries: tuple[LineEntry, ...]
    geometry: CubeGeometry
    zero: Estimate
    frame: Similarity
    reader: dict[str, Any]
    pool: tuple[tuple[LineEntry, Facts], ...] = ()

    @property
    def grid(self) -> str:
        """Name of the grid."""
        return self.lines[0].row.grid

    @property
    def visit(self) -> str:
        """Name of the visit."""
        return self.lines[0].row.visit

    @property
    def facts(self) -> list[Facts]:
        """Facts of every line, in order."""
        return [line.facts for line in self.lines]


def draft_sets(
    survey: Survey,
    lines: Sequence[Line],
    frames: Mapping[str, Similarity],
    *,
    warnings: list[Problem],
    aside: list[Problem],
) -> list[Draft]:
    """Group lines by grid, direction, radar and visit, and place each set on its cube.

    What is worth telling is added to ``warnings``, lines that cannot take part to ``aside``.

    Raises
    ------
    SurveyError
        When sets do not go together, or a set cannot be placed.
    """
    drafts = [_draft(name, group, survey, frames, warnings, aside) for name, group in _sets(lines).items()]
    problems = [
        Problem(
            came=f"grid {a.grid} was walked over the same ground on {a.visit} and on {b.visit}",
            allowed="visits side by side: combining two visits of one place is not supported yet",
            do="give each visit a survey of its own",
            key="lines.visit",
        )
        for a, b in combinations(drafts, 2)
        if a.grid == b.grid and _overlap(a.geometry, b.geometry)
    ]
    if problems:
        raise SurveyError(problems)
    return [replace(d, pool=_pool(d, drafts)) for d in drafts]


def _pool(draft: Draft, drafts: Sequence[Draft]) -> tuple[tuple[LineEntry, Facts], ...]:
    """All lines recorded with the draft's radar: they share one gain and one band."""
    return tuple(
        pair for d in drafts if d.radar.name == draft.radar.name for pair in zip(d.entries, d.facts, strict=True)
    )


def _overlap(a: CubeGeometry, b: CubeGeometry) -> bool:
    """Whether two sets of one grid lie on the same ground by more than half a line spacing."""
    if a.direction != b.direction:
        return True
    half = 0.5 * max(a.line_step_m, b.line_step_m)
    across = min(a.lines()[-1], b.lines()[-1]) - max(a.line0_m, b.line0_m)
    along = min(a.along()[-1], b.along()[-1]) - max(a.along0_m, b.along0_m)
    return bool(across > -half and along > half)


def _sets(lines: Sequence[Line]) -> dict[str, list[Line]]:
    """Group lines by grid, direction, radar and visit."""
    groups: dict[tuple[str, str, str, str], list[Line]] = {}
    for line in lines:
        way = line_direction(line.row.start, line.row.end) or "x"
        groups.setdefault((line.row.grid, way, line.row.radar, line.row.visit), []).append(line)
    radars = {(grid, radar) for grid, _, radar, _ in groups}
    problems = [
        Problem(
            came=f"grid {grid} was recorded with more than one radar",
            allowed="one radar in a grid: combining antennas is not supported yet",
            do="give each radar's lines a grid of their own, in a survey of their own",
            key="grid.radar",
        )
        for grid in sorted({g for g, _ in radars})
        if sum(g == grid for g, _ in radars) > 1
    ]
    if problems:
        raise SurveyError(problems)
    many_visits = len({(g, v) for g, _, _, v in groups}) > len({g for g, _, _, _ in groups})
    return {
        f"{grid}/{way}" + (f"@{visit}" if many_visits else ""): group for (grid, way, _, visit), group in groups.items()
    }


def _draft(
    name: str,
    lines: Sequence[Line],
    survey: Survey,
    frames: Mapping[str, Similarity],
    warnings: list[Problem],
    aside: list[Problem],
) -> Draft:
    grid = survey.config.grid_named(lines[0].row.grid)
    radar = survey.config.radar_named(lines[0].row.radar)
    zero = time_zero(lines, radar)
    lines, zero = _long_enough(lines, zero, aside)
    warnings += zero.problems
    gains = balance(lines)
    entries = [_entry(name, line, z, g, warnings) for line, z, g in zip(lines, zero.zeros, gains, strict=True)]
    entries = [
        e.model_copy(update={"because": (*e.because, "time zero")}) if z != zero.estimate.value else e
        for e, z in zip(entries, zero.zeros, strict=True)
    ]
    entries = _unstretched(entries, lines, warnings)
    dt = float(np.median([line.facts.interval_ns for line in lines]))
    period = 1e3 / radar.centre_frequency_mhz
    before = max(0, min(math.floor(min(zero.zeros) / dt + 1e-9), math.ceil(1.5 * period / dt)))
    after = min(_after_zero(lines, zero))
    if after < LEAST_SAMPLES * dt:
        raise SurveyError(
            Problem(
                came=f"set {name}: time zero is {zero.estimate.value:g} ns, and the record ends {after:.1f} ns later",
                allowed=f"at least {LEAST_SAMPLES} samples after time zero",
                do="correct time_zero_ns or the sample interval",
                file="survey.toml",
                key=f"radar[{radar.name}].time_zero_ns",
            )
        )
    geometry = cube_geometry(
        entries,
        line_step_m=abs(grid.line_spacing_m) if grid.line_spacing_m else None,
        along_step_m=grid.trace_spacing_m,
        time_step_ns=dt,
        n_time=before + math.floor(after / dt + 1e-9) + 1,
        time0_ns=-before * dt,
    )
    _check_size(geometry, grid)
    placed, off = place_rows(entries, geometry)
    warnings += off
    raw = lines[0].source.options.layout
    reader = {
        "split": grid.split,
        "layout": None if raw is None else vars(raw),
        "reader": lines[0].source.options.reader,
    }
    return Draft(name, tuple(lines), radar, placed, geometry, zero.estimate, frames[grid.name], reader)


def _unstretched(entries: Sequence[LineEntry], lines: Sequence[Line], warnings: list[Problem]) -> list[LineEntry]:
    """Keep the traces of a cut file at their places instead of stretching them over the whole line, and tell it.

    The set's median trace spacing tells where the last trace lies. A whole file whose spacing is a tenth or more off
    stays as the register says, and is told.
    """
    gaps = np.array([math.dist(e.start, e.end) / max(1, e.last_trace - e.first_trace) for e in entries])
    usual = float(np.median(gaps))
    out = list(entries)
    for i, (e, line, gap) in enumerate(zip(entries, lines, gaps, strict=True)):
        if line.header or abs(gap / usual - 1.0) <= SPACING_TOLERANCE:
            continue
        cut = gap > usual and any(p.get("key") == CUT for p in line.facts.problems)
        if cut:
            (x0, y0), (x1, y1), share = e.start, e.end, usual / gap
            out[i] = e.model_copy(
                update={"end": (x0 + share * (x1 - x0), y0 + share * (y1 - y0)), "because": (*e.because, "file cut")}
            )
        warnings.append(
            Problem(
                came=f"traces would lie {gap:.3f} m apart, on the other lines they lie {usual:.3f} m apart",
                allowed="the same spacing on all lines of a set, within a tenth",
                do="the file is cut: its traces are placed from the start on, the rest of the line stays empty"
                if cut
                else "check start, end, first_trace and last_trace in the register",
                file=e.file,
                line=e.line,
                severity="warning",
            )
        )
    return out


def _after_zero(lines: Sequence[Line], zero: TimeZero) -> list[float]:
    """How long every line was recorded after its time zero, ns."""
    return [(x.facts.n_samples - 1) * x.facts.interval_ns - z for x, z in zip(lines, zero.zeros, strict=True)]


def _long_enough(lines: Sequence[Line], zero: TimeZero, aside: list[Problem]) -> tuple[Sequence[Line], TimeZero]:
    """Leave out recordings much shorter than most: one short file must not cut every slice of all the others."""
    after = _after_zero(lines, zero)
    wanted = float(np.quantile(after, 1.0 - REACHED_BY, method="higher"))
    keep = [i for i, t in enumerate(after) if t >= wanted - 0.05 * abs(wanted)]
    for i in sorted(set(range(len(lines))) - set(keep)):
        aside.append(
            Problem(
                came=f"recorded {after[i]:.1f} ns after time zero, most lines {wanted:.1f} ns",
                allowed="at least 95 % of what most lines recorded",
                do="record it again, or give the short lines a grid of their own",
                file=lines[i].row.file,
                line=lines[i].row.line,
                severity="warning",
            )
        )
    return [lines[i] for i in keep], zero.only(keep)


def _check_size(geometry: CubeGeometry, grid: Grid) -> None:
    samples = geometry.n_along * geometry.n_time
    if samples > MOST_SAMPLES:
        raise SurveyError(
            Problem(
                came=f"a line of grid {grid.name} would hold {geometry.n_along:,} places of {geometry.n_time} samples",
                allowed=f"at most {MOST_SAMPLES:,} samples",
                do="look for a mistyped trace_spacing_m, start or end",
                file="survey.toml",
                key=f"grid[{grid.name}].trace_spacing_m",
            )
        )


def _entry(name: str, line: Line, zero: float, gain: float, warnings: list[Problem]) -> LineEntry:
    row, facts = line.row, line.facts
    first = row.first_trace or 0
    wanted = facts.n_traces - 1 if row.last_trace is None else row.last_trace
    last = min(wanted, facts.n_traces - 1)
    end = row.end
    if last < wanted:
        share = (last - first) / max(1, wanted - first)
        end = tuple(a + share * (b - a) for a, b in zip(row.start, row.end, strict=True))  # type: ignore[assignment]
        warnings.append(
            Problem(
                came=f"trace {wanted} is asked for, the last recorded is {last}",
                allowed="the line is mapped as far as it was recorded",
                do="check last_trace in the register",
                file=row.file,
                line=row.line,
                severity="warning",
            )
        )
    because = []
    if gain != 1.0:
        because.append("line balance")
    return LineEntry(
        key=f"{name}/{row.line}/{first}",
        set=name,
        grid=row.grid,
        line=row.line,
        row=0,
        file=row.file,
        file_id=facts.file_id,
        interval_ns=facts.interval_ns,
        first_trace=first,
        last_trace=last,
        start=row.start,
        end=end,
        part=row.part,
        header_positions=line.header,
        zero_ns=((0, zero),),
        gain=gain,
        because=tuple(because),
    )
