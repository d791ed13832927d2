"""The line pass: the recorded pieces of one row in, slices along that row out.

A pure function of raw traces, the row's entries and the set's chain: it estimates nothing, so the same bytes come out
on any schedule.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from planum import schema
from planum.cube.assemble import Piece, assemble_row
from planum.engine.steps import get_step
from planum.records import FLAG_NONE, SetPlan, StepSpec, Strip
from planum.slices.windows import window_means

__all__ = ["condition", "row_cube", "run_row"]

SECTION_TRACES = 1600
"""A section picture needs no more columns than a screen shows."""


def row_cube(pieces: Sequence[Piece], plan: SetPlan, row: int) -> xr.DataArray:
    """Return the raw cube of one row: dims (line=1, along, time), voltage in the file's unit."""
    geometry = plan.geometry
    placed = assemble_row(pieces, geometry, row=row)
    return schema.cube(
        placed.amplitude[None],
        line=geometry.lines()[row : row + 1],
        along=geometry.along(),
        time=geometry.times(),
        flag=placed.flag[None],
        x=placed.x[None],
        y=placed.y[None],
    )


def condition(cube: xr.DataArray, chain: Sequence[StepSpec]) -> xr.DataArray:
    """Run ``cube`` through the steps in turn."""
    for spec in chain:
        cube = get_step(spec.name)(cube, **spec.params)
    return cube


def run_row(pieces: Sequence[Piece], plan: SetPlan, row: int, *, section: bool = False) -> Strip:
    """Run one row through the set's chain and average the envelope over every slice's time window.

    Parameters
    ----------
    pieces : sequence of Piece
        The recorded pieces of the row.
    plan : SetPlan
        The set's axes, chain and windows.
    row : int
        Index on the line axis.
    section : bool
        Also return pictures of the row, raw, processed and (where it is) migrated, as uint8 (along, time).

    Returns
    -------
    Strip
        ``values`` (slice, along), NaN where nothing was recorded.
    """
    cube = row_cube(pieces, plan, row)
    stages = {"raw": cube}
    for spec in plan.chain:
        if spec.name in {"migrate", "envelope"} and "processed" not in stages:
            stages["processed"] = cube
        if spec.name == "envelope" and any(s.name == "migrate" for s in plan.chain):
            stages["migrated"] = cube
        cube = get_step(spec.name)(cube, **spec.params)
    means = window_means(cube, plan.windows_ns)
    flag = cube["flag"].values[0]
    values = np.ascontiguousarray(means.isel(line=0).transpose("slice", "along").values, dtype=np.float32)
    values[:, (flag & FLAG_NONE) != 0] = np.nan
    # the direct wave through the ground comes s / v after time zero's own; its pulse dies within a period and a half
    direct_ns = plan.separation_m / plan.velocity.value + 1.5 / plan.centre_frequency_ghz
    below = int(np.searchsorted(plan.geometry.times(), direct_ns))
    pictures = {name: _picture(stage.values[0], below) for name, stage in stages.items()} if section else None
    return Strip(row=row, values=values, flag=flag, section=pictures)


def _picture(amplitude: np.ndarray, below: int) -> np.ndarray:
    """Grey values of a section: 128 is zero, positive dark, black and white at a percentile of what was recorded.

    The stretch is taken from sample ``below`` on: with the direct wave in it the raw ground would be plain grey.
    """
    every = max(1, -(-amplitude.shape[0] // SECTION_TRACES))
    amplitude = amplitude[::every]
    recorded = amplitude[np.any(amplitude != 0.0, axis=1)]
    ground = np.abs(recorded[:, below:] if below < amplitude.shape[1] else recorded)
    high = float(np.percentile(ground, 98.0)) if ground.size else 0.0
    high = high or float(np.abs(amplitude).max(initial=0.0)) or 1.0
    return np.clip(128.0 - 127.0 * amplitude / high, 0.0, 255.0).astype(np.uint8)
