"""The multi-band file against rasterio and tifffile."""

from __future__ import annotations

import numpy as np
import rasterio
import tifffile

from planum.outputs.stack import write_stack


def test_bands_are_the_slices_in_order(tmp_path, slices, statements, decode_tiff):
    """rasterio, and the bytes decoded by hand, give the same cells; every band carries its own statement."""
    path = tmp_path / "slices_all.tif"
    write_stack(path, slices, statements)
    with rasterio.open(path, driver="GTiff") as raster:
        np.testing.assert_array_equal(raster.read(), slices["amplitude"].values)
        assert raster.descriptions[3] == "0.15–0.25 m"
        for band, statement in enumerate(statements, start=1):
            assert statement.tags().items() <= {**raster.tags(), **raster.tags(band)}.items()
        assert "PLANUM_TOP_M" not in raster.tags()
        assert "PLANUM_VELOCITY_M_PER_NS" in raster.tags()
    with tifffile.TiffFile(path) as file:
        np.testing.assert_array_equal(decode_tiff(file.pages[0]), slices["amplitude"].values)


def test_two_runs_give_the_same_bytes_and_leave_nothing_beside(tmp_path, slices, statements):
    for name in ("a.tif", "b.tif"):
        write_stack(tmp_path / name, slices, statements)
    assert (tmp_path / "a.tif").read_bytes() == (tmp_path / "b.tif").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.tif", "b.tif"]


def test_large_stacks_have_overviews_within_range(tmp_path, make_slices, make_statements):
    slices = make_slices(n=2, shape=(500, 700))
    write_stack(tmp_path / "s.tif", slices, make_statements(slices))
    with rasterio.open(tmp_path / "s.tif") as raster:
        assert raster.overviews(1) == [2, 4]
    with rasterio.open(tmp_path / "s.tif", overview_level=1) as small:
        values = small.read()
    assert np.nanmin(values) >= np.nanmin(slices["amplitude"].values)


def test_one_plane_is_read_at_a_time(tmp_path, planes_per_compute, make_statements):
    stack, touched = planes_per_compute
    write_stack(tmp_path / "s.tif", stack, make_statements(stack))
    assert max(len(planes) for planes in touched) == 1
