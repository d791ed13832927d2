"""Reading a run folder back: slices, lines, statements."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import shapely
import xarray as xr

from planum.errors import SurveyError
from planum.outputs.netcdf import write_netcdf
from planum.records import Statement
from planum.scene.build import build_scene
from planum.viewer.load import load_run, statements_of


@pytest.fixture
def run(ring: xr.Dataset, statement: Callable[[float, float], Statement], tmp_path: Path) -> Path:
    rows = [statement(float(top), float(bottom)) for top, bottom in ring.depth_bounds.values]
    write_netcdf(tmp_path / "slices.nc", ring, rows)
    shapes = [
        shapely.LineString([(512_340, 5_398_121), (512_356, 5_398_121)]),
        shapely.LineString([(0, 0), (1, 2), (3, 4)]),
    ]
    gpd.GeoDataFrame({"name": ["A 1", "A 2"]}, geometry=shapes, crs="EPSG:25832").to_file(
        tmp_path / "site.gpkg", layer="lines"
    )
    return tmp_path


def test_a_run_comes_back_lazy_with_its_lines(run: Path, ring: xr.Dataset) -> None:
    slices, lines = load_run(run)
    with slices:
        assert slices.amplitude.chunks is not None
        np.testing.assert_array_equal(slices.amplitude.values, ring.amplitude.values)
        np.testing.assert_allclose(slices.depth_bounds.values, ring.depth_bounds.values)
        assert slices.attrs["title"] == "Marrowby Field"
        assert [name for name, _ in lines] == ["A 1", "A 2"]
        np.testing.assert_array_equal(lines[1][1], [[0, 0], [1, 2], [3, 4]])
        assert build_scene(slices, lines=lines).lines.n_cells == 2


def test_statements_come_back_as_they_were_written(
    run: Path, ring: xr.Dataset, statement: Callable[[float, float], Statement]
) -> None:
    slices, _ = load_run(run)
    with slices:
        expected = tuple(statement(float(top), float(bottom)) for top, bottom in ring.depth_bounds.values)
        assert statements_of(slices) == expected
        assert statements_of(slices.drop_attrs()) == ()
        older = slices.assign_attrs()
        del older.attrs["statement_noise"]  # of a run made before slices stated it
        assert statements_of(older) == expected


def test_without_a_geopackage_there_are_no_lines(run: Path) -> None:
    (run / "site.gpkg").unlink()
    slices, lines = load_run(run)
    slices.close()
    assert lines == ()


def test_a_missing_run_names_the_command_that_makes_it(tmp_path: Path) -> None:
    with pytest.raises(SurveyError, match="there is no run here; planum map SITE makes it"):
        load_run(tmp_path)


def test_a_damaged_slice_file_is_named(run: Path) -> None:
    (run / "slices.nc").write_bytes(b"nothing of the kind")
    with pytest.raises(SurveyError, match=r"slices\.nc: cannot be read"):
        load_run(run)


def test_a_damaged_geopackage_is_named(run: Path) -> None:
    (run / "site.gpkg").write_bytes(b"nothing of the kind")
    with pytest.raises(SurveyError, match=r"site\.gpkg: cannot be read"):
        load_run(run)


def test_a_file_that_is_no_slice_stack_is_refused(run: Path, ring: xr.Dataset) -> None:
    ring.drop_vars("coverage").to_netcdf(run / "slices.nc", engine="h5netcdf")
    with pytest.raises(SurveyError, match="is no slice stack"):
        load_run(run)
