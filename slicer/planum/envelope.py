"""Envelope: the modulus of the analytic signal along time."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import scipy.fft
import xarray as xr

from planum.records import Quantity, Record

__all__ = ["ENVELOPE", "Envelope", "envelope", "envelope_kernel"]


def envelope_kernel(data: np.ndarray, *, pad: int | None = None) -> np.ndarray:
    """Return |x + i H[x]| along the last axis, float32.

    The spectrum keeps zero frequency and loses its negative half (Gabor 1946; Marple 1999, from memory).

    Parameters
    ----------
    data : (..., sample) float
    pad : int
        Zeros behind the record, against wrap-around; None takes a quarter of the record, 64 at least. The response of
        band-passed data dies out within a few periods, so that is enough.
    """
    n = data.shape[-1]
    size = n if pad == 0 else scipy.fft.next_fast_len(n + (max(64, n // 4) if pad is None else pad))
    kind = np.float64 if data.dtype == np.float64 else np.float32
    spectrum = scipy.fft.fft(data.astype(kind, copy=False), n=size, axis=-1)
    half = (size + 1) // 2
    spectrum[..., 1:half] *= 2.0
    spectrum[..., size // 2 + 1 :] = 0.0
    return np.abs(scipy.fft.ifft(spectrum, axis=-1)[..., :n]).astype(np.float32)


def envelope(cube: xr.DataArray) -> xr.DataArray:
    """Return the envelope of a cube of voltages.

    Parameters
    ----------
    cube : DataArray (..., time)
        Band-passed amplitude, time in ns. May be dask-backed if ``time`` is in one chunk.

    Returns
    -------
    DataArray (..., time) float32
        Same coords; ``attrs["quantity"]`` is "envelope". Places without a recording stay 0.
    """
    out = xr.apply_ufunc(
        envelope_kernel,
        cube,
        input_core_dims=[["time"]],
        output_core_dims=[["time"]],
        dask="parallelized",
        output_dtypes=[np.float32],
        keep_attrs=True,
    ).transpose(*cube.dims)
    return out.assign_attrs(quantity="envelope")


class Envelope:
    """The step ``envelope``: voltage to envelope."""

    name = "envelope"
    version = 1
    reach: Literal["trace", "line", "set"] = "trace"
    takes: Quantity = "voltage"
    gives: Quantity = "envelope"

    class Params(Record):
        """No settings."""

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`envelope`."""
        return envelope(cube, **params)


ENVELOPE = Envelope()
