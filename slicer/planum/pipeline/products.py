"""What a run writes: every file of the run folder, from the slice stack and the run's facts."""

from __future__ import annotations

import json
import platform
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

import planum
from planum.constants import LIMIT_MARGIN, MASK_BETWEEN, MASK_OUTSIDE
from planum.errors import Problem
from planum.outputs.geopackage import ControlShape, GridShape, LineShape, SiteShapes, write_geopackage
from planum.outputs.geotiff import write_slices
from planum.outputs.netcdf import write_netcdf
from planum.outputs.pictures import draw_contact_sheet, draw_slices
from planum.outputs.raster import raster_of
from planum.outputs.stack import write_stack
from planum.outputs.stretch import Stretch, stretch_of
from planum.outputs.writing import aside
from planum.records import Facts, Plan, SetPlan, Statement, Strip, canon, key
from planum.survey.control import ControlPoint

__all__ = ["RunFacts", "section_key", "section_picture", "statements", "write_products"]

PRODUCTS_VERSION = 1
"""Raised when wording, pictures or formats change, so that an unchanged survey is written anew."""

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class RunFacts:
    """Everything a run's products tell besides the slices themselves."""

    plan: Plan
    control: tuple[ControlPoint, ...]
    facts: Mapping[str, Facts]
    warnings: tuple[Problem, ...]
    set_aside: tuple[Problem, ...]
    curve: Mapping[str, list[float]]
    visits: Mapping[str, str]

    def output_key(self) -> str:
        """Return the name of this result by content: plan, wording and versions."""
        told = [p.to_dict() for p in (*self.warnings, *self.set_aside)]
        return key([PRODUCTS_VERSION, planum.__version__, self.plan, told, dict(self.visits)])

    def without(self, failed: Sequence[Problem]) -> RunFacts:
        """Return the facts with lines that failed in the second pass set aside as well."""
        return replace(self, set_aside=(*self.set_aside, *failed))

    def missing(self) -> list[str]:
        """Name the rows of each set that have no recording, by their place across the lines."""
        out = []
        for s in self.plan.sets:
            there = {e.row for e in s.entries}
            across = "y" if s.geometry.direction == "x" else "x"
            gone = [f"{m:.2f}" for i, m in enumerate(s.geometry.lines()) if i not in there]
            if gone:
                out.append(f"set {s.name}: no recording at {across} = {', '.join(gone)} m")
        return out

    def summary(self) -> dict[str, Any]:
        """Return what a person wants to know first."""
        plan, first = self.plan, self.plan.sets[0]
        west, south, east, north = plan.bounds
        return {
            "lines": sum(len({e.row for e in s.entries}) for s in plan.sets),
            "sets": [s.name for s in plan.sets],
            "slices": len(plan.intervals_m),
            "raster": f"{round((east - west) / plan.cell_m)} × {round((north - south) / plan.cell_m)} cells of {plan.cell_m:g} m",
            "velocity": f"{first.velocity.value:.4f} ± {first.velocity.error:.4f} m/ns ({first.velocity.origin})",
            "time_zero": str(first.zero),
            "missing": self.missing(),
            "limit_depth_m": first.limit_depth_m,
            "notes": list(plan.notes),
        }


def section_key(plan: SetPlan, row: int, row_name: str) -> str:
    """Return what the picture of one row depends on, hashed."""
    return key([PRODUCTS_VERSION, row_name, plan.name, row, plan.velocity, plan.separation_m])


def section_picture(path: Path, plan: SetPlan, row: int, strip: Strip, survey: Plan) -> None:
    """Draw one row's section: raw, processed, migrated."""
    with aside(path) as part:
        part.write_bytes(b"")


