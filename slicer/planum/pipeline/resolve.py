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
from planum.engine.linepass import condition, row_cube
from planum.errors import Problem, SurveyError
from planum.pipeline.census import in_order
from planum.pipeline.estimate import (
    SCAN_LINES,
    Line,
    given_velocity,
    scanned_velocity,
    set_facts,
)
from planum.pipeline.frames import frame_warnings, from_headers, site_frames
from planum.pipeline.passes import read_pieces
from planum.pipeline.recipe import chain_notes, limit_ns, resolve_chain, settings
from planum.pipeline.sets import Draft, draft_sets
from planum.pipeline.store import Store
from planum.records import Plan, SetPlan, Velocity, key, migration_velocity
from planum.slices.intervals import intervals
from planum.survey.folder import Survey

__all__ = ["Resolution", "check_cells", "resolve"]

MOST_CELLS = 400_000_000
"""Cells of one slice: beyond it grids are not one site, or a coordinate is mistyped."""
SCAN_VERSION = 2
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class Resolution:
    """The plan, what was noticed and set aside on the way, and the evidence behind the velocity."""

    plan: Plan
    warnings: tuple[Problem, ...]
    set_aside: tuple[Problem, ...] = ()
    curve: Mapping[str, list[float]] = field(default_factory=dict)


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
    chosen = settings(
        {"steps": survey.config.recipe.names(), **survey.config.recipe.settings()},
        centre_ghz=[r.centre_frequency_mhz / 1e3 for r in survey.config.radar],
    )
    warnings: list[Problem] = []
    lines, frames = from_headers(survey, lines, site_frames(survey), warnings)
    aside = list(set_aside)
    warnings += frame_warnings(frames, survey)
    drafts = draft_sets(survey, lines, frames, warnings=warnings, aside=aside)
    velocity, curve = _velocity(survey, drafts, chosen, store, executor, warnings, progress)
    first = drafts[0]
    windows = _intervals(survey, drafts, velocity, warnings)
    sets = tuple(_finish(d, chosen, velocity, windows, told=warnings) for d in drafts)
    warnings += _other_velocity(sets)
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
        set_aside=tuple(p.to_dict() for p in aside),
        notes=tuple(_notes(first, sets, velocity)),
    )
    return Resolution(plan, tuple(warnings), tuple(aside), curve)


def _finish(
    draft: Draft,
    chosen: Mapping[str, BaseModel],
    velocity: Velocity,
    windows_m: Sequence[tuple[float, float]],
    *,
    until: str | None = None,
    told: list[Problem] | None = None,
) -> SetPlan:
    """Settle a set's chain and windows; what its steps have to say is added to ``told``."""
    facts = set_facts(draft.entries, draft.facts, draft.geometry, draft.radar, velocity, pool=draft.pool)
    chain = resolve_chain(chosen, facts, until=until)
    if told is not None:
        told += [p for p in chain_notes(chosen, facts) if p not in told]
    limit = limit_ns(chosen, facts)
    separation = draft.radar.antenna_separation_m
    edges = [velocity.time(np.array(w), separation_m=separation) for w in windows_m]
    return SetPlan(
        name=draft.name,
        grid=draft.grid,
        radar=draft.radar.name,
        visit=draft.visit,
        geometry=draft.geometry,
        centre_frequency_ghz=draft.radar.centre_frequency_mhz / 1e3,
        separation_m=separation,
        reader=draft.reader,
        zero=draft.zero,
        velocity=velocity,
        chain=chain,
        windows_ns=tuple((float(a), float(b)) for a, b in edges),
        entries=draft.entries,
        frame=draft.frame,
        limit_depth_m=None if limit is None else float(velocity.depth(limit, separation_m=separation)),
    )


def _velocity(
    survey: Survey,
    drafts: Sequence[Draft],
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
    survey: Survey, drafts: Sequence[Draft], velocity: Velocity, warnings: list[Problem]
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


def _cell(survey: Survey, draft: Draft) -> float:
    """Return the typed cell, or a fifth of the line spacing, at the millimetre."""
    typed = survey.config.grid_named(draft.grid).cell_m
    if typed and typed > draft.geometry.line_step_m:
        raise SurveyError(
            Problem(
                came=f"cell_m is {typed:g}, the lines are {draft.geometry.line_step_m:g} m apart",
                allowed="at most the line spacing; a fifth of it when left out",
                do="choose a smaller cell",
                file="survey.toml",
                key=f"grid[{draft.grid}].cell_m",
            )
        )
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
                do="raise cell_m, look for a mistyped control point, or map distant grids as surveys of their own",
                file="survey.toml",
                key="grid.cell_m",
            )
        )


def _other_velocity(sets: Sequence[SetPlan]) -> list[Problem]:
    """Tell when lines are migrated at another velocity than depths are counted with."""
    found = {s.velocity.value: v for s in sets if (v := migration_velocity(s)) not in {None, s.velocity.value}}
    return [
        Problem(
            came=f"lines are migrated at {used:g} m/ns, depths are counted at {depth:g} m/ns",
            allowed="one velocity for both",
            do="leave velocity_m_per_ns out of [recipe.migrate] and give it under [ground]",
            file="survey.toml",
            key="recipe.migrate.velocity_m_per_ns",
            severity="warning",
        )
        for depth, used in found.items()
    ]


def _notes(first: Draft, sets: Sequence[SetPlan], velocity: Velocity) -> list[str]:
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
