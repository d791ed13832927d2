"""GeoTIFFs against rio-cogeo, tifffile, rasterio and the OGC schema's element order."""

from __future__ import annotations

import shutil
import warnings
import xml.etree.ElementTree as ET

import numpy as np
import pytest
import rasterio
import tifffile
from rasterio.errors import NotGeoreferencedWarning
from rio_cogeo import cog_validate

from planum.errors import MachineError
from planum.outputs import geotiff
from planum.outputs.raster import slice_name
from planum.outputs.stretch import GREY_NODATA, stretch_of

SLD = "{http://www.opengis.net/sld}"


@pytest.fixture(scope="module")
def written(tmp_path_factory, slices, statements):
    folder = tmp_path_factory.mktemp("slices")
    stretch = stretch_of(slices)
    return geotiff.write_slices(folder, slices, statements, stretch), stretch


def test_every_raster_is_a_valid_cloud_optimized_geotiff(written):
    """rio-cogeo, strict: warnings count as faults."""
    for files in written[0]:
        for path in (files.raster, files.grey):
            valid, errors, remarks = cog_validate(path, strict=True, quiet=True)
            assert valid, (path.name, errors, remarks)


def test_large_rasters_have_averaged_overviews_that_stay_in_range(tmp_path, make_slices, make_statements):
    """Averages lie between the least and largest cell; cubic overviews of envelopes go negative."""
    slices = make_slices(n=1, shape=(700, 900))
    (files,) = geotiff.write_slices(tmp_path, slices, make_statements(slices), stretch_of(slices))
    assert cog_validate(files.raster, strict=True, quiet=True)[0]
    with rasterio.open(files.raster, overview_level=0) as overview:
        small = overview.read(1)
    full = slices["amplitude"].values[0]
    assert np.nanmin(small) >= np.nanmin(full)
    assert np.nanmax(small) <= np.nanmax(full)
    # GDAL's AVERAGE of a 2 x 2 block, away from unknown cells; float32 sums of four differ in the last places.
    block = full[400:402, 600:602].mean()
    assert small[200, 300] == pytest.approx(block, rel=1e-6)


def test_names_order_and_values_survive(written, slices, statements):
    """rasterio gives back the cells, nodata, description and statement."""
    for index, (files, statement) in enumerate(zip(written[0], statements, strict=True)):
        assert files.raster.stem == slice_name("ASM2", statement.top_m, statement.bottom_m)
        with rasterio.open(files.raster, driver="GTiff") as raster:
            np.testing.assert_array_equal(raster.read(1), slices["amplitude"].values[index])
            assert np.isnan(raster.nodata)
            assert raster.crs.to_epsg() == 25832
            assert f"{statement.top_m:.2f}–{statement.bottom_m:.2f} m" in raster.descriptions[0]
            assert statement.tags().items() <= raster.tags().items()


def test_outer_edges_are_cell_edges(written, slices, decode_tiff):
    """Half a cell outside the outer cell centres, to 1e-9 m; tifffile reads the same from tags 33550 and 33922."""
    path = written[0][0].raster
    x, y, half = slices["x"].values, slices["y"].values, 0.025
    expected = (x[0] - half, y[-1] - half, x[-1] + half, y[0] + half)
    with rasterio.open(path) as raster:
        # 5.4e6 m has a spacing of doubles of 9.3e-10 m.
        np.testing.assert_allclose(tuple(raster.bounds), expected, rtol=0, atol=1e-9)
    with tifffile.TiffFile(path) as file:
        tags = file.pages[0].tags
        assert tags[33550].value[:2] == pytest.approx((0.05, 0.05), abs=1e-12)
        assert tags[33922].value[3:5] == pytest.approx((x[0] - half, y[0] + half), abs=1e-9)
        assert tags[42113].value.strip("\0 ") == "nan"
        np.testing.assert_array_equal(decode_tiff(file.pages[0])[0], slices["amplitude"].values[0])


def test_the_grey_copy_maps_exactly(written, slices):
    """Recomputed in float64 with another formula; half-way cases may fall to either side."""
    files, stretch = written
    for index, one in enumerate(files):
        amplitude = slices["amplitude"].values[index].astype(float)
        with rasterio.open(one.grey) as raster:
            assert raster.nodata == GREY_NODATA
            greys = raster.read(1)
        known = np.isfinite(amplitude)
        np.testing.assert_array_equal(greys == GREY_NODATA, ~known)
        exact = 254 * (stretch.high - np.clip(amplitude, stretch.low, stretch.high)) / (stretch.high - stretch.low)
        # Rounding to whole greys: half a grey, and float32's part of it.
        assert np.max(np.abs(greys[known] - exact[known])) <= 0.5 + 1e-3


