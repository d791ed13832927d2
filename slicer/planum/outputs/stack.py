"""All slices in one multi-band GeoTIFF."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import rasterio
import xarray as xr
from rasterio.enums import Resampling

from planum.errors import MachineError, Problem
from planum.outputs.geotiff import CACHE_MB
from planum.outputs.raster import check_statements, plane, raster_of, slice_label
from planum.outputs.writing import aside
from planum.records import Statement

__all__ = ["write_stack"]

_BLOCK = 256


def write_stack(path: Path, slices: xr.Dataset, statements: Sequence[Statement]) -> None:
    """Write ``slices_all.tif``: one float32 band per slice, tiled, band after band.

    Bands lie one after the other in the file and each is written whole, so memory holds one plane and GDAL's bounded
    cache. The dataset's tags are those statements' texts that are the same for all slices; every band carries its own.

    Raises
    ------
    ValueError
        When the stack is not north-up and square, or statements do not belong to it.
    MachineError
        When the file cannot be written or does not read back as written.
    """
    check_statements(slices, statements)
    raster = raster_of(slices)
    texts = [statement.tags() for statement in statements]
    common = {k: v for k, v in texts[0].items() if all(t.get(k) == v for t in texts)}
    profile = {
        "driver": "GTiff",
        "width": raster.width,
        "height": raster.height,
        "count": len(statements),
        "dtype": "float32",
        "nodata": float("nan"),
        "transform": raster.transform,
        "crs": raster.rasterio_crs(),
        "tiled": True,
        "blockxsize": _BLOCK,
        "blockysize": _BLOCK,
        "interleave": "band",
        "compress": "DEFLATE",
        "zlevel": 1,
        "predictor": 3,
        "BIGTIFF": "IF_SAFER",
    }
    with rasterio.Env(GDAL_CACHEMAX=CACHE_MB), aside(path) as part:
        try:
            with rasterio.open(part, "w", **profile) as target:
                target.update_tags(**common)
                for band, statement in enumerate(statements, start=1):
                    target.write(plane(slices, band - 1), band)
                    target.set_band_description(band, slice_label(statement.top_m, statement.bottom_m))
                    target.update_tags(band, **{k: v for k, v in texts[band - 1].items() if k not in common})
            _overviews(part, max(raster.width, raster.height))
            with rasterio.open(part, driver="GTiff") as written:
                same = all(
                    np.array_equal(written.read(band), plane(slices, band - 1), equal_nan=True)
                    for band in range(1, len(statements) + 1)
                )
        except rasterio.errors.RasterioError as error:
            raise MachineError(Problem(f"cannot write the raster: {error}", file=str(path))) from error
        if not same:
            raise MachineError(
                Problem("the raster does not read back as written", do="check the disk and its space", file=str(path))
            )


def _overviews(path: Path, largest: int) -> None:
    """Add averaged overviews until the smallest fits one block, so that a GIS opens large sites at once."""
    factors: list[int] = []
    while largest > _BLOCK:
        factors.append(2 ** (len(factors) + 1))
        largest = -(-largest // 2)
    if factors:
        with rasterio.open(path, "r+", driver="GTiff") as target:
            target.build_overviews(factors, Resampling.average)