def statements(plan: Plan, stack: xr.Dataset, stretch: Stretch) -> tuple[Statement, ...]:
    """Return one statement per slice; where sets differ the least certain speaks."""
    s = max(plan.sets, key=lambda one: one.velocity.error / one.velocity.value)
    migrated = any(step.name == "migrate" for step in s.chain)
    spacing = max(one.geometry.line_step_m for one in plan.sets)
    date = ", ".join(sorted({one.visit for one in plan.sets if one.visit})) or "not stated"
    name = key(plan)
    return tuple(
        Statement(
            quantity="mean envelope amplitude in the recorder's units",
            top_m=top,
            bottom_m=bottom,
            statistic=plan.statistic,
            velocity_m_per_ns=s.velocity.value,
            velocity_error_m_per_ns=s.velocity.error,
            velocity_origin=f"{s.velocity.origin}: {s.velocity.method}" if s.velocity.method else s.velocity.origin,
            depth_error_m=float(error),
            zero_rule=s.zero.method,
            zero_error_ns=s.zero.error,
            surface="the ground surface as walked",
            date=date,
            migration="migrated in 2-D, line by line, at one velocity" if migrated else "not migrated",
            fill=f"filled between lines by a band-limited kernel held to the neighbouring lines' range within {LIMIT_MARGIN:.0%}",
            line_spacing_m=spacing,
            coverage_rule=f"empty beyond {MASK_BETWEEN:g} line spacing from a trace, {MASK_OUTSIDE:g} outside the outer lines",
            resolution=plan.notes[0].rstrip(".").replace("Features", "features", 1) if plan.notes else "",
            stretch=stretch.text,
            survey=plan.title,
            plan_key=name,
            version=f"planum {plan.version}",
        )
        for (top, bottom), error in zip(plan.intervals_m, stack["depth_error"].values, strict=True)
    )


def shapes(run: RunFacts, stack: xr.Dataset) -> SiteShapes:
    """Return lines, grids, control points and coverage in the map frame."""
    lines, grids = [], []
    residuals: dict[str, float] = {}
    for s in run.plan.sets:
        residuals |= dict(s.frame.residuals_m)
        for e in s.entries:
            coords = np.column_stack(s.frame.forward(*np.array([e.start, e.end]).T))
            about = {"line": e.line, "row": e.row, "time_zero_ns": e.zero_ns[0][1], "gain": e.gain, "traces": e.last_trace - e.first_trace + 1}
            lines.append(LineShape(e.key, s.name, e.file, coords, about))
        g = s.geometry
        a0, a1 = g.along()[[0, -1]]
        c0, c1 = g.lines()[[0, -1]]
        corners = np.array([[a0, c0], [a1, c0], [a1, c1], [a0, c1]])
        corners = corners if g.direction == "x" else corners[:, ::-1]
        about = {
            "set": s.name, "radar": s.radar, "visit": s.visit, "line_spacing_m": g.line_step_m, "trace_spacing_m": g.along_step_m,
            "rotation_deg": s.frame.rotation_deg, "scale": s.frame.scale, "placing": s.frame.origin, "placing_error_m": s.frame.error_m,
        }  # fmt: skip
        grids.append(GridShape(s.grid, np.column_stack(s.frame.forward(*corners.T)), about))
    control = [
        ControlShape(c.point, c.easting_m, c.northing_m, residuals.get(c.point), {"grid": c.grid or "site", "local_x_m": c.local_x_m, "local_y_m": c.local_y_m})
        for c in run.control
    ]
    return SiteShapes(
        crs=run.plan.crs or "", lines=lines, grids=grids, control=control, coverage=stack["coverage"].values, raster=raster_of(stack)
    )


def write_products(
    folder: Path,
    stack: xr.Dataset,
    run: RunFacts,
    *,
    sections: Mapping[tuple[str, int], Path],
    token: str,
    progress: Progress | None = None,
) -> None:
    """Write every product of a run into an empty folder; ``run.json`` comes last and lists the others."""
    plan = run.plan
    stretch = stretch_of(stack)
    told = statements(plan, stack, stretch)
    n = len(told)

    def step(stage: str) -> Callable[[int, int], None]:
        return lambda done, total: progress(stage, done, total) if progress else None

    write_slices(folder / "slices", stack, told, stretch, progress=step("writing rasters"))
    write_stack(folder / "slices_all.tif", stack, told)
    write_netcdf(folder / "slices.nc", stack, told, history=f"planum {plan.version}, plan {key(plan)}")
    changed = max((s.visit for s in plan.sets if s.visit), default="1970-01-01")
    write_geopackage(folder / "site.gpkg", shapes(run, stack), told, changed=changed)
    pictures = folder / "pictures"
    draw_slices(pictures, stack, told, stretch, progress=step("drawing slices"))
    draw_contact_sheet(pictures / "contact-sheet.png", stack, told, stretch)
    _write_record(folder, run, told, token)


def _write_record(folder: Path, run: RunFacts, told: Sequence[Statement], token: str) -> None:
    files = {
        str(p.relative_to(folder).as_posix()): p.stat().st_size
        for p in sorted(folder.rglob("*"))
        if p.is_file() and not p.name.startswith(".")
    }
    record = {
        "output_key": token,
        "version": planum.__version__,
        "versions": {name: version(name) for name in ("numpy", "scipy", "xarray", "rasterio", "pyproj")}
        | {"python": platform.python_version()},
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
