"""One Cloud Optimized GeoTIFF per slice, a grey copy and styles beside it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import rasterio
import xarray as xr
from rasterio.io import MemoryFile
from rasterio.shutil import copy as copy_raster

from planum.errors import MachineError, Problem
from planum.outputs.raster import Raster, check_statements, plane, raster_of, slice_label, slice_name
from planum.outputs.stretch import GREY_NODATA, Stretch, grey
from planum.outputs.styles import write_styles
from planum.outputs.writing import aside
from planum.records import Statement

__all__ = ["CACHE_MB", "SliceFiles", "write_cog", "write_slices"]

CACHE_MB = 64
"""Block cache GDAL may use while rasters are written, MB."""

# Deflate is read by every TIFF reader; level 1 with the predictor for floats is 1 % larger than level 6 and twice as
# fast on a 2000 x 2000 slice. AVERAGE overviews: the default (cubic) makes negative amplitudes.
_COG = {"driver": "COG", "compress": "DEFLATE", "level": "1", "overview_resampling": "AVERAGE", "num_threads": "1"}


@dataclass(frozen=True)
class SliceFiles:
    """The files of one slice."""

    raster: Path
    grey: Path
    styles: tuple[Path, ...]


def write_slices(
    folder: Path,
    slices: xr.Dataset,
    statements: Sequence[Statement],
    stretch: Stretch,
    *,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[SliceFiles, ...]:
    """Write every slice as float32 GeoTIFF, 8-bit grey copy, SLD and QGIS style; return the files in depth order.

    Parameters
    ----------
    folder
        Where ``<code>_d040-050cm.tif`` and its companions go.
    slices
        Slice stack, north-up; read one plane at a time.
    statements
        One per slice; they become the TIFF tags ``PLANUM_*``.
    progress
        Called with (done, total).

    Raises
    ------
    ValueError
        When the stack is not north-up and square, or statements do not belong to it.
    MachineError
        When a file cannot be written or does not read back as written.
    """
    check_statements(slices, statements)
    raster = raster_of(slices)
    done = []
    for index, statement in enumerate(statements):
        done.append(_write_slice(folder, slices, raster, index, statement, stretch))
        if progress is not None:
            progress(index + 1, len(statements))
    return tuple(done)


def _write_slice(
    folder: Path, slices: xr.Dataset, raster: Raster, index: int, statement: Statement, stretch: Stretch
) -> SliceFiles:
    values = plane(slices, index)
    stem = slice_name(str(slices.attrs["code"]), statement.top_m, statement.bottom_m)
    label = f"{statement.quantity}, {slice_label(statement.top_m, statement.bottom_m)}"
    path, grey_path = folder / f"{stem}.tif", folder / f"{stem}_grey.tif"
    write_cog(path, values, raster, nodata=float("nan"), band=label, tags=statement.tags())
    write_cog(
        grey_path,
        grey(values, stretch),
        raster,
        nodata=GREY_NODATA,
        band=f"{label}, grey: {stretch.text}; {GREY_NODATA} = not surveyed",
        tags=statement.tags(),
    )
    return SliceFiles(path, grey_path, write_styles(path, stretch, title=f"{slices.attrs.get('title', '')} {label}"))


def write_cog(
    path: Path, values: np.ndarray, raster: Raster, *, nodata: float, band: str, tags: dict[str, str]
) -> None:
    """Write one band as a Cloud Optimized GeoTIFF, read it back and compare before it takes its name.

    Parameters
    ----------
    values
        (y, x), float32 or uint8.
    nodata
        Value of unknown cells.
    band
        Band description.

    Raises
    ------
    MachineError
        When the file cannot be written or does not read back as written.
    """
    profile = {
        "driver": "GTiff",
        "width": raster.width,
        "height": raster.height,
        "count": 1,
        "dtype": values.dtype.name,
        "nodata": nodata,
        "transform": raster.transform,
        "crs": raster.rasterio_crs(),
    }
    predictor = "FLOATING_POINT" if values.dtype.kind == "f" else "STANDARD"
    with rasterio.Env(GDAL_CACHEMAX=CACHE_MB), aside(path) as part:
        try:
            with MemoryFile() as memory:
                with memory.open(**profile) as target:
                    target.write(values, 1)
                    target.set_band_description(1, band)
                    target.update_tags(**tags)
                with memory.open(driver="GTiff") as source:
                    copy_raster(source, part, predictor=predictor, **_COG)
            with rasterio.open(part, driver="GTiff") as written:
                same = np.array_equal(written.read(1), values, equal_nan=values.dtype.kind == "f")
        except rasterio.errors.RasterioError as error:
            raise MachineError(Problem(f"cannot write the raster: {error}", file=str(path))) from error
        if not same:
            raise MachineError(
                Problem("the raster does not read back as written", do="check the disk and its space", file=str(path))
            )
