"""``site.gpkg`` against the GeoPackage 1.3 tables (own SQL) and geopandas."""

from __future__ import annotations

import sqlite3
from contextlib import closing

import geopandas as gpd
import numpy as np
import pytest

from planum.constants import CAUTIONS
from planum.outputs.geopackage import ControlShape, GridShape, LineShape, SiteShapes, write_geopackage
from planum.outputs.raster import raster_of

LAYERS = {"lines": "LINESTRING", "grids": "POLYGON", "control": "POINT", "coverage": "MULTIPOLYGON"}


def shapes_of(slices) -> SiteShapes:
    raster = raster_of(slices)
    west, south, east, north = raster.bounds
    return SiteShapes(
        crs=raster.crs,
        lines=[
            LineShape(str(n), "A/x", f"lines/A_{n:03d}.sgy", np.array([[west, y], [east, y]]), {"visit": "2026-04-18"})
            for n, y in enumerate(np.arange(south + 0.1, north, 0.25), start=1)
        ],
        grids=[GridShape("A", np.array([[west, south], [east, south], [east, north], [west, north]]))],
        control=[ControlShape("P1", west, south, 0.012), ControlShape("P2", east, north, None)],
        coverage=slices["coverage"].values,
        raster=raster,
    )


@pytest.fixture
def written(tmp_path, slices, statements):
    path = tmp_path / "site.gpkg"
    write_geopackage(path, shapes_of(slices), statements, changed="2026-04-18")
    return path


def rows(path, query):
    with closing(sqlite3.connect(path)) as base:
        return base.execute(query).fetchall()


def test_the_tables_are_geopackage_1_3(written, slices):
    """OGC 12-128r17: clause 1.1.1.1.1 (ids), requirements 11 (srs rows), 13 to 17 (contents), 21 to 32 (geometry)."""
    assert rows(written, "PRAGMA application_id") == [(0x47504B47,)]
    assert rows(written, "PRAGMA user_version") == [(10300,)]
    assert {-1, 0, 4326, 25832} <= {r[0] for r in rows(written, "SELECT srs_id FROM gpkg_spatial_ref_sys")}
    kinds = rows(written, "SELECT table_name, geometry_type_name, srs_id FROM gpkg_geometry_columns")
    assert {(name, kind, 25832) for name, kind in LAYERS.items()} == set(kinds)
    assert rows(written, "PRAGMA integrity_check") == [("ok",)]
    assert rows(written, "PRAGMA foreign_key_check") == []
    west, south, east, north = raster_of(slices).bounds
    extent = rows(written, "SELECT min_x, min_y, max_x, max_y FROM gpkg_contents WHERE table_name = 'grids'")
    # Doubles of 5.4e6 m are 1e-9 m apart.
    np.testing.assert_allclose(extent[0], (west, south, east, north), rtol=0, atol=2e-9)
    contents = dict(rows(written, "SELECT table_name, data_type FROM gpkg_contents"))
    assert contents == {**dict.fromkeys(LAYERS, "features"), "statement": "attributes"}


def test_every_layer_carries_the_cautions(written):
    for name in LAYERS:
        (text,) = rows(written, f"SELECT description FROM gpkg_contents WHERE table_name = '{name}'")  # noqa: S608
        assert all(caution in text[0] for caution in CAUTIONS)


def test_geopandas_reads_the_layers(written, slices, statements):
    lines = gpd.read_file(written, layer="lines")
    assert lines.crs.to_epsg() == 25832
    assert len(lines) == 24
    # Length of a straight line across the raster: 160 cells of 0.05 m; coordinates hold 1e-9 m.
    np.testing.assert_allclose(lines["length_m"], 8.0, atol=1e-8)
    assert lines["file"][0] == "lines/A_001.sgy"
    control = gpd.read_file(written, layer="control").set_index("name")
    assert control.loc["P1", "residual_m"] == pytest.approx(0.012)
    assert np.isnan(control.loc["P2", "residual_m"])
    table = gpd.read_file(written, layer="statement")
    assert table["sentence"].tolist() == [s.sentence() for s in statements]


def test_coverage_areas_are_cell_counts(written, slices):
    """Area of a class = its cells times the cell's area; outlines have no holes or overlaps that could change it."""
    frame = gpd.read_file(written, layer="coverage").set_index("class")
    counts = {k: int((slices["coverage"].values == k).sum()) for k in (1, 2, 4)}
    assert sorted(frame.index) == sorted(counts)
    for value, count in counts.items():
        # Shoelace sums at 5.4e6 m lose about 1e-9 of coordinate times length.
        assert frame.loc[value].geometry.area == pytest.approx(count * 0.05**2, rel=1e-6)
        assert frame.loc[value, "area_m2"] == pytest.approx(count * 0.05**2, rel=1e-6)
    assert frame.geometry.is_valid.all()


def test_a_second_run_replaces_the_file(written, slices, statements):
    """No row appears twice, and the content is the same to the byte."""
    before = written.read_bytes()
    write_geopackage(written, shapes_of(slices), statements, changed="2026-04-18")
    assert written.read_bytes() == before
    assert len(gpd.read_file(written, layer="lines")) == 24
    assert [p.name for p in written.parent.iterdir()] == ["site.gpkg"]


def test_a_local_frame_is_undefined_cartesian(tmp_path, make_slices):
    """OGC 12-128r17, requirement 11: srs_id -1 is for undefined Cartesian systems."""
    write_geopackage(tmp_path / "s.gpkg", shapes_of(make_slices(n=1, crs="")))
    assert set(rows(tmp_path / "s.gpkg", "SELECT srs_id FROM gpkg_geometry_columns")) == {(-1,)}


def test_layers_without_shapes_still_open(tmp_path):
    write_geopackage(tmp_path / "s.gpkg", SiteShapes(crs="EPSG:25832", lines=[]))
    assert len(gpd.read_file(tmp_path / "s.gpkg", layer="control")) == 0
