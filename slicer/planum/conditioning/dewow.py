"""Dewow: each trace less its running mean over time."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr

from planum.errors import Problem, RecipeError
from planum.schema import regular_step

__all__ = ["dewow", "dewow_kernel", "odd_window"]

_BLOCK = 256
"""Traces summed at a time: they stay in cache."""


def odd_window(window_ns: float, step_ns: float) -> int:
    """Return the odd number of samples, 3 at least, nearest to ``window_ns`` (the larger of two)."""
    return max(2 * math.floor(window_ns / step_ns / 2.0 + 1e-9) + 1, 3)


def dewow_kernel(data: np.ndarray, *, window: int) -> np.ndarray:
    """Return ``data`` (..., sample) less its running mean over ``window`` (odd) samples, float32.

    Near the ends the window holds only the samples that exist. Constants vanish everywhere, straight trends where the
    whole window fits. Sums run in float64.
    """
    n = data.shape[-1]
    half = min(window // 2, n)
    i = np.arange(n)
    count = np.minimum(i + half + 1, n) - np.maximum(i - half, 0)
    flat = data.reshape(-1, n)
    out = np.empty(flat.shape, np.float32)
    total = np.zeros((_BLOCK, n + 2 * half + 1))  # held beyond both ends
    for k in range(0, flat.shape[0], _BLOCK):
        part = flat[k : k + _BLOCK]
        sums = total[: part.shape[0]]
        np.cumsum(part, axis=-1, dtype=np.float64, out=sums[:, half + 1 : half + 1 + n])
        sums[:, half + 1 + n :] = sums[:, half + n, None]
        out[k : k + _BLOCK] = part - (sums[:, 2 * half + 1 :] - sums[:, :n]) / count
    return out.reshape(data.shape)


def dewow(cube: xr.DataArray, *, window_ns: float) -> xr.DataArray:
    """Take the slow drift (wow) off every trace.

    Parameters
    ----------
    cube : DataArray (..., time)
        Voltage; time regular, ns. May be dask-backed if ``time`` is in one chunk.
    window_ns : float
        Length of the running mean in ns; rounded to an odd number of samples, so that the result has no time shift.

    Returns
    -------
    DataArray (..., time) float32
        Coords and attrs kept.

    Raises
    ------
    RecipeError
        When the window is not positive.
    """
    if not window_ns > 0:
        raise RecipeError(
            Problem(f"window_ns is {window_ns:g}", allowed="a positive length in ns", key="dewow.window_ns")
        )
    window = odd_window(window_ns, regular_step(cube["time"].values, name="time"))
    return xr.apply_ufunc(
        dewow_kernel,
        cube,
        kwargs={"window": window},
        input_core_dims=[["time"]],
        output_core_dims=[["time"]],
        dask="parallelized",
        output_dtypes=[np.float32],
        keep_attrs=True,
    ).transpose(*cube.dims)
