"""Strips to the slice stack on the common raster, in blocks of rows: memory does not grow with the survey.

Cells are resampled once, straight from the lines to north-up cells, whatever the grid's rotation.
"""

from __future__ import annotations

import shutil
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import numpy as np
import xarray as xr
import zarr
from pyproj import CRS

from planum.pipeline.store import Store
from planum.records import FLAG_NONE, Plan, SetPlan, key
from planum.slices.gridding import LineGridder

__all__ = ["grid_stack", "gridded_key", "open_stack"]

GRIDDING_VERSION = 2
CELLS_AT_ONCE = 25_000
"""Cells whose weights are held at a time, some 25 MB while they are built."""

Progress = Callable[[str, int, int], None]


def gridded_key(plan: Plan, rows: Mapping[str, Sequence[str | None]]) -> str:
    """Return what the stack depends on, hashed: the rows, their places and the raster."""
    sets = [[s.name, s.geometry, s.frame.model_dump(include={"a", "b", "e0", "n0", "mirrored"})] for s in plan.sets]
    return key([GRIDDING_VERSION, dict(rows), sets, plan.cell_m, plan.bounds, plan.intervals_m])


def open_stack(folder: Path, plan: Plan) -> xr.Dataset:
    """Return the finished stack as a slice dataset, lazily."""
    group = zarr.open_group(folder, mode="r", zarr_format=3)
    data = xr.open_zarr(group.store, consolidated=False, zarr_format=3)
    tops, bottoms = np.array(plan.intervals_m).T
    west, south, east, north = plan.bounds
    cell = plan.cell_m
    nx, ny = round((east - west) / cell), round((north - south) / cell)
    errors = np.max(
        [
            s.velocity.depth_error(
                0.5 * (tops + bottoms),
                separation_m=s.separation_m,
                zero_error_ns=s.zero.error,
                thickness_m=float(bottoms[0] - tops[0]),
                sample_ns=s.geometry.time_step_ns,
            )
            for s in plan.sets
        ],
        axis=0,
    )
    return data.assign_coords(
        depth=("depth", 0.5 * (tops + bottoms), {"units": "m"}),
        y=("y", north - cell * (np.arange(ny) + 0.5), {"units": "m"}),
        x=("x", west + cell * (np.arange(nx) + 0.5), {"units": "m"}),
    ).assign(
        depth_bounds=(("depth", "bound"), np.column_stack([tops, bottoms]), {"units": "m"}),
        depth_error=("depth", errors, {"units": "m"}),
    ).assign_attrs(
        crs=CRS.from_user_input(plan.crs).to_wkt() if plan.crs else "", title=plan.title, code=plan.code, cell_m=cell
    )  # fmt: skip


