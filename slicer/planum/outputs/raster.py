"""The plan raster that all slices of a run share: places, names, one plane at a time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from rasterio.crs import CRS
from rasterio.transform import Affine

from planum.errors import FrameError, Problem
from planum.records import Statement
from planum.schema import check_slices, regular_step

__all__ = ["Raster", "check_statements", "plane", "raster_of", "slice_label", "slice_name"]


@dataclass(frozen=True)
class Raster:
    """North-up raster; ``west`` and ``north`` are outer cell edges (m), ``crs`` is WKT or empty for a local frame."""

    west: float
    north: float
    cell_m: float
    width: int
    height: int
    crs: str

    @property
    def transform(self) -> Affine:
        """Affine transform of the upper left corner."""
        return Affine(self.cell_m, 0.0, self.west, 0.0, -self.cell_m, self.north)

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """West, south, east, north edges, m."""
        return (
            self.west,
            self.north - self.height * self.cell_m,
            self.west + self.width * self.cell_m,
            self.north,
        )

    def rasterio_crs(self) -> CRS | None:
        """Return the CRS as rasterio holds it, None for a local frame.

        Raises
        ------
        FrameError
            When the text names no CRS.
        """
        if not self.crs:
            return None
        try:
            return CRS.from_user_input(self.crs)
        except Exception as error:
            raise FrameError(
                Problem(
                    "the coordinate reference system cannot be read", 'a code such as "EPSG:25832" or WKT', key="crs"
                )
            ) from error


def raster_of(slices: xr.Dataset) -> Raster:
    """Return the raster of a slice stack.

    Raises
    ------
    ValueError
        When the stack is not north-up (x ascending, y descending), not regular or its cells are not square.
    """
    check_slices(slices)
    x, y = slices["x"].values.astype(float), slices["y"].values.astype(float)
    cell = float(slices.attrs["cell_m"])
    for name, axis in (("x", x), ("y", -y)):
        step = regular_step(axis, name=name) if axis.size > 1 else cell
        # A thousandth of a cell, as in regular_step: a wrong cell size, not rounding.
        if abs(step - cell) > 1e-3 * cell:
            raise ValueError(f"{name} has a step of {step:g} m, the stack says cell_m = {cell:g}")
    return Raster(
        west=float(x[0] - cell / 2),
        north=float(y[0] + cell / 2),
        cell_m=cell,
        width=x.size,
        height=y.size,
        crs=str(slices.attrs.get("crs") or ""),
    )


def plane(slices: xr.Dataset, index: int, name: str = "amplitude") -> np.ndarray:
    """Return one plane (y, x) as float32; only this plane is read."""
    return np.asarray(slices[name].isel(depth=index).values, dtype=np.float32)


def check_statements(slices: xr.Dataset, statements: Sequence[Statement]) -> None:
    """Raise ValueError unless there is one statement per slice, in the order of the slices."""
    if len(statements) != slices.sizes["depth"]:
        raise ValueError(f"{len(statements)} statements for {slices.sizes['depth']} slices")
    for bounds, statement in zip(slices["depth_bounds"].values, statements, strict=True):
        # A tenth of a millimetre: the statement's depths may have been rounded for people.
        if not np.allclose(bounds, (statement.top_m, statement.bottom_m), atol=1e-4, rtol=0):
            raise ValueError(
                f"slice {bounds[0]:g} to {bounds[1]:g} m has a statement for"
                f" {statement.top_m:g} to {statement.bottom_m:g} m"
            )


def slice_name(code: str, top_m: float, bottom_m: float) -> str:
    """Return the stem of a slice's files, ``MBF1_d040-050cm``; millimetres where centimetres would lie.

    >>> slice_name("MBF1", 0.4, 0.5), slice_name("MBF1", 0.025, 0.075)
    ('MBF1_d040-050cm', 'MBF1_d0025-0075mm')
    """
    millimetres = [round(v * 1000) for v in (top_m, bottom_m)]
    if all(v % 10 == 0 for v in millimetres):
        return f"{code}_d{millimetres[0] // 10:03d}-{millimetres[1] // 10:03d}cm"
    return f"{code}_d{millimetres[0]:04d}-{millimetres[1]:04d}mm"


def slice_label(top_m: float, bottom_m: float) -> str:
    """Return the depth interval as people read it.

    >>> slice_label(0.4, 0.5), slice_label(0.025, 0.075)
    ('0.40–0.50 m', '0.025–0.075 m')
    """
    digits = 2 if all(round(v * 1000) % 10 == 0 for v in (top_m, bottom_m)) else 3
    return f"{top_m:.{digits}f}–{bottom_m:.{digits}f} m"