def test_a_local_frame_has_no_crs(tmp_path, make_slices, make_statements):
    slices = make_slices(n=1, crs="")
    (files,) = geotiff.write_slices(tmp_path, slices, make_statements(slices), stretch_of(slices))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)
        with rasterio.open(files.raster) as raster:
            assert raster.crs is None
            assert raster.bounds.left == pytest.approx(slices["x"].values[0] - 0.025, abs=1e-9)


def test_two_runs_give_the_same_bytes(tmp_path, written, slices, statements):
    again = geotiff.write_slices(tmp_path, slices, statements, written[1])
    for first, second in zip(written[0], again, strict=True):
        for a, b in zip(
            (first.raster, first.grey, *first.styles), (second.raster, second.grey, *second.styles), strict=True
        ):
            assert a.read_bytes() == b.read_bytes(), a.name


def test_styles_give_all_slices_one_stretch(written):
    """OGC SLD 1.0.0 (02-070): the chain of elements, and a ramp from white at low to black at high."""
    files, stretch = written
    ramps = set()
    for one in files:
        sld, qml = one.styles
        assert (sld.stem, qml.stem) == (one.raster.stem, one.raster.stem)
        root = ET.parse(sld).getroot()  # noqa: S314  # our own file
        assert (root.tag, root.get("version")) == (f"{SLD}StyledLayerDescriptor", "1.0.0")
        steps = "NamedLayer/UserStyle/FeatureTypeStyle/Rule/RasterSymbolizer/ColorMap/ColorMapEntry"
        entries = root.findall("/".join(SLD + s for s in steps.split("/")))
        ramps.add(tuple((e.get("color"), float(e.get("quantity"))) for e in entries))
        gray = ET.parse(qml).getroot().find("pipe/rasterrenderer")  # noqa: S314
        assert gray.get("gradient") == "WhiteToBlack"
        assert float(gray.findtext("contrastEnhancement/minValue")) == stretch.low
        assert float(gray.findtext("contrastEnhancement/maxValue")) == stretch.high
    assert ramps == {(("#ffffff", stretch.low), ("#000000", stretch.high))}


def test_a_write_that_ends_in_zeros_is_noticed_and_leaves_the_old_file(tmp_path, slices, statements, monkeypatch):
    """A raster that opens as zeros must not take the name."""
    one = slices.isel(depth=slice(0, 1))
    stretch = stretch_of(one)
    (files,) = geotiff.write_slices(tmp_path, one, statements[:1], stretch)
    before = files.raster.read_bytes()
    real = geotiff.copy_raster

    def broken(source, target, **options):
        real(source, target, **options)
        with rasterio.open(target, "r+", IGNORE_COG_LAYOUT_BREAK="YES") as raster:
            raster.write(np.zeros(raster.shape, raster.dtypes[0]), 1)

    monkeypatch.setattr(geotiff, "copy_raster", broken)
    with pytest.raises(MachineError, match="does not read back as written"):
        geotiff.write_slices(tmp_path, one, statements[:1], stretch)
    assert files.raster.read_bytes() == before
    assert not list(tmp_path.glob(".part-*"))


def test_an_interrupted_write_leaves_the_old_file(tmp_path, slices, statements, monkeypatch):
    one = slices.isel(depth=slice(0, 1))
    stretch = stretch_of(one)
    (files,) = geotiff.write_slices(tmp_path, one, statements[:1], stretch)
    before = files.raster.read_bytes()

    def interrupted(source, target, **options):
        shutil.copy(files.raster, target)
        raise KeyboardInterrupt

    monkeypatch.setattr(geotiff, "copy_raster", interrupted)
    with pytest.raises(KeyboardInterrupt):
        geotiff.write_slices(tmp_path, one, statements[:1], stretch)
    assert files.raster.read_bytes() == before
    assert not list(tmp_path.glob(".part-*"))


def test_one_plane_is_read_at_a_time(tmp_path, planes_per_compute, make_statements):
    stack, touched = planes_per_compute
    geotiff.write_slices(tmp_path, stack, make_statements(stack), stretch_of(stack))
    assert {n for planes in touched for n in planes} == {0, 1, 2, 3}
    assert max(len(planes) for planes in touched) == 1


def test_statements_of_other_slices_are_refused(tmp_path, slices, statements):
    with pytest.raises(ValueError, match=r"4 statements for 5 slices"):
        geotiff.write_slices(tmp_path, slices, statements[1:], stretch_of(slices))
    with pytest.raises(ValueError, match=r"slice 0 to 0.1 m has a statement for 0.2 to 0.3 m"):
        geotiff.write_slices(tmp_path, slices, statements[::-1], stretch_of(slices))


def test_a_stack_with_south_up_is_refused(tmp_path, slices, statements):
    with pytest.raises(ValueError, match="y is not regular and ascending"):
        geotiff.write_slices(tmp_path, slices.isel(y=slice(None, None, -1)), statements, stretch_of(slices))