def grid_stack(
    plan: Plan, rows: Mapping[str, Sequence[str | None]], store: Store, *, progress: Progress | None = None
) -> Path:
    """Make the slice stack unless it is there already; return its folder.

    Parameters
    ----------
    plan : Plan
        Raster, intervals and sets.
    rows : mapping
        For every set its rows' keys in the store, None where nothing was recorded.
    """
    folder = store.path("gridded", gridded_key(plan, rows), "")
    if folder.is_dir():
        return folder
    part = folder.with_name(f".{folder.name}.part")
    shutil.rmtree(part, ignore_errors=True)
    west, south, east, north = plan.bounds
    nx, ny = round((east - west) / plan.cell_m), round((north - south) / plan.cell_m)
    n = len(plan.intervals_m)
    tall = max(1, min(ny, CELLS_AT_ONCE // nx))
    root = zarr.open_group(part, mode="w", zarr_format=3)
    stacks = {
        name: _array(root, name, (n, ny, nx), (1, tall, nx), "float32", ("depth", "y", "x"))
        for name in ("amplitude", "left_out_error")
    }
    coverage = _array(root, "coverage", (ny, nx), (tall, nx), "uint8", ("y", "x"))
    sets = [_Set(s, rows[s.name], store, plan.cell_m) for s in plan.sets]
    x = west + plan.cell_m * (np.arange(nx) + 0.5)
    limited = 0
    starts = range(0, ny, tall)
    for done, top in enumerate(starts, 1):
        y = north - plan.cell_m * (np.arange(top, min(top + tall, ny)) + 0.5)
        xx, yy = (a.ravel() for a in np.meshgrid(x, y))
        limited += _block(sets, xx, yy, slice(top, top + len(y)), stacks, coverage)
        if progress:
            progress("making slices", done, len(starts))
    root.attrs["limited_cells"] = limited
    part.rename(folder)
    return folder


def _array(
    root: zarr.Group, name: str, shape: tuple[int, ...], chunks: tuple[int, ...], dtype: str, dims: Sequence[str]
) -> zarr.Array:
    fill = np.nan if dtype == "float32" else 0
    return root.create_array(
        name, shape=shape, chunks=chunks, dtype=dtype, fill_value=fill, dimension_names=list(dims), compressors=None
    )


class _Set:
    """One set's strips, slice by slice, and what leaving each line out would have missed."""

    def __init__(self, plan: SetPlan, rows: Sequence[str | None], store: Store, cell_m: float) -> None:
        g = plan.geometry
        self.plan = plan
        flag = np.full((g.n_lines, g.n_along), FLAG_NONE, np.uint8)
        kept = [None if k is None else store.load_array("rows", k) for k in rows]
        for i, (k, values) in enumerate(zip(rows, kept, strict=True)):
            marks = None if k is None else store.load_array("flags", k)
            if values is not None and marks is not None:
                flag[i] = marks
        self.gridder = LineGridder(g, flag, cell_m=cell_m)
        self.folder = store.path("strips", key([GRIDDING_VERSION, plan.name, list(rows)]), "")
        if not self.folder.is_dir():
            self._collect(kept, len(plan.windows_ns))
        root = zarr.open_group(self.folder, mode="r", zarr_format=3)
        self.values, self.left_out = root["values"], root["left_out"]

    def _collect(self, kept: Sequence[np.ndarray | None], n: int) -> None:
        """Turn rows into slices: one chunk is one slice of the set."""
        g = self.plan.geometry
        part = self.folder.with_name(f".{self.folder.name}.part")
        shutil.rmtree(part, ignore_errors=True)
        root = zarr.open_group(part, mode="w", zarr_format=3)
        shape, chunk = (n, g.n_lines, g.n_along), (1, g.n_lines, g.n_along)
        arrays = [
            _array(root, name, shape, chunk, "float32", ("slice", "line", "along")) for name in ("values", "left_out")
        ]
        for k in range(n):
            strip = np.full((g.n_lines, g.n_along), np.nan, np.float32)
            for i, values in enumerate(kept):
                if values is not None:
                    strip[i] = values[k]
            arrays[0][k] = strip
            arrays[1][k] = self.gridder.left_out(strip)
        part.rename(self.folder)


def _block(
    sets: Sequence[_Set],
    east: np.ndarray,
    north: np.ndarray,
    where: slice,
    stacks: Mapping[str, zarr.Array],
    coverage: zarr.Array,
) -> int:
    """Fill one block of raster rows from all sets; a measured cell beats a filled one, an earlier set a later."""
    shape = (where.stop - where.start, len(east) // (where.stop - where.start))
    covered = np.zeros(len(east), np.uint8)
    parts = []
    for one in sets:
        weights = one.gridder.weights(*one.plan.frame.inverse(east, north))
        mine = (weights.coverage > 0) & ((covered == 0) | ((covered > 1) & (weights.coverage == 1)))
        covered[mine] = weights.coverage[mine]
        if mine.any():
            parts.append((one, weights, mine))
    coverage[where] = covered.reshape(shape)
    limited = 0
    for k in range(stacks["amplitude"].shape[0]):
        values, left = np.full(len(east), np.nan, np.float32), np.full(len(east), np.nan, np.float32)
        for one, weights, mine in parts:
            values[mine] = weights.apply(one.values[k])[mine]
            limited += weights.limited
            # The kernel along a line has negative lobes; a size has no sign.
            left[mine] = np.maximum(weights.between(one.left_out[k])[mine], 0.0)
        stacks["amplitude"][k, where] = values.reshape(shape)
        stacks["left_out_error"][k, where] = left.reshape(shape)
    return limited
