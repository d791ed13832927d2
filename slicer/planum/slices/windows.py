"""Mean amplitude over time windows, by prefix sums with fractional edges.

The trace between two samples is a straight line: the mean of a linear function is exact for any edges, and the cost
does not depend on how thick the windows are.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from planum.errors import Problem, RecipeError
from planum.schema import regular_step

__all__ = ["window_means", "window_means_kernel"]


def window_means_kernel(data: np.ndarray, low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Return the mean of ``data`` (..., sample) between fractional samples ``low`` and ``high`` (slice), float32.

    The integral of the straight lines between samples, in float64, over the window's length. NaN where a window
    reaches beyond the first or last sample.
    """
    n = data.shape[-1]
    low, high = np.asarray(low, float), np.asarray(high, float)
    inside = (low >= -1e-9) & (high <= n - 1 + 1e-9)
    total = np.zeros((*data.shape[:-1], n))
    np.cumsum(data[..., :-1] + data[..., 1:].astype(np.float64), axis=-1, dtype=np.float64, out=total[..., 1:])
    total *= 0.5
    out = np.full((*data.shape[:-1], low.size), np.nan, np.float32)
    a, b = low[inside], high[inside]
    out[..., inside] = (_integral(data, total, b) - _integral(data, total, a)) / (b - a)
    return out


def _integral(data: np.ndarray, total: np.ndarray, u: np.ndarray) -> np.ndarray:
    """Integral from sample 0 to the fractional samples ``u``, in sample units."""
    k = np.clip(np.floor(u).astype(np.int64), 0, data.shape[-1] - 2)
    part = u - k
    first = data[..., k].astype(np.float64)
    return total[..., k] + part * (first + 0.5 * part * (data[..., k + 1] - first))


def window_means(envelope: xr.DataArray, windows_ns: Sequence[tuple[float, float]]) -> xr.DataArray:
    """Return the mean envelope over each time window.

    Parameters
    ----------
    envelope : DataArray (..., time)
        Time regular, ns. May be dask-backed if ``time`` is in one chunk.
    windows_ns : sequence of (start, end)
        Two-way times in ns on the array's time axis; need not lie on samples, may overlap.

    Returns
    -------
    DataArray (..., slice) float32
        Coords ``start_ns`` and ``end_ns`` on ``slice``; NaN where a window reaches beyond the time axis. Attrs kept.
        The samples are joined by straight lines: exact for linear functions.

    Raises
    ------
    RecipeError
        When there is no window or one does not end after it starts.
    """
    edges = np.asarray(windows_ns, float).reshape(-1, 2)
    if edges.shape[0] == 0 or not np.all(edges[:, 1] > edges[:, 0]):
        bad = edges[~(edges[:, 1] > edges[:, 0])]
        came = f"window from {bad[0, 0]:g} to {bad[0, 1]:g} ns" if bad.size else "no time windows"
        raise RecipeError(Problem(came, allowed="windows that end after they start", key="slices"))
    time = envelope["time"].values
    step = regular_step(time, name="time")
    place = (edges - float(time[0])) / step
    out = xr.apply_ufunc(
        window_means_kernel,
        envelope,
        kwargs={"low": place[:, 0], "high": place[:, 1]},
        input_core_dims=[["time"]],
        output_core_dims=[["slice"]],
        dask="parallelized",
        dask_gufunc_kwargs={"output_sizes": {"slice": edges.shape[0]}},
        output_dtypes=[np.float32],
        keep_attrs=True,
    )
    return out.assign_coords(
        start_ns=("slice", edges[:, 0], {"units": "ns"}), end_ns=("slice", edges[:, 1], {"units": "ns"})
    )
