"""NetCDF with CF conventions: a numeric variable with the dimensions trace and sample (or time).

NetCDF-4 files are HDF5: external storage, external links and virtual datasets would read other files of the machine
and are refused. The HDF5 library itself may loop on a file whose inner heap is damaged; nothing here can stop that
from within the process. Classic files (CDF-1, CDF-2) are read from memory, bounded by the file's length.
"""

from __future__ import annotations

import io
import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5netcdf
import h5py
import numpy as np
from scipy.io import netcdf_file

from planum.errors import LineError, Problem, printable
from planum.lines import samples
from planum.lines.interval import resolve_interval
from planum.lines.recording import ReadOptions, Recording

__all__ = ["READER", "NetcdfReader"]

_MAGIC = (b"CDF\x01", b"CDF\x02", b"\x89HDF\r\n\x1a\n")
_TRACE, _SAMPLE = "trace", ("sample", "time")
_NS = {"s": 1e9, "second": 1e9, "seconds": 1e9, "ms": 1e6, "us": 1e3, "µs": 1e3, "microseconds": 1e3, "ns": 1.0,
       "nanosecond": 1.0, "nanoseconds": 1.0, "ps": 1e-3, "picoseconds": 1e-3}  # fmt: skip
_RATIO = 1032  # deflate's best; more values than that per stored byte were never written
_LARGEST = 1 << 32  # bytes


@dataclass(frozen=True, eq=False)
class _Variable:
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    dtype: np.dtype
    attrs: Mapping[str, Any]
    load: Callable[[], np.ndarray] = field(repr=False)


class NetcdfReader:
    """Reads NetCDF."""

    name = "netcdf"
    suffixes = (".nc", ".nc4", ".cdf")

    def claims(self, path: Path, head: bytes) -> bool:
        """Tell whether this is NetCDF or HDF5, by suffix or first bytes."""
        return path.suffix.lower() in self.suffixes or head.startswith(_MAGIC)

    def read(self, path: Path, options: ReadOptions) -> Recording:
        """Return the recording; see :func:`planum.lines.reading.read_line`."""
        with path.open("rb") as stream:
            magic = stream.read(8)
        try:
            if magic.startswith(_MAGIC[2]):
                _refuse_elsewhere(path)
                with h5netcdf.File(path, "r", phony_dims="sort") as file:
                    return _record(path, options, {n: _hdf5(v) for n, v in file.variables.items()})
            if magic.startswith(_MAGIC[:2]) and path.stat().st_size <= _LARGEST:
                with netcdf_file(io.BytesIO(path.read_bytes()), "r", mmap=False) as file:
                    return _record(path, options, {n: _classic(v) for n, v in file.variables.items()})
        except LineError:
            raise
        except Exception as error:  # the libraries answer damage with whatever the wrong bytes lead to
            raise _error(path, f"damaged NetCDF file: {error or type(error).__name__}") from error
        raise _error(path, "not a NetCDF file (neither CDF-1, CDF-2 nor HDF5)", byte=0)


READER = NetcdfReader()


def _error(
    path: Path, came: str, *, allowed: str = "", do: str = "", key: str = "", byte: int | None = None
) -> LineError:
    return LineError(Problem(came=came, allowed=allowed, do=do, file=path.name, key=key, byte=byte))


def _refuse_elsewhere(path: Path) -> None:
    """Refuse HDF5 that reads other files."""
    with h5py.File(path, "r") as file:
        for name, what in _elsewhere(file):
            raise _error(
                path,
                f"{printable(name)} is {what}",
                allowed="data inside the file itself",
                do="copy the data into one plain file",
            )


def _elsewhere(group: h5py.Group, seen: set[int] | None = None) -> Iterator[tuple[str, str]]:
    seen = set() if seen is None else seen
    address = h5py.h5o.get_info(group.id).addr
    if address in seen:
        return  # hard links can make groups contain themselves
    seen.add(address)
    for key in group:
        link = group.get(key, getlink=True)
        if isinstance(link, h5py.ExternalLink):
            yield f"{group.name}/{key}", "a link to another file"
        elif isinstance(link, h5py.HardLink):
            item = group.get(key)
            if isinstance(item, h5py.Dataset):
                if item.is_virtual:
                    yield item.name, "a virtual dataset, kept in other files"
                elif item.external:
                    yield item.name, "kept in external storage"
            elif isinstance(item, h5py.Group):
                yield from _elsewhere(item, seen)


def _hdf5(variable: Any) -> _Variable:
    def load() -> np.ndarray:
        stored = variable._h5ds.id.get_storage_size()
        size = math.prod(variable.shape) * variable.dtype.itemsize
        if size > min(_LARGEST, _RATIO * stored):
            raise ValueError(f"{size} bytes of values from {stored} stored ones")
        return np.asarray(variable[...])

    dtype = variable.dtype if isinstance(variable.dtype, np.dtype) else np.dtype(object)
    return _Variable(tuple(variable.dimensions), tuple(variable.shape), dtype, dict(variable.attrs), load)


