"""What a run tells of itself: facts, and one statement per slice."""

from __future__ import annotations

import platform
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from importlib.metadata import version
from typing import Any

import xarray as xr

import planum
from planum.constants import LIMIT_MARGIN, MASK_BETWEEN, MASK_OUTSIDE
from planum.errors import Problem
from planum.outputs.stretch import Stretch
from planum.records import Facts, Plan, Statement, key, migration_velocity
from planum.survey.control import ControlPoint

__all__ = ["PRODUCTS_VERSION", "RunFacts", "noise_depth", "statements", "versions"]

PRODUCTS_VERSION = 3
"""Raised when wording, pictures or formats change, so that an unchanged survey is written anew."""

FILL = (
    "between lines: smooth curve through the lines, never outside the neighbouring lines' values by more than"
    f" {100 * LIMIT_MARGIN:g} % of their range"
)
COVERAGE_RULE = (
    f"empty farther than {MASK_BETWEEN:g} line spacings from a trace, {MASK_OUTSIDE:g} outside the outer lines"
)
NOISE_STEP_M = 0.05
"""The depth at which ground sinks into noise is told to this step: its median over lines bears no more."""


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
        control = [vars(c) for c in self.control]
        return key(
            [PRODUCTS_VERSION, planum.__version__, self.plan, told, control, dict(self.curve), dict(self.visits)]
        )

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
        columns, rows = round((east - west) / plan.cell_m), round((north - south) / plan.cell_m)
        return {
            "lines": sum(len({e.row for e in s.entries}) for s in plan.sets),
            "sets": [s.name for s in plan.sets],
            "slices": len(plan.intervals_m),
            "raster": f"{columns} × {rows} cells of {plan.cell_m:g} m",
            "velocity": f"{first.velocity.value:.4f} ± {first.velocity.error:.4f} m/ns ({first.velocity.origin})",
            "time_zero": str(first.zero),
            "missing": self.missing(),
            "limit_depth_m": noise_depth(plan),
            "notes": list(plan.notes),
        }


def statements(plan: Plan, stack: xr.Dataset, stretch: Stretch) -> tuple[Statement, ...]:
    """Return one statement per slice; where sets differ the least certain speaks."""
    s = max(plan.sets, key=lambda one: one.velocity.error / one.velocity.value)
    migrated, at = any(step.name == "migrate" for step in s.chain), migration_velocity(s)
    spacing = max(one.geometry.line_step_m for one in plan.sets)
    date = ", ".join(sorted({one.visit for one in plan.sets if one.visit})) or "not stated"
    name = key(plan)
    return tuple(
        Statement(
            quantity="envelope (strength of the echo) in the recorder's units",
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
            migration=f"migrated in 2-D, line by line{f', at {at:.4g} m/ns' if at else ''}"
            if migrated
            else "not migrated",
            fill=FILL,
            line_spacing_m=spacing,
            coverage_rule=COVERAGE_RULE,
            resolution=plan.notes[0].rstrip(".").replace("Features", "features", 1) if plan.notes else "",
            stretch=stretch.text,
            survey=plan.title,
            plan_key=name,
            version=plan.version,
            noise=_noise(noise_depth(plan), (top + bottom) / 2.0),
        )
        for (top, bottom), error in zip(plan.intervals_m, stack["depth_error"].values, strict=True)
    )


def noise_depth(plan: Plan) -> float | None:
    """Return the depth (m) at which ground sinks into noise, the shallowest of the sets; None when none gets there."""
    reached = [s.limit_depth_m for s in plan.sets if s.limit_depth_m is not None]
    return round(round(min(reached) / NOISE_STEP_M) * NOISE_STEP_M, 2) if reached else None


def _noise(limit_m: float | None, middle_m: float) -> str:
    if limit_m is None:
        return "where ground sinks into noise is not known: the record ends before its level is even"
    if middle_m > limit_m + 1e-9:
        return f"below the depth where ground sinks into noise ({limit_m:.2f} m): only strong reflectors show"
    return f"above the depth where ground sinks into noise ({limit_m:.2f} m)"


def versions() -> dict[str, str]:
    """Return the versions a result depends on."""
    found = {name: version(name) for name in ("numpy", "scipy", "xarray", "rasterio", "pyproj")}
    return {"planum": planum.__version__, "python": platform.python_version(), **found}
