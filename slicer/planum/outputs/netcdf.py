"""The slice stack as one NetCDF-4 file after the Climate and Forecast conventions, written slice by slice."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import h5netcdf
import numpy as np
import pyproj
import xarray as xr

from planum.constants import CAUTIONS
from planum.errors import FrameError, Problem
from planum.outputs.raster import Raster, check_statements, plane, raster_of
from planum.outputs.writing import aside
from planum.records import Statement
from planum.schema import COVERAGE

__all__ = ["CONVENTIONS", "STATEMENT_PREFIX", "write_netcdf"]

CONVENTIONS = "CF-1.11"
STATEMENT_PREFIX = "statement_"
"""Global attributes that hold the statement: one value, or one per slice in the order of ``depth``."""

_CHUNK = 512
_PACKING: dict[str, Any] = {"compression": "gzip", "compression_opts": 1, "shuffle": True}


def write_netcdf(
    path: Path,
    slices: xr.Dataset,
    statements: Sequence[Statement],
    *,
    history: str = "",
    attrs: Mapping[str, str] | None = None,
) -> None:
    """Write ``slices.nc``: ``amplitude(depth, y, x)``, its error, coverage, depth bounds and depth error.

    Parameters
    ----------
    slices
        Slice stack, north-up; read one plane at a time.
    statements
        One per slice; they become the global attributes ``statement_*``.
    history
        What made the file, without times of day, so that a repeated run gives the same bytes.
    attrs
        More global attributes, such as ``institution``, ``references``.

    Raises
    ------
    ValueError
        When the stack is not north-up and square, or statements do not belong to it.
    MachineError
        When the file cannot be written.

    Notes
    -----
    Source: NetCDF Climate and Forecast (CF) Metadata Conventions 1.11: 4.3 (vertical coordinate), 3.4 (ancillary
    data), 3.5 (flags), 5.6 (grid mappings), 7.1 (cell boundaries), 7.3 (cell methods).
    """
    check_statements(slices, statements)
    raster = raster_of(slices)
    with aside(path) as part, h5netcdf.File(part, "w") as file:
        file.attrs.update(_global_attributes(slices, statements, history, attrs or {}))
        file.dimensions = {**{d: slices.sizes[d] for d in ("depth", "y", "x")}, "bound": 2}
        _axes(file, slices, statements, projected=bool(raster.crs))
        mapping = _grid_mapping(file, raster)
        _planes(file, slices, statements, mapping)


def _global_attributes(
    slices: xr.Dataset, statements: Sequence[Statement], history: str, more: Mapping[str, str]
) -> dict[str, Any]:
    version = statements[0].version
    result: dict[str, Any] = {
        "Conventions": CONVENTIONS,
        "title": str(slices.attrs.get("title") or slices.attrs.get("code", "")),
        "source": f"ground-penetrating radar, lines processed by planum {version}".strip(),
        "history": history or f"planum {version} map".replace("  ", " "),
        "comment": " ".join(CAUTIONS),
        **more,
    }
    for name, values in _columns(statements).items():
        same = all(v == values[0] for v in values)
        if same:
            result[STATEMENT_PREFIX + name] = values[0]
        elif isinstance(values[0], str):
            result[STATEMENT_PREFIX + name] = " | ".join(values)
        else:
            result[STATEMENT_PREFIX + name] = np.array(values)
    return result


def _columns(statements: Sequence[Statement]) -> dict[str, list[Any]]:
    rows = [s.attrs() for s in statements]
    return {name: [row[name] for row in rows] for name in rows[0]}


def _axes(file: h5netcdf.File, slices: xr.Dataset, statements: Sequence[Statement], *, projected: bool) -> None:
    for name in ("x", "y"):
        variable = file.create_variable(name, (name,), "f8", data=slices[name].values.astype(float))
        variable.attrs["units"] = "m"
        if projected:
            variable.attrs["axis"] = name.upper()
            variable.attrs["standard_name"] = f"projection_{name}_coordinate"
            variable.attrs["long_name"] = {"x": "easting", "y": "northing"}[name]
        else:  # no axis attribute: CF readers take X and Y without a mapping for longitude and latitude
            variable.attrs["long_name"] = f"{name} in the local frame"
    depth = file.create_variable("depth", ("depth",), "f8", data=slices["depth"].values.astype(float))
    depth.attrs.update(
        {
            "units": "m",
            "axis": "Z",
            "positive": "down",
            "standard_name": "depth",
            "long_name": f"middle of the depth interval below {statements[0].surface}",
            "bounds": "depth_bounds",
            "ancillary_variables": "depth_error",
        }
    )
    file.create_variable("depth_bounds", ("depth", "bound"), "f8", data=slices["depth_bounds"].values.astype(float))
    error = file.create_variable("depth_error", ("depth",), "f4", data=slices["depth_error"].values.astype(np.float32))
    error.attrs.update(
        {"units": "m", "standard_name": "depth standard_error", "long_name": "standard error of depth, 1 sigma"}
    )


def _grid_mapping(file: h5netcdf.File, raster: Raster) -> str:
    """Write the grid mapping variable and return its name; nothing for a local frame."""
    if not raster.crs:
        return ""
    try:
        crs = pyproj.CRS.from_user_input(raster.crs)
    except pyproj.exceptions.CRSError as error:
        raise FrameError(Problem("the coordinate reference system cannot be read", key="crs")) from error
    variable = file.create_variable("crs", (), "i4", data=np.int32(0))
    variable.attrs["long_name"] = "coordinate reference system"
    variable.attrs.update({k: v for k, v in crs.to_cf().items() if v is not None})
    west, north, cell = raster.west, raster.north, raster.cell_m
    variable.attrs["GeoTransform"] = f"{west!r} {cell!r} 0.0 {north!r} 0.0 {-cell!r}"
    return "crs"


def _planes(file: h5netcdf.File, slices: xr.Dataset, statements: Sequence[Statement], mapping: str) -> None:
    height, width = slices.sizes["y"], slices.sizes["x"]
    chunks = (1, min(height, _CHUNK), min(width, _CHUNK))
    statistic = statements[0].statistic
    names = {
        "amplitude": f"{statements[0].quantity}, {statistic} over the depth interval",
        "left_out_error": "difference to the recorded amplitude when the nearest line is left out",
    }
    names = {name: text for name, text in names.items() if name in slices}
    for name, text in names.items():
        variable = file.create_variable(
            name, ("depth", "y", "x"), "f4", fillvalue=np.float32(np.nan), chunks=chunks, **_PACKING
        )
        variable.attrs.update({"long_name": text, "units": "1"})
        if mapping:
            variable.attrs["grid_mapping"] = mapping
        for index in range(slices.sizes["depth"]):
            variable[index] = plane(slices, index, name)
    amplitude = file["amplitude"]
    if statistic in {"mean", "maximum", "median", "minimum"}:  # CF 1.11, appendix E
        amplitude.attrs["cell_methods"] = f"depth: {statistic}"
    amplitude.attrs["ancillary_variables"] = " ".join([*(n for n in names if n != "amplitude"), "coverage"])
    coverage = file.create_variable("coverage", ("y", "x"), "i1", chunks=chunks[1:], **_PACKING)
    coverage.attrs.update(
        {
            "long_name": "where data come from",
            "flag_values": np.array(sorted(COVERAGE), np.int8),
            "flag_meanings": " ".join(COVERAGE[k] for k in sorted(COVERAGE)),
        }
    )
    if mapping:
        coverage.attrs["grid_mapping"] = mapping
    coverage[...] = slices["coverage"].values.astype(np.int8)
