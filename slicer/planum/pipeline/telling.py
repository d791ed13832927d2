"""What the report says, gathered from a run: plain values, nothing computed here but words."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from planum.outputs.report import Picture, ReportContext, ReportTable
from planum.pipeline.recipe import settings_text
from planum.pipeline.told import RunFacts, noise_depth, versions
from planum.records import Plan, Statement

__all__ = ["FILES", "Drawn", "report_context"]

FILES = (
    ("slices/{code}_d040-050cm.tif", "one GeoTIFF per slice (float32, strong = high), with its QGIS and SLD style"),
    ("slices/{code}_*_grey.tif", "the same as 8-bit grey, strong = dark, for any viewer"),
    ("slices_all.tif", "all slices in one file, a band each"),
    ("slices.nc", "all slices with depth bounds, depth error, leave-one-line-out error and coverage (NetCDF, CF-1.11)"),
    ("site.gpkg", "lines, grids, control points with residuals, coverage (GeoPackage)"),
    ("pictures/", "every slice, the contact sheet, the isosurface, one section per line"),
    ("run.json", "every number of this run; the command planum map SITE --plan run.json repeats it"),
)


@dataclass(frozen=True)
class Drawn:
    """What was drawn.

    Pictures by name (``contact``, perhaps ``isosurface``, ``focus``), one per slice, the slices shown in large, and the
    sections by label.
    """

    named: Mapping[str, Path]
    slices: Sequence[Path]
    large: Sequence[int]
    sections: Mapping[str, str]


def report_context(run: RunFacts, statements: Sequence[Statement], drawn: Drawn, folder: Path) -> ReportContext:
    """Return everything the report says; files that are not in ``folder`` are not named."""
    plan, summary = run.plan, run.summary()
    first, named = plan.sets[0], drawn.named
    v = first.velocity
    surveyed = [
        ("Lines", f"{summary['lines']} in {len(plan.sets)} set{'s' if len(plan.sets) > 1 else ''}"),
        ("Raster", summary["raster"]),
        *(("Ground", text) for text in run.visits.values() if text),
    ]
    limit = noise_depth(plan)
    if limit is not None:
        surveyed.append(("Ground meets noise", f"{limit:.2f} m; below it only strong reflectors show"))
    leading, focus = [], None
    if "isosurface" in named:
        alt, caption = (
            "Isosurface of strong bodies",
            "What stands out over several lines, as bodies, with one depth slice.",
        )
        leading.append(Picture(named["isosurface"], alt, caption))
    if "focus" in named:
        focus = Picture(named["focus"], "How sharp the migrated lines are at each velocity")
    return ReportContext(
        title=plan.title,
        code=plan.code,
        statements=tuple(statements),
        surveyed=tuple(surveyed),
        frame=_frame(plan),
        velocity=f"{v.method[:1].upper()}{v.method[1:]}." if v.origin == "measured" else "",
        contact=Picture(named["contact"], "All depth slices, shallow to deep"),
        leading=tuple(leading),
        best=tuple(
            Picture(
                drawn.slices[i],
                f"Slice {statements[i].top_m:.2f} to {statements[i].bottom_m:.2f} m",
                _slice_caption(statements[i]),
            )
            for i in drawn.large
        ),
        focus=focus,
        problems=run.warnings,
        set_aside=run.set_aside,
        missing=tuple(run.missing()),
        control=_control(plan),
        sections=tuple(drawn.sections.items()),
        files=tuple(_files(plan, folder)),
        recipe=tuple((s.name, settings_text(s.params)) for s in first.chain),
        versions=tuple(versions().items()),
        hashes=tuple((name, f.file_id) for name, f in run.facts.items()),
    )


def _slice_caption(s: Statement) -> str:
    """Return interval, error and date of a slice: a phone shows the picture's own letters too small."""
    noise = f" {s.noise[:1].upper()}{s.noise[1:]}." if s.in_noise else ""
    return f"{s.top_m:.2f} to {s.bottom_m:.2f} m, ± {s.depth_error_m:.2f} m, visit {s.date}.{noise}"


def _files(plan: Plan, folder: Path) -> list[tuple[str, str]]:
    """Name the outputs, the first slice standing for all."""
    first = min((p.name for p in (folder / "slices").glob(f"{plan.code}_d*cm.tif")), default="")
    rows = [(f"slices/{first}" if "d040-050cm" in name else name.format(code=plan.code), what) for name, what in FILES]
    return [(name, what) for name, what in rows if "*" in name or name == "run.json" or (folder / name).exists()]


def _frame(plan: Plan) -> str:
    frames = {s.grid: s.frame for s in plan.sets}
    if not plan.crs and all(f.origin == "local frame" for f in frames.values()):
        return "Coordinates are in the local frame of the grid: the survey names no map reference."
    parts = [f"Coordinates are in {plan.crs}." if plan.crs else "Coordinates are in the frame of the control points."]
    for grid, f in frames.items():
        error = "no redundancy, so no error is known" if f.error_m is None else f"± {f.error_m:.3f} m"
        mirror = ", y to the other hand" if f.mirrored else ""
        parts.append(
            f"Grid {grid}: {f.origin}, {error}; x axis {f.rotation_deg:.2f}° from east{mirror}, scale {f.scale:.5f}."
        )
    return " ".join(parts)


def _control(plan: Plan) -> ReportTable | None:
    rows = tuple(
        (grid, point, f"{miss:.3f} m")
        for grid, f in {s.grid: s.frame for s in plan.sets}.items()
        for point, miss in f.residuals_m
    )
    if not rows:
        return None
    return ReportTable(
        ("Grid", "Point", "Residual"), rows, note="Distance of each control point from where the fit puts it."
    )
