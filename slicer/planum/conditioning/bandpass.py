"""Band-pass: zero phase, cosine tapers between four corner frequencies."""

from __future__ import annotations

import math

import numpy as np
import scipy.fft
import xarray as xr

from planum.errors import Problem, RecipeError
from planum.schema import regular_step

__all__ = ["band_taper", "bandpass", "bandpass_kernel", "padded_length"]


def band_taper(frequency_ghz: np.ndarray, corners_ghz: tuple[float, float, float, float]) -> np.ndarray:
    """Return the real, even frequency response: 0, cosine rise, 1, cosine fall, 0."""
    f = np.abs(np.asarray(frequency_ghz, float))
    low_stop, low_pass, high_pass, high_stop = corners_ghz
    up = np.clip((f - low_stop) / (low_pass - low_stop), 0.0, 1.0)
    down = np.clip((high_stop - f) / (high_stop - high_pass), 0.0, 1.0)
    return (0.5 - 0.5 * np.cos(np.pi * up)) * (0.5 - 0.5 * np.cos(np.pi * down))


def padded_length(n: int, step_ns: float, corners_ghz: tuple[float, float, float, float]) -> int:
    """Return the transform length: the record, and zeros for the response to die out in.

    The response of a cosine edge of width w falls as 1/(w t)^2 and better; after 4/w it is below 1e-3 of its peak.
    """
    narrow = min(corners_ghz[1] - corners_ghz[0], corners_ghz[3] - corners_ghz[2])
    return int(scipy.fft.next_fast_len(n + max(64, math.ceil(4.0 / (narrow * step_ns))), real=True))


def bandpass_kernel(data: np.ndarray, *, step_ns: float, corners_ghz: tuple[float, float, float, float]) -> np.ndarray:
    """Return ``data`` (..., sample) band-passed, float32; ``step_ns`` is the sample interval."""
    n = data.shape[-1]
    size = padded_length(n, step_ns, corners_ghz)
    response = band_taper(scipy.fft.rfftfreq(size, step_ns), corners_ghz).astype(np.float32)
    spectrum = scipy.fft.rfft(data.astype(np.float32, copy=False), n=size, axis=-1)
    spectrum *= response
    return scipy.fft.irfft(spectrum, n=size, axis=-1)[..., :n].astype(np.float32, copy=False)


def bandpass(
    cube: xr.DataArray, *, low_stop_ghz: float, low_pass_ghz: float, high_pass_ghz: float, high_stop_ghz: float
) -> xr.DataArray:
    """Keep the band of the ground, with zero phase.

    Parameters
    ----------
    cube : DataArray (..., time)
        Voltage; time regular, ns. May be dask-backed if ``time`` is in one chunk.
    low_stop_ghz, low_pass_ghz, high_pass_ghz, high_stop_ghz : float
        Nothing passes outside the stops, everything between the passes, half-cosines between.

    Returns
    -------
    DataArray (..., time) float32
        Coords and attrs kept. The record counts as 0 beyond its ends; nothing wraps round.

    Raises
    ------
    RecipeError
        When the corners do not ascend from 0, or the band lies above the Nyquist frequency.
    """
    corners = (low_stop_ghz, low_pass_ghz, high_pass_ghz, high_stop_ghz)
    step = regular_step(cube["time"].values, name="time")
    if not 0.0 <= low_stop_ghz < low_pass_ghz < high_pass_ghz < high_stop_ghz or low_pass_ghz >= 0.5 / step:
        raise RecipeError(
            Problem(
                "corner frequencies " + ", ".join(f"{c:g}" for c in corners) + " GHz",
                allowed=f"four ascending frequencies from 0, the second below Nyquist ({0.5 / step:g} GHz)",
                key="bandpass",
            )
        )
    return xr.apply_ufunc(
        bandpass_kernel,
        cube,
        kwargs={"step_ns": step, "corners_ghz": corners},
        input_core_dims=[["time"]],
        output_core_dims=[["time"]],
        dask="parallelized",
        output_dtypes=[np.float32],
        keep_attrs=True,
    ).transpose(*cube.dims)
