"""Survey and facts become a Plan: the only place where automatic settings, defaults and corrections meet."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from pydantic import BaseModel

import planum
from planum.cube.geometry import cube_geometry, line_direction, place_rows
from planum.engine.linepass import condition, row_cube
from planum.errors import Problem, SurveyError
from planum.pipeline.census import in_order
from planum.pipeline.estimate import (
    SCAN_LINES,
    Line,
    balance,
    given_velocity,
    scanned_velocity,
    set_facts,
    time_zero,
)
from planum.pipeline.frames import from_headers, site_frames
from planum.pipeline.passes import read_pieces
from planum.pipeline.recipe import resolve_chain, settings
from planum.pipeline.store import Store
from planum.records import CubeGeometry, Estimate, Facts, LineEntry, Plan, SetPlan, Similarity, Velocity, key
from planum.slices.intervals import intervals
from planum.survey.config import Radar
from planum.survey.folder import Survey

__all__ = ["Resolution", "check_cells", "resolve"]

MOST_CELLS = 400_000_000
"""Cells of one slice: beyond it grids are not one site, or a coordinate is mistyped."""
SCAN_VERSION = 1
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class Resolution:
    """The plan, what was noticed on the way, and the evidence behind the velocity."""

    plan: Plan
    warnings: tuple[Problem, ...]
    curve: Mapping[str, list[float]] = field(default_factory=dict)


@dataclass(frozen=True)
class _Draft:
    """A set before its velocity is known."""

    name: str
    lines: tuple[Line, ...]
    radar: Radar
    entries: tuple[LineEntry, ...]
    geometry: CubeGeometry
    zero: Estimate
    frame: Similarity
    reader: dict[str, Any]

    @property
    def facts(self) -> list[Facts]:
        return [line.facts for line in self.lines]


def resolve(
    survey: Survey,
    lines: Sequence[Line],
    *,
    store: Store,
    executor: Executor,
    set_aside: Sequence[Problem] = (),
    progress: Progress | None = None,
) -> Resolution:
    """Return the plan of a run.

    Raises
    ------
    SurveyError, FrameError, RecipeError
        When the survey cannot be mapped as it stands; every problem found is in it.
    """
    chosen = settings({"steps": survey.config.recipe.names(), **survey.config.recipe.settings()})
    warnings: list[Problem] = []
    lines, frames = from_headers(survey, lines, site_frames(survey), warnings)
    drafts = [_draft(name, group, survey, frames, warnings) for name, group in _sets(lines).items()]
    velocity, curve = _velocity(survey, drafts, chosen, store, executor, warnings, progress)
    first = drafts[0]
    windows = _intervals(survey, drafts, velocity, warnings)
    sets = tuple(_finish(d, chosen, velocity, windows) for d in drafts)
    cell = min(_cell(survey, d) for d in drafts)
    plan = Plan(
        version=planum.__version__,
        title=survey.config.survey.title,
        code=survey.config.survey.code,
        crs=survey.config.survey.crs,
        cell_m=cell,
        bounds=_bounds(sets, cell),
        intervals_m=windows,
        sets=sets,
        set_aside=tuple(p.to_dict() for p in set_aside),
        notes=tuple(_notes(first, sets, velocity)),
    )
    return Resolution(plan, tuple(warnings), curve)


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
    name: str, lines: Sequence[Line], survey: Survey, frames: Mapping[str, Similarity], warnings: list[Problem]
) -> _Draft:
    grid = survey.config.grid_named(lines[0].row.grid)
    radar = survey.config.radar_named(lines[0].row.radar)
    zeros, zero = time_zero(lines, radar)
    gains = balance(lines)
    entries = [_entry(name, line, z, g, warnings) for line, z, g in zip(lines, zeros, gains, strict=True)]
    dt = float(np.median([line.facts.interval_ns for line in lines]))
    period = 1e3 / radar.centre_frequency_mhz
    before = min(math.floor(min(zeros) / dt + 1e-9), math.ceil(1.5 * period / dt))
    after = min((f.n_samples - 1) * f.interval_ns - z for f, z in zip([x.facts for x in lines], zeros, strict=True))
    geometry = cube_geometry(
        entries,
        line_step_m=abs(grid.line_spacing_m) if grid.line_spacing_m else None,
        along_step_m=grid.trace_spacing_m,
        time_step_ns=dt,
        n_time=max(before, 0) + math.floor(after / dt + 1e-9) + 1,
        time0_ns=-max(before, 0) * dt,
    )
    placed, off = place_rows(entries, geometry)
    warnings += off
    raw = lines[0].source.options.layout
    reader = {
        "split": grid.split,
        "layout": None if raw is None else vars(raw),
        "reader": lines[0].source.options.reader,
    }
    return _Draft(name, tuple(lines), radar, placed, geometry, zero, frames[grid.name], reader)


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


def _finish(
    draft: _Draft,
    chosen: Mapping[str, BaseModel],
    velocity: Velocity,
    windows_m: Sequence[tuple[float, float]],
    *,
    until: str | None = None,
) -> SetPlan:
    facts = set_facts(draft.entries, draft.facts, draft.geometry, draft.radar, velocity)
    chain = resolve_chain(chosen, facts, until=until)
    gain = next((s.params for s in chain if s.name == "gain"), {})
    stop = gain.get("stop_ns")
    separation = draft.radar.antenna_separation_m
    edges = [velocity.time(np.array(w), separation_m=separation) for w in windows_m]
    return SetPlan(
        name=draft.name,
        grid=draft.lines[0].row.grid,
        radar=draft.radar.name,
        visit=draft.lines[0].row.visit,
        geometry=draft.geometry,
        centre_frequency_ghz=draft.radar.centre_frequency_mhz / 1e3,
        separation_m=separation,
        interval_ns=draft.geometry.time_step_ns,
        reader=draft.reader,
        zero=draft.zero,
        velocity=velocity,
        chain=chain,
        windows_ns=tuple((float(a), float(b)) for a, b in edges),
        entries=draft.entries,
        frame=draft.frame,
        limit_depth_m=None if stop is None else float(velocity.depth(stop, separation_m=separation)),
    )


def _velocity(
    survey: Survey,
    drafts: Sequence[_Draft],
    chosen: Mapping[str, BaseModel],
    store: Store,
    executor: Executor,
    warnings: list[Problem],
    progress: Progress | None,
) -> tuple[Velocity, dict[str, list[float]]]:
    ground = survey.config.ground
    if ground.velocity_m_per_ns is not None:
        return given_velocity(ground.velocity_m_per_ns, ground.velocity_error_m_per_ns), {}
    guess = Velocity.constant(0.1, 0.03, origin="book")
    plans = [_finish(d, chosen, guess, (), until="migrate" if "migrate" in chosen else "envelope") for d in drafts]
    jobs = [(plan, row) for plan in plans for row in _spread(plan, max(2, SCAN_LINES // len(plans)))]
    token = key([SCAN_VERSION, planum.__version__, [(p.model_dump(mode="json"), r) for p, r in jobs]])
    kept = store.load_json("estimates", token)
    if kept is None:

        def section(job: tuple[SetPlan, int]) -> Any:
            plan, row = job
            return condition(row_cube(read_pieces(survey.folder, plan, row, roots=survey.roots), plan, row), plan.chain)

        sections = []
        for done in in_order(executor, section, jobs):
            sections.append(done)
            if progress:
                progress("finding the velocity", len(sections), len(jobs) + 1)
        velocity, curve, problem = scanned_velocity(sections, zero_error_ns=drafts[0].zero.error)
        if progress:
            progress("finding the velocity", len(jobs) + 1, len(jobs) + 1)
        kept = [velocity.model_dump(mode="json"), curve, None if problem is None else problem.to_dict()]
        store.save_json("estimates", token, kept)
    if kept[2]:
        warnings.append(Problem(**kept[2]))
    return Velocity.model_validate(kept[0]), kept[1]


def _spread(plan: SetPlan, most: int) -> list[int]:
    rows = sorted({e.row for e in plan.entries})
    at = np.unique(np.linspace(0, len(rows) - 1, min(most, len(rows))).round().astype(int))
    return [rows[i] for i in at]


def _intervals(
    survey: Survey, drafts: Sequence[_Draft], velocity: Velocity, warnings: list[Problem]
) -> tuple[tuple[float, float], ...]:
    """Return the depth intervals that every set recorded to their bottom."""
    table = survey.config.slices
    wanted = intervals(table.top_m, table.bottom_m, table.thickness_m, table.step_m)
    deepest = min(
        float(velocity.depth(d.geometry.times()[-1], separation_m=d.radar.antenna_separation_m)) for d in drafts
    )
    kept = tuple(w for w in wanted if w[1] <= deepest + 1e-9)
    if not kept:
        raise SurveyError(
            Problem(
                came=f"the first slice ends at {wanted[0][1]:.2f} m, the recordings at {deepest:.2f} m",
                do="choose shallower slices, or check the sample interval and the velocity",
                file="survey.toml",
                key="slices",
            )
        )
    if len(kept) < len(wanted):
        warnings.append(
            Problem(
                came=f"{len(wanted) - len(kept)} of {len(wanted)} slices lie below the record ({deepest:.2f} m)",
                do="they are left out",
                file="survey.toml",
                key="slices.bottom_m",
                severity="note",
            )
        )
    return kept


def _cell(survey: Survey, draft: _Draft) -> float:
    """Return the typed cell, or a fifth of the line spacing, at the millimetre."""
    typed = survey.config.grid_named(draft.lines[0].row.grid).cell_m
    return typed or max(0.001, round(draft.geometry.line_step_m / 5.0, 3))


def _bounds(sets: Sequence[SetPlan], cell: float) -> tuple[float, float, float, float]:
    """Return west, south, east, north of all sets on whole cells."""
    east, north = [], []
    for s in sets:
        g = s.geometry
        along, across = g.along()[[0, -1]], g.lines()[[0, -1]] + 0.5 * g.line_step_m * np.array([-1.0, 1.0])
        u, v = (a.ravel() for a in np.meshgrid(along, across))
        e, n = s.frame.forward(u, v) if g.direction == "x" else s.frame.forward(v, u)
        east.append(e)
        north.append(n)
    e, n = np.concatenate(east), np.concatenate(north)
    low = [math.floor(float(c.min()) / cell - 1e-6) for c in (e, n)]
    high = [math.ceil(float(c.max()) / cell + 1e-6) for c in (e, n)]
    bounds = (low[0] * cell, low[1] * cell, high[0] * cell, high[1] * cell)
    check_cells(bounds, cell)
    return bounds


def check_cells(bounds: tuple[float, float, float, float], cell_m: float) -> None:
    """Refuse a raster that no site asks for, before memory is asked for.

    Raises
    ------
    SurveyError
        With more than 400 million cells a slice, or none.
    """
    west, south, east, north = bounds
    wide, tall = round((east - west) / cell_m), round((north - south) / cell_m)
    if not (wide >= 1 and tall >= 1 and wide * tall <= MOST_CELLS):
        raise SurveyError(
            Problem(
                came=f"the grids span {wide} × {tall} cells of {cell_m:g} m",
                allowed=f"at most {MOST_CELLS:,} cells",
                do="look for a mistyped control point, map distant grids as surveys of their own, or raise cell_m",
                file="control.csv",
            )
        )


def _notes(first: _Draft, sets: Sequence[SetPlan], velocity: Velocity) -> list[str]:
    from planum.migration.stolt import alias_free_dip_deg  # noqa: PLC0415

    spacing = max(s.geometry.line_step_m for s in sets)
    notes = [f"Features narrower than {spacing:.2f} m between lines are not resolved."]
    step = max(s.geometry.along_step_m for s in sets)
    dip = alias_free_dip_deg(
        velocity_m_per_ns=velocity.value, trace_spacing_m=step, highest_ghz=1.6 * first.radar.centre_frequency_mhz / 1e3
    )
    if dip < 60.0:
        notes.append(f"Reflectors steeper than {dip:.0f}° along the line alias at {step:.3f} m between traces.")
    if len(sets) > 1:
        notes.append("Grids and visits are not balanced against each other: steps at their seams may be false.")
    return notes
