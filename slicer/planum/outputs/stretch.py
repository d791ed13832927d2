"""One stretch for all slices of a run, so that grey means the same at every depth."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from planum.outputs.raster import plane

__all__ = ["GREY_NODATA", "Stretch", "grey", "stretch_of"]

GREY_NODATA = 255
"""Value of grey pictures where nothing is known; 0 (strong) to 254 (weak) are data."""

_SLICES, _CELLS = 24, 100_000


@dataclass(frozen=True)
class Stretch:
    """Amplitudes shown as white (``low``) and black (``high``), and the rule in words."""

    low: float
    high: float
    text: str


def stretch_of(slices: xr.Dataset, *, percentiles: tuple[float, float] = (2.0, 99.5)) -> Stretch:
    """Return one linear stretch for the whole stack.

    Parameters
    ----------
    slices
        Slice stack, ``amplitude(depth, y, x)``; at most 24 planes are read, one at a time, thinned to about
        100 000 cells each (the same planes and cells every time).
    percentiles
        Lower and upper percentile of the known cells, %.

    Returns
    -------
    Stretch
        Both ends rounded to three significant figures, so the words hold the exact numbers used.
    """
    n = slices.sizes["depth"]
    chosen = np.unique(np.linspace(0, n - 1, min(n, _SLICES)).round().astype(int))
    every = max(1, int(np.ceil(np.sqrt(slices.sizes["y"] * slices.sizes["x"] / _CELLS))))
    parts = []
    for index in chosen:
        values = plane(slices, int(index))[::every, ::every]
        parts.append(values[np.isfinite(values)])
    known = np.concatenate(parts) if parts else np.empty(0, np.float32)
    if known.size == 0:
        return _stretch(0.0, 1.0)
    low, high = (_round(float(v)) for v in np.percentile(known, percentiles))
    if not high > low:  # one value everywhere
        high = low + (abs(low) or 1.0)
    return _stretch(low, high)


def grey(values: np.ndarray, stretch: Stretch) -> np.ndarray:
    """Return uint8 greys, strong = dark: ``254 - round(254 t)`` with t from 0 at ``low`` to 1 at ``high``; NaN is 255.

    Parameters
    ----------
    values
        Amplitudes, any shape.
    """
    share = (np.asarray(values, np.float32) - np.float32(stretch.low)) / np.float32(stretch.high - stretch.low)
    known = np.isfinite(share)
    share = np.clip(np.where(known, share, 0.0), 0.0, 1.0)
    return np.where(known, 254 - np.rint(share * 254), GREY_NODATA).astype(np.uint8)


def _stretch(low: float, high: float) -> Stretch:
    return Stretch(low, high, f"{_number(low)} to {_number(high)}, strong = dark, linear")


def _round(value: float) -> float:
    return float(f"{value:.3g}")


def _number(value: float) -> str:
    """Plain digits as long as they are readable."""
    return f"{value:.0f}" if value == round(value) and abs(value) < 1e7 else f"{value:.3g}"
