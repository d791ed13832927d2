"""What a line, a cube and a slice stack look like. Each check returns nothing and changes nothing.

======  ==============================================================================================
Line    amplitude(trace, sample); time(sample) ns from sample 0; optional x, y(trace) m; flag(trace) u1
Cube    amplitude(line, along, time) f4; line, along m and time ns regular; x, y, flag(line, along)
Slices  amplitude(depth, y, x) f4; depth_bounds(depth, bound), depth_error(depth) m; coverage(y, x) u1
======  ==============================================================================================

A row or place without a recording holds 0 in a cube and is flagged; a slice holds NaN where nothing is known.
"""

from __future__ import annotations

import numpy as np
import xarray as xr

__all__ = ["COVERAGE", "CUBE_DIMS", "LINE_DIMS", "SLICE_DIMS", "check_cube", "check_slices", "cube", "regular_step"]

LINE_DIMS = ("trace", "sample")
CUBE_DIMS = ("line", "along", "time")
SLICE_DIMS = ("depth", "y", "x")
COVERAGE = {0: "not_surveyed", 1: "measured", 2: "filled_between_lines", 3: "filled_across_missing_line", 4: "obstacle"}
"""Values of ``coverage`` and their CF flag meanings."""

_UNITS = {"line": "m", "along": "m", "time": "ns", "x": "m", "y": "m", "depth": "m"}


def regular_step(values: np.ndarray, *, name: str) -> float:
    """Return the step of a regular axis.

    Raises
    ------
    ValueError
        When the axis has fewer than two values or is not regular to one part in a thousand of its step.
    """
    values = np.asarray(values, float)
    if values.size < 2:
        raise ValueError(f"{name} has {values.size} value(s); a regular axis needs at least 2")
    steps = np.diff(values)
    step = float((values[-1] - values[0]) / (values.size - 1))
    if step <= 0 or np.max(np.abs(steps - step)) > 1e-3 * step:
        raise ValueError(f"{name} is not regular and ascending (steps {steps.min():g} to {steps.max():g})")
    return step


def cube(
    amplitude: np.ndarray,
    *,
    line: np.ndarray,
    along: np.ndarray,
    time: np.ndarray,
    flag: np.ndarray | None = None,
    x: np.ndarray | None = None,
    y: np.ndarray | None = None,
) -> xr.DataArray:
    """Return a cube from plain arrays; without ``x``, ``y`` the lines run straight along local x."""
    shape = amplitude.shape[:2]
    if x is None or y is None:
        x, y = np.broadcast_to(np.asarray(along)[None, :], shape), np.broadcast_to(np.asarray(line)[:, None], shape)
    if flag is None:
        flag = np.zeros(shape, np.uint8)
    places = ("line", "along")
    return xr.DataArray(
        amplitude,
        dims=CUBE_DIMS,
        coords={
            "line": ("line", line, {"units": "m"}),
            "along": ("along", along, {"units": "m"}),
            "time": ("time", time, {"units": "ns"}),
            "x": (places, x, {"units": "m"}),
            "y": (places, y, {"units": "m"}),
            "flag": (places, flag),
        },
        name="amplitude",
        attrs={"quantity": "voltage"},
    )


def check_cube(data: xr.DataArray) -> None:
    """Raise ValueError unless ``data`` is a cube with regular along and time axes (line may hold one row)."""
    if data.dims != CUBE_DIMS:
        raise ValueError(f"a cube has dims {CUBE_DIMS}, got {data.dims}")
    for name in CUBE_DIMS:
        if name not in data.coords:
            raise ValueError(f"a cube needs the coordinate {name!r}")
        units = data[name].attrs.get("units", _UNITS[name])
        if units != _UNITS[name]:
            raise ValueError(f"{name} is in {units!r}; a cube wants {_UNITS[name]!r}")
        if data.sizes[name] > 1:
            regular_step(data[name].values, name=name)


def check_slices(data: xr.Dataset) -> None:
    """Raise ValueError unless ``data`` is a slice stack with its bounds, errors and coverage."""
    for name, dims in {
        "amplitude": SLICE_DIMS,
        "depth_bounds": ("depth", "bound"),
        "depth_error": ("depth",),
        "coverage": ("y", "x"),
    }.items():
        if name not in data:
            raise ValueError(f"a slice stack needs {name!r}")
        if data[name].dims != dims:
            raise ValueError(f"{name} has dims {data[name].dims}, a slice stack wants {dims}")