def _classic(variable: Any) -> _Variable:
    attrs = {k: v.decode("utf-8", "replace") if isinstance(v, bytes) else v for k, v in variable._attributes.items()}
    data = variable.data
    return _Variable(tuple(variable.dimensions), tuple(data.shape), data.dtype, attrs, data.copy)


def _record(path: Path, options: ReadOptions, variables: Mapping[str, _Variable]) -> Recording:
    name, variable = _choose(path, variables)
    sample = next(d for d in variable.dims if d != _TRACE)
    if 0 in variable.shape:
        raise _error(path, f"{printable(name)} is empty: {variable.shape}")
    stored = variable.load()
    stored = stored if variable.dims[0] == _TRACE else stored.T
    stored = np.ascontiguousarray(stored, stored.dtype.newbyteorder("="))
    scaled = _scaled(stored, variable.attrs)
    data, offset = samples.centred(scaled)
    interval, origin, problems = _interval(path, options, variables, sample, data.shape[1])
    x = y = None
    if options.header_positions:
        x, y, found = _positions(path, variables, len(data))
        problems = (*problems, *found)
    return Recording(
        data=data,
        interval_ns=interval,
        interval_origin=origin,
        x=x,
        y=y,
        flag=np.zeros(len(data), np.uint8),
        header={
            "format": "NetCDF",
            "variable": printable(name),
            "sample_format_name": str(stored.dtype),
            "n_traces_found": data.shape[0],
            "n_samples": data.shape[1],
            "centred_on": offset,
        },
        problems=problems,
    )


def _choose(path: Path, variables: Mapping[str, _Variable]) -> tuple[str, _Variable]:
    fits = {
        n: v
        for n, v in variables.items()
        if len(v.dims) == 2 and _TRACE in v.dims and set(v.dims) & set(_SAMPLE) and v.dtype.kind in "iuf"
    }
    if len(fits) > 1 and "amplitude" in fits:
        fits = {"amplitude": fits["amplitude"]}
    if len(fits) != 1:
        there = ", ".join(f"{printable(n)}({', '.join(v.dims)})" for n, v in variables.items()) or "no variables"
        raise _error(
            path,
            f"{len(fits)} numeric variables with the dimensions trace and sample (or time); there is {there}",
            allowed="one, or one of them called amplitude",
            do="rename the dimensions or leave the others out",
        )
    return next(iter(fits.items()))


def _scaled(data: np.ndarray, attrs: Mapping[str, Any]) -> np.ndarray:
    """Apply CF packing and fill values (NaN); other data stay as they are."""
    scale, offset = _number(attrs.get("scale_factor"), 1.0), _number(attrs.get("add_offset"), 0.0)
    fill = _number(attrs.get("_FillValue"), np.nan)
    filled = data == fill
    if scale == 1.0 and offset == 0.0 and not filled.any():
        return data
    kind = np.float64 if data.dtype.itemsize > 4 else np.float32
    return np.where(filled, np.nan, data * scale + offset).astype(kind)


def _number(value: Any, default: float) -> float:
    return default if value is None else float(np.asarray(value, float).ravel()[0])


def _interval(
    path: Path, options: ReadOptions, variables: Mapping[str, _Variable], sample: str, n_samples: int
) -> tuple[float, str, tuple[Problem, ...]]:
    """Interval from the survey, else from a time coordinate that states its unit."""
    times = variables.get("time")
    if times is None or times.dims != (sample,) or n_samples < 2:
        return resolve_interval(options, field=0.0, n_samples=n_samples, file=path.name)
    step = _steps(path, times)
    unit = str(times.attrs.get("units", "")).strip()
    if options.interval_ns is None and unit in _NS:
        # the unit is part of the number here; interval_unit is for files that cannot say it
        return step * _NS[unit], f"time coordinate of the file, unit {unit}", ()
    return resolve_interval(options, field=step, n_samples=n_samples, file=path.name)


def _steps(path: Path, times: _Variable) -> float:
    values = np.asarray(times.load(), float)
    steps = np.diff(values)
    step = float((values[-1] - values[0]) / steps.size)
    # a thousandth of a step: coordinates kept as float32 round by less
    if not (np.isfinite(values).all() and step > 0 and np.abs(steps - step).max() <= 1e-3 * step):
        raise _error(path, "the time coordinate is not regular and ascending", key="time")
    return step


def _positions(
    path: Path, variables: Mapping[str, _Variable], n_traces: int
) -> tuple[np.ndarray | None, np.ndarray | None, tuple[Problem, ...]]:
    """Variables x and y (trace) in m."""
    found = [variables.get(n) for n in "xy"]
    good = [
        v is not None
        and v.dims == (_TRACE,)
        and v.dtype.kind in "iuf"
        and v.attrs.get("units") in ("m", "metre", "meter")
        for v in found
    ]
    if all(good):
        x, y = (np.asarray(v.load(), float) for v in found if v is not None)
        if np.isfinite(x).all() and np.isfinite(y).all() and x.shape == y.shape == (n_traces,):
            return x, y, ()
    problem = Problem(
        came="no finite x and y (trace) in m in the file",
        do="give start and end in the line register, or a projected track",
        file=path.name,
        key="header positions",
        severity="warning",
    )
    return None, None, (problem,)
