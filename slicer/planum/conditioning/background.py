"""Background: what all traces of a set share (antenna ringing, direct wave), taken off."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

import numpy as np
import xarray as xr

from planum.errors import Problem, RecipeError
from planum.records import FLAG_DEAD, FLAG_NONE
from planum.schema import regular_step

__all__ = ["background", "between_blocks", "running_mean"]


def between_blocks(traces: np.ndarray, at_m: np.ndarray, line_m: np.ndarray) -> np.ndarray:
    """Return the typical trace (line, time) at each line: linear between blocks, held beyond the outer ones."""
    at_m = np.asarray(at_m, float)
    if at_m.size == 1:
        return np.repeat(np.asarray(traces, float), np.size(line_m), axis=0)
    place = np.interp(np.asarray(line_m, float), at_m, np.arange(at_m.size))
    low = np.minimum(place.astype(np.int64), at_m.size - 2)
    share = (place - low)[:, None]
    traces = np.asarray(traces, float)
    return (1.0 - share) * traces[low] + share * traces[low + 1]


def running_mean(data: np.ndarray, empty: np.ndarray, *, window: int) -> np.ndarray:
    """Return ``data`` (..., along, time) less its mean over ``window`` (odd) places of the line, float32.

    Places marked ``empty`` (..., along) neither count nor change. Near the ends the window holds what exists.
    """
    n = data.shape[-2]
    weight = np.where(empty, 0.0, 1.0)
    total = np.zeros((*data.shape[:-2], n + 1, data.shape[-1]))
    np.cumsum(np.where(empty[..., None], 0.0, data), axis=-2, dtype=np.float64, out=total[..., 1:, :])
    count = np.zeros((*weight.shape[:-1], n + 1))
    np.cumsum(weight, axis=-1, out=count[..., 1:])
    i = np.arange(n)
    low, high = np.maximum(i - window // 2, 0), np.minimum(i + window // 2 + 1, n)
    mean = (total[..., high, :] - total[..., low, :]) / np.maximum(count[..., high] - count[..., low], 1.0)[..., None]
    return np.where(empty[..., None], data, data - mean).astype(np.float32)


def _subtract(data: np.ndarray, empty: np.ndarray, typical: np.ndarray) -> np.ndarray:
    return np.where(empty[..., None], data, data - typical).astype(np.float32)


def background(
    cube: xr.DataArray,
    *,
    scope: Literal["set", "line"] = "set",
    traces: Sequence[Sequence[float]] | None = None,
    at_m: Sequence[float] | None = None,
    window_m: float | None = None,
) -> xr.DataArray:
    """Take off what the traces of a set have in common.

    Parameters
    ----------
    cube : DataArray (line, along, time)
        Voltage. May be dask-backed, ``time`` (and for scope "line" also ``along``) in one chunk.
    scope : "set" or "line"
        "set" subtracts learned typical traces; walls along the lines stay. "line" subtracts the running mean along
        each line, which deletes whatever runs along it for longer than the window.
    traces : (block, time)
        Typical traces of blocks of lines, for scope "set".
    at_m : (block,)
        Ascending positions of the blocks on the ``line`` axis, m; linear between, held beyond.
    window_m : float
        Length of the running mean, m, for scope "line".

    Returns
    -------
    DataArray (line, along, time) float32
        Coords and attrs kept; places without a recording and dead ones stay as they are.

    Raises
    ------
    RecipeError
        When the settings do not fit the scope or the time axis.
    """
    flag = cube.coords["flag"] if "flag" in cube.coords else xr.zeros_like(cube.isel(time=0, drop=True), dtype=np.uint8)
    empty = (flag.reset_coords(drop=True) & (FLAG_NONE | FLAG_DEAD)) != 0
    if scope == "line":
        if window_m is None or not window_m > 0:
            raise RecipeError(
                Problem(f"window_m is {window_m}", allowed="a positive length in m", key="background.window_m")
            )
        places = window_m / regular_step(cube["along"].values, name="along")
        return xr.apply_ufunc(
            running_mean,
            cube,
            empty,
            kwargs={"window": max(2 * round((places - 1.0) / 2.0) + 1, 1)},
            input_core_dims=[["along", "time"], ["along"]],
            output_core_dims=[["along", "time"]],
            dask="parallelized",
            output_dtypes=[np.float32],
            keep_attrs="override",
        ).transpose(*cube.dims)
    blocks = _blocks(scope, traces, at_m, cube.sizes["time"])
    typical = between_blocks(blocks, np.asarray(at_m, float), np.atleast_1d(cube["line"].values)).astype(np.float32)
    return xr.apply_ufunc(
        _subtract,
        cube,
        empty,
        xr.DataArray(typical, dims=("line", "time")),
        input_core_dims=[["time"], [], ["time"]],
        output_core_dims=[["time"]],
        dask="parallelized",
        output_dtypes=[np.float32],
        keep_attrs="override",
    ).transpose(*cube.dims)


def _blocks(
    scope: str, traces: Sequence[Sequence[float]] | None, at_m: Sequence[float] | None, n_time: int
) -> np.ndarray:
    if scope != "set":
        raise RecipeError(Problem(f"scope is {scope!r}", allowed='"set" or "line"', key="background.scope"))
    if traces is None or at_m is None:
        raise RecipeError(
            Problem(
                "background without typical traces",
                allowed="traces and at_m, as learned from the set",
                do="let the set's facts resolve the recipe first",
                key="background.traces",
            )
        )
    blocks = np.asarray(traces, float)
    at = np.asarray(at_m, float)
    if blocks.shape != (at.size, n_time) or at.size == 0 or np.any(np.diff(at) <= 0):
        raise RecipeError(
            Problem(
                f"traces of shape {blocks.shape} at {at.size} ascending places",
                allowed=f"one trace of {n_time} samples for each place",
                key="background.traces",
            )
        )
    return blocks
