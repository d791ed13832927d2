"""Gain: what spreading and absorption took, given back up to where noise begins."""

from __future__ import annotations

import numpy as np
import xarray as xr

from planum.errors import Problem, RecipeError

__all__ = ["gain", "gain_curve"]


def gain_curve(
    time_ns: np.ndarray, *, power: float, absorption_db_per_ns: float, start_ns: float, stop_ns: float
) -> np.ndarray:
    """Return the factor at each time: g(t) = (t/start)^power 10^(absorption (t - start)/20).

    1 before ``start_ns``, constant after ``stop_ns``; two-way times in ns from time zero. 20 log10 of an amplitude
    ratio is its decibel value, and t^1 undoes the 1/r spreading of a plane reflector seen by one antenna pair.
    """
    t = np.clip(np.asarray(time_ns, float), start_ns, stop_ns)
    spreading = (t / start_ns) ** power if power else 1.0
    return spreading * 10.0 ** (absorption_db_per_ns * (t - start_ns) / 20.0)


def gain(
    cube: xr.DataArray, *, power: float, absorption_db_per_ns: float, start_ns: float, stop_ns: float
) -> xr.DataArray:
    """Multiply every trace by one curve, the same for the whole set.

    Parameters
    ----------
    cube : DataArray (..., time)
        Voltage; time in ns from time zero. May be dask-backed.
    power : float
        Exponent of the spreading law, 0 or more.
    absorption_db_per_ns : float
        Two-way absorption per ns of two-way time, 0 or more.
    start_ns, stop_ns : float
        The gain is 1 up to ``start_ns`` and constant from ``stop_ns`` on.

    Returns
    -------
    DataArray (..., time) float32
        Coords and attrs kept.

    Raises
    ------
    RecipeError
        For negative settings, a stop before the start, or a spreading law that starts at time zero.
    """
    for name, value in (("power", power), ("absorption_db_per_ns", absorption_db_per_ns)):
        if not value >= 0:
            raise RecipeError(Problem(f"{name} is {value:g}", allowed="0 or more", key=f"gain.{name}"))
    if not stop_ns >= start_ns or (power and not start_ns > 0):
        raise RecipeError(
            Problem(
                f"start_ns is {start_ns:g} and stop_ns {stop_ns:g}",
                allowed="a stop not before the start, and a start above 0 when power is not 0",
                key="gain.start_ns",
            )
        )
    curve = gain_curve(
        cube["time"].values,
        power=power,
        absorption_db_per_ns=absorption_db_per_ns,
        start_ns=start_ns,
        stop_ns=stop_ns,
    ).astype(np.float32)
    return xr.apply_ufunc(
        np.multiply,
        cube.astype(np.float32, copy=False),
        xr.DataArray(curve, dims="time"),
        dask="parallelized",
        output_dtypes=[np.float32],
        keep_attrs="override",
    ).transpose(*cube.dims)
