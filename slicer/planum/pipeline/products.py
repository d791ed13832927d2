"""What a run writes: every file of the run folder, from the slice stack and the run's facts."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

import planum
from planum.constants import CAUTIONS
from planum.errors import Problem
from planum.outputs.focus import draw_focus
from planum.outputs.geopackage import ControlShape, GridShape, LineShape, SiteShapes, write_geopackage
from planum.outputs.geotiff import write_slices
from planum.outputs.netcdf import write_netcdf
from planum.outputs.pictures import draw_contact_sheet, draw_slices
from planum.outputs.raster import plane, raster_of
from planum.outputs.report import write_report
from planum.outputs.section import DepthScale, SectionText, draw_section
from planum.outputs.stack import write_stack
from planum.outputs.stretch import stretch_of
from planum.outputs.writing import aside, copy_png, joined, statement_text
from planum.pipeline.telling import Drawn, report_context
from planum.pipeline.told import PRODUCTS_VERSION, RunFacts, statements, versions
from planum.records import FLAG_NONE, Facts, Plan, SetPlan, Statement, Strip, canon, key
from planum.scene.picture import render_safely
from planum.slices.structure import best_slices, structure
from planum.survey.control import ControlPoint

__all__ = ["section_key", "section_picture", "write_products"]

Progress = Callable[[str, int, int], None]
Attribute = str | int | float | bool | None


def section_key(plan: Plan, s: SetPlan, row: int, row_name: str) -> str:
    """Return what the picture of one row depends on, hashed."""
    return key([PRODUCTS_VERSION, row_name, s.name, row, s.velocity, s.separation_m, plan.intervals_m])


def section_picture(path: Path, plan: Plan, s: SetPlan, strip: Strip) -> None:
    """Draw one row's section: raw, processed, migrated, with a depth axis and the slices' intervals."""
    v = s.velocity
    recorded = (strip.flag & FLAG_NONE) == 0
    draw_section(
        path,
        strip.section or {},
        s.geometry.along(),
        s.geometry.times(),
        DepthScale(v, s.separation_m, plan.intervals_m),
        text=SectionText(
            row_title(s, strip.row),
            ", ".join(filter(None, [plan.title, f"visit {s.visit}" if s.visit else ""])),
            f"Depth below the ground surface as walked at {v.value:.4f} ± {v.error:.4f} m/ns ({v.origin}); time zero"
            f" ± {s.zero.error:.2f} ns; each panel has its own stretch below the direct wave, positive = dark;"
            f" hatched: no recording. {CAUTIONS[0]}",
        ),
        recorded=recorded if recorded.any() else None,
    )


def row_title(s: SetPlan, row: int) -> str:
    """Return what a row is called: its grid, the way its lines run, its line and its place across."""
    across = "y" if s.geometry.direction == "x" else "x"
    lines = list(dict.fromkeys(e.line for e in s.entries if e.row == row))
    word = "line" if len(lines) == 1 else "lines"
    return (
        f"Grid {s.grid}, lines along {s.geometry.direction}, {word} {', '.join(lines)},"
        f" {across} = {s.geometry.lines()[row]:.2f} m"
    )


def shapes(run: RunFacts, stack: xr.Dataset, linked: Mapping[tuple[str, str], str]) -> SiteShapes:
    """Return lines, grids, control points and coverage in the map frame."""
    lines, grids = [], []
    residuals: dict[tuple[str, str], float] = {}
    pictures = {row: name for (_, row), name in linked.items()}
    for s in run.plan.sets:
        residuals |= {(s.grid.casefold(), point): miss for point, miss in s.frame.residuals_m}
        for e in s.entries:
            coords = np.column_stack(s.frame.forward(*np.array([e.start, e.end]).T))
            about: dict[str, Attribute] = {
                "line": e.line,
                "row": e.row,
                "time_zero_ns": e.zero_ns[0][1],
                "gain": e.gain,
                "traces": e.last_trace - e.first_trace + 1,
                "section": pictures.get(f"{s.name}/{e.row}", ""),
            }
            lines.append(LineShape(e.key, s.name, e.file, coords, about))
        grids.append(_grid_shape(s))
    control = [
        ControlShape(
            c.point,
            c.easting_m,
            c.northing_m,
            _residual(residuals, c),
            {"grid": c.grid or "site", "local_x_m": c.local_x_m, "local_y_m": c.local_y_m},
        )
        for c in run.control
    ]
    covered = stack["coverage"].values
    return SiteShapes(run.plan.crs or "", lines, grids, control, coverage=covered, raster=raster_of(stack))


def _residual(residuals: Mapping[tuple[str, str], float], point: ControlPoint) -> float | None:
    """Return a point's residual in its own grid; a site point's largest over the grids it placed."""
    if point.grid:
        return residuals.get((point.grid.casefold(), point.point))
    return max((miss for (_, name), miss in residuals.items() if name == point.point), default=None)


def _grid_shape(s: SetPlan) -> GridShape:
    g = s.geometry
    (a0, a1), (c0, c1) = g.along()[[0, -1]], g.lines()[[0, -1]]
    corners = np.array([[a0, c0], [a1, c0], [a1, c1], [a0, c1]])
    corners = corners if g.direction == "x" else corners[:, ::-1]
    about: dict[str, Attribute] = {
        "set": s.name,
        "radar": s.radar,
        "visit": s.visit,
        "line_spacing_m": g.line_step_m,
        "trace_spacing_m": g.along_step_m,
        "rotation_deg": s.frame.rotation_deg,
        "scale": s.frame.scale,
        "placing": s.frame.origin,
        "placing_error_m": s.frame.error_m,
    }
    return GridShape(s.grid, np.column_stack(s.frame.forward(*corners.T)), about)


def write_products(
    folder: Path,
    stack: xr.Dataset,
    run: RunFacts,
    *,
    sections: Mapping[tuple[str, int], Path],
    token: str,
    progress: Progress | None = None,
) -> RunFacts:
    """Write every product of a run into an empty folder; ``run.json`` comes last and lists the others.

    Returns
    -------
    RunFacts
        With what could not be drawn among the warnings.
    """
    plan = run.plan
    stretch = stretch_of(stack)
    told = statements(plan, stack, stretch)

    def step(stage: str) -> Callable[[int, int], None]:
        return lambda done, total: progress(stage, done, total) if progress else None

    pictures = folder / "pictures"
    whole = joined([one.tags() for one in told])
    linked = _copy_sections(pictures, plan, sections, whole)
    site = shapes(run, stack, linked)
    write_netcdf(
        folder / "slices.nc", stack, told, history=f"planum {plan.version}, plan {key(plan)}", attrs={"code": plan.code}
    )
    named = {"contact": pictures / "contact-sheet.png"}
    with ThreadPoolExecutor(1) as beside:  # the scene is drawn in a process of its own while the rest is written
        scene = beside.submit(draw_scene, folder / "slices.nc", pictures / "isosurface.png", site)
        write_slices(folder / "slices", stack, told, stretch, progress=step("writing rasters"))
        write_stack(folder / "slices_all.tif", stack, told)
        changed = max((s.visit for s in plan.sets if s.visit), default="1970-01-01")
        write_geopackage(folder / "site.gpkg", site, told, changed=changed)
        drawn = draw_slices(pictures, stack, told, stretch, progress=step("drawing slices"))
        draw_contact_sheet(named["contact"], stack, told, stretch)
        if run.curve:
            named["focus"] = pictures / "velocity-focus.png"
            draw_focus(
                named["focus"],
                run.curve,
                plan.sets[0].velocity,
                statement=statement_text(whole | _set_tags(plan.sets[0])),
            )
        step("drawing the isosurface")(0, 1)
        problem = scene.result()
        step("drawing the isosurface")(1, 1)
    if problem is None:
        named["isosurface"] = pictures / "isosurface.png"
    else:
        run = replace(run, warnings=(*run.warnings, replace(problem, severity="warning")))
    shown = Drawn(
        named,
        drawn,
        _large(plan, told, _scores(stack, told[0].line_spacing_m)),
        {label: name for (label, _), name in linked.items()},
    )
    context = report_context(run, told, shown, folder)
    write_report(folder / "report.html", context)
    _write_record(folder, run, told, token)
    return run


def draw_scene(slices: Path, picture: Path, site: SiteShapes) -> Problem | None:
    """Draw the isosurface in a process of its own; a machine that cannot draw costs this picture only."""
    return render_safely(slices, picture, lines=[(line.name, line.coords) for line in site.lines])


def _scores(stack: xr.Dataset, line_spacing_m: float) -> list[float]:
    """Return how much extended structure each slice shows."""
    spacing = line_spacing_m / float(stack.attrs["cell_m"])
    return [structure(plane(stack, i), spacing=spacing) for i in range(stack.sizes["depth"])]


def _large(plan: Plan, told: Sequence[Statement], scores: Sequence[float]) -> list[int]:
    """Return the slices shown in large: those with most structure, without what the direct wave still colours."""
    clear = [
        i
        for i in range(len(told))
        if all(
            s.windows_ns[i][0] >= s.separation_m / s.velocity.value + 1.0 / s.centre_frequency_ghz for s in plan.sets
        )
    ]
    if not clear:
        return best_slices(scores)
    return [clear[i] for i in best_slices([scores[i] for i in clear])]


def _set_tags(s: SetPlan) -> dict[str, str]:
    """Return those tags of a statement in which one set may differ from the whole stack."""
    v = s.velocity
    said = {
        "velocity_m_per_ns": f"{v.value:.6g}",
        "velocity_error_m_per_ns": f"{v.error:.6g}",
        "velocity_origin": f"{v.origin}: {v.method}" if v.method else v.origin,
        "zero_rule": s.zero.method,
        "zero_error_ns": f"{s.zero.error:.6g}",
        "date": s.visit or "not stated",
    }
    return {f"PLANUM_{name.upper()}": text for name, text in said.items()}


_STACK_ONLY = ("STATISTIC", "FILL", "COVERAGE_RULE", "RESOLUTION", "STRETCH")


def _copy_sections(
    pictures: Path, plan: Plan, sections: Mapping[tuple[str, int], Path], whole: Mapping[str, str]
) -> dict[tuple[str, str], str]:
    """Copy one section picture per row; return (label, entry's set and row) to the path within the run folder."""
    linked = {}
    used: set[str] = set()
    for s in plan.sets:
        about = {k: v for k, v in whole.items() if k.removeprefix("PLANUM_") not in _STACK_ONLY} | _set_tags(s)
        for row in range(s.geometry.n_lines):
            path = sections.get((s.name, row))
            if path is None:
                continue
            title = row_title(s, row)
            stem = _section_name(s, row, used)
            said = about | {
                "PLANUM_QUANTITY": f"one line in section: {title}; raw, processed and, where it is, migrated"
            }
            copy_png(path, pictures / "sections" / f"{stem}.png", statement=statement_text(said))
            linked[title, f"{s.name}/{row}"] = f"pictures/sections/{stem}.png"
    return linked


def _section_name(s: SetPlan, row: int, used: set[str]) -> str:
    """Return a file name for a row, another one than all before whatever case a disk heeds."""
    grids = s.name if s.name.count("/") > 1 else s.grid
    lines = "-".join(dict.fromkeys(e.line for e in s.entries if e.row == row))
    plain = "".join(c if c.isalnum() or c in "-_" else "-" for c in f"{grids}_line-{lines}")
    stem, number = plain, 1
    while stem.casefold() in used:
        number += 1
        stem = f"{plain}_{number}"
    used.add(stem.casefold())
    return stem


def _write_record(folder: Path, run: RunFacts, told: Sequence[Statement], token: str) -> None:
    files = {
        str(p.relative_to(folder).as_posix()): p.stat().st_size
        for p in sorted(folder.rglob("*"))
        if p.is_file() and not p.name.startswith(".")
    }
    record = {
        "output_key": token,
        "version": planum.__version__,
        "versions": versions(),
        "plan": run.plan.model_dump(mode="json"),
        "facts": {name: _digest(f) for name, f in run.facts.items()},
        "velocity_curve": dict(run.curve),
        "warnings": [p.to_dict() for p in run.warnings],
        "set_aside": [p.to_dict() for p in run.set_aside],
        "summary": run.summary(),
        "statement": told[0].model_dump(mode="json"),
        "statements": [s.model_dump(mode="json") for s in told],
        "files": files,
    }
    with aside(folder / "run.json") as part:
        part.write_text(json.dumps(record, indent=1, allow_nan=False, ensure_ascii=False), encoding="utf-8")


def _digest(facts: Facts) -> dict[str, Any]:
    """Return a line's facts without its curves, which their hash stands for."""
    curves = {"typical", "envelope", "spectrum", "dead", "clipped"}
    short = facts.model_dump(mode="json", exclude=curves | {"problems"})
    return short | {"dead": len(facts.dead), "clipped": len(facts.clipped), "curves": key(json.loads(canon(facts)))}
