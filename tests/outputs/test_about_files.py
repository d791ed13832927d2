"""Every file of a run says the same of itself."""

from __future__ import annotations

import json

import numpy as np
import pytest
import rasterio
from PIL import Image

from planum.errors import MachineError, PlanumError
from planum.outputs.about import READABLE, statement_in
from planum.outputs.geopackage import LineShape, SiteShapes, write_geopackage
from planum.outputs.geotiff import write_slices
from planum.outputs.netcdf import write_netcdf
from planum.outputs.pictures import draw_contact_sheet, draw_slices
from planum.outputs.report import ReportContext, write_report
from planum.outputs.stack import write_stack
from planum.outputs.stretch import stretch_of
from planum.outputs.writing import copy_png, save_png, statement_text


@pytest.fixture(scope="module")
def run(tmp_path_factory, slices, statements):
    folder = tmp_path_factory.mktemp("run")
    stretch = stretch_of(slices)
    write_slices(folder, slices, statements, stretch)
    write_stack(folder / "slices_all.tif", slices, statements)
    write_netcdf(folder / "slices.nc", slices, statements)
    line = LineShape("1", "A/x", "lines/A_001.sgy", np.array([[0.0, 0.0], [1.0, 0.0]]))
    write_geopackage(folder / "site.gpkg", SiteShapes(crs="", lines=[line]), statements)
    draw_slices(folder, slices, statements, stretch)
    draw_contact_sheet(folder / "contact_sheet.png", slices, statements, stretch)
    write_report(folder / "report.html", ReportContext(title="T", code="ASM2", statements=statements))
    records = [s.model_dump(mode="json") for s in statements]
    (folder / "run.json").write_text(json.dumps({"statements": records}), encoding="utf-8")
    return folder


def test_files_of_one_slice_give_its_whole_statement(run, statements):
    expected = {k.removeprefix("PLANUM_").lower(): v for k, v in statements[2].tags().items()}
    # numbers keep the digits their errors allow: 0.025 m and 0.12 ns at two significant digits
    expected |= {"depth_error_m": "0.025", "zero_error_ns": "0.12", "velocity_m_per_ns": "0.0853"}
    for name in ("ASM2_d010-020cm.tif", "ASM2_d010-020cm_grey.tif", "ASM2_d010-020cm.png"):
        assert statement_in(run / name) == expected, name


def test_files_of_all_slices_agree(run, statements):
    """Seven renderings of the same records, read back by four libraries."""
    names = ["slices_all.tif", "slices.nc", "site.gpkg", "contact_sheet.png", "report.html", "run.json"]
    found = {name: statement_in(run / name) for name in names}
    assert {".tif", ".nc", ".gpkg", ".png", ".html", ".json"} <= set(READABLE)
    for name in names:
        assert found[name] == found["slices_all.tif"], name
    assert found["slices.nc"]["top_m"] == " | ".join(f"{s.top_m:.6g}" for s in statements)
    assert found["slices.nc"]["stretch"] == statements[0].stretch


def test_numbers_keep_the_digits_their_errors_allow(tmp_path):
    """Two significant digits of the error (common practice), the value to the same place; the rest as it stands."""
    said = {"velocity_m_per_ns": 0.086813, "velocity_error_m_per_ns": 0.000816, "depth_error_m": [0.0367, 0.1234]}
    (tmp_path / "run.json").write_text(json.dumps({"statement": {**said, "top_m": 0.123456}}), encoding="utf-8")
    assert statement_in(tmp_path / "run.json") == {
        "velocity_m_per_ns": "0.08681",
        "velocity_error_m_per_ns": "0.00082",
        "depth_error_m": "0.037 | 0.12",
        "top_m": "0.123456",
    }


def test_a_copied_picture_keeps_its_pixels_and_gains_a_statement(tmp_path, statements):
    picture = Image.fromarray(np.arange(256, dtype=np.uint8).reshape(16, 16))
    save_png(tmp_path / "a.png", picture, title="A", sentence="Ü")
    copy_png(tmp_path / "a.png", tmp_path / "b.png", statement=statement_text(statements[2]))
    with Image.open(tmp_path / "b.png") as copied:
        copied.load()
        assert (copied.text["Title"], copied.text["Description"]) == ("A", "Ü")
        np.testing.assert_array_equal(np.asarray(copied), np.asarray(picture))
    assert statement_in(tmp_path / "b.png")["top_m"] == "0.1"
    (tmp_path / "c.png").write_bytes(b"GIF")
    with pytest.raises(MachineError, match="is no PNG"):
        copy_png(tmp_path / "c.png", tmp_path / "d.png", statement="{}")


def test_files_of_others_are_told_apart(tmp_path):
    Image.new("L", (4, 4)).save(tmp_path / "plain.png")
    with rasterio.open(
        tmp_path / "plain.tif", "w", driver="GTiff", width=2, height=2, count=1, dtype="uint8",
        transform=rasterio.Affine(1, 0, 0, 0, -1, 2),
    ):  # fmt: skip
        pass
    (tmp_path / "other.html").write_text("<p>hello", encoding="utf-8")
    (tmp_path / "other.json").write_text("[1, 2]", encoding="utf-8")
    for name in ("plain.png", "plain.tif", "other.html", "other.json"):
        with pytest.raises(PlanumError, match=r"carries no statement of planum; .*\.gpkg, \.html"):
            statement_in(tmp_path / name)


def test_broken_missing_and_foreign_files_are_named(tmp_path):
    for name in ("a.png", "a.tif", "a.nc", "a.gpkg", "a.json"):
        (tmp_path / name).write_bytes(b"\x00nonsense" * 20)
        with pytest.raises(PlanumError, match=r"cannot be read"):
            statement_in(tmp_path / name)
    with pytest.raises(PlanumError, match="there is no such file"):
        statement_in(tmp_path / "missing.tif")
    (tmp_path / "a.docx").write_bytes(b"x")
    with pytest.raises(PlanumError, match=r"files ending in '\.docx' carry no statement"):
        statement_in(tmp_path / "a.docx")


@pytest.mark.filterwarnings("ignore::rasterio.errors.NotGeoreferencedWarning")
def test_a_raster_that_points_elsewhere_is_not_followed(tmp_path, run):
    """A .tif may hold a virtual raster naming other files; only the GeoTIFF driver opens it."""
    target = run / "slices_all.tif"
    (tmp_path / "a.tif").write_text(
        f'<VRTDataset rasterXSize="1" rasterYSize="1"><Metadata><MDI key="PLANUM_TOP_M">0</MDI></Metadata>'
        f'<VRTRasterBand dataType="Float32" band="1"><SimpleSource><SourceFilename>{target}</SourceFilename>'
        f"</SimpleSource></VRTRasterBand></VRTDataset>",
        encoding="utf-8",
    )
    with rasterio.open(tmp_path / "a.tif") as raster:
        assert raster.driver == "VRT"
    with pytest.raises(PlanumError, match="cannot be read"):
        statement_in(tmp_path / "a.tif")
