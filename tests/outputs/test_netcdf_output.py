"""``slices.nc`` against the CF checker of IOOS, and read back by xarray through another library."""

from __future__ import annotations

import json

import numpy as np
import pyproj
import pytest
import xarray as xr
from compliance_checker.runner import CheckSuite, ComplianceChecker

from planum.constants import CAUTIONS
from planum.outputs.netcdf import write_netcdf
from planum.schema import COVERAGE


def remarks(path, report) -> list[str]:
    """Every remark of compliance-checker, suite cf:1.11, whatever its weight."""
    CheckSuite.load_all_available_checkers()
    ComplianceChecker.run_checker(
        str(path), ["cf:1.11"], 0, "strict", output_filename=str(report), output_format="json"
    )
    found = json.loads(report.read_text())["cf:1.11"]
    weights = ("high_priorities", "medium_priorities", "low_priorities")
    return [text for weight in weights for entry in found[weight] for text in entry["msgs"]]


def test_the_file_follows_cf(tmp_path, slices, statements):
    """With a CRS there is no remark at all."""
    write_netcdf(tmp_path / "slices.nc", slices, statements)
    assert remarks(tmp_path / "slices.nc", tmp_path / "report.json") == []


def test_a_local_frame_follows_cf(tmp_path, make_slices, make_statements):
    """One remark stays: without a CRS the checker cannot tell that x and y are horizontal, so it doubts their order."""
    slices = make_slices(n=2, shape=(30, 40), crs="")
    write_netcdf(tmp_path / "slices.nc", slices, make_statements(slices))
    found = remarks(tmp_path / "slices.nc", tmp_path / "report.json")
    assert all("not in the recommended order T, Z, Y, X" in text and "y (U), x (U)" in text for text in found), found


def test_the_checker_sees_a_missing_direction(tmp_path, slices, statements):
    """A control: without ``positive`` the same checker complains."""
    path = tmp_path / "slices.nc"
    write_netcdf(path, slices, statements)
    import h5netcdf

    with h5netcdf.File(path, "a") as file:
        del file["depth"].attrs["positive"]
        file["depth"].attrs["units"] = "nonsense"
    assert remarks(path, tmp_path / "report.json")


@pytest.mark.parametrize("engine", ["netcdf4", "h5netcdf"])
def test_everything_comes_back(tmp_path, slices, statements, engine):
    """Read by the netCDF-C library and by h5netcdf."""
    path = tmp_path / "slices.nc"
    write_netcdf(path, slices, statements)
    with xr.open_dataset(path, engine=engine) as back:
        for name in ("amplitude", "left_out_error", "coverage", "depth_bounds"):
            np.testing.assert_array_equal(back[name].values, slices[name].values)
        np.testing.assert_array_equal(back["depth"].values, slices["depth"].values)
        assert back["depth"].attrs["positive"] == "down"
        assert back["coverage"].attrs["flag_values"].tolist() == sorted(COVERAGE)
        assert len(back["coverage"].attrs["flag_meanings"].split()) == len(COVERAGE)
        assert pyproj.CRS.from_wkt(back["crs"].attrs["crs_wkt"]).to_epsg() == 25832
        assert all(caution in back.attrs["comment"] for caution in CAUTIONS)
        assert back.attrs["statement_velocity_m_per_ns"] == statements[0].velocity_m_per_ns
        assert back.attrs["statement_top_m"].tolist() == [s.top_m for s in statements]


def test_a_repeated_run_gives_the_same_bytes(tmp_path, slices, statements):
    for name in ("a.nc", "b.nc"):
        write_netcdf(tmp_path / name, slices, statements)
    assert (tmp_path / "a.nc").read_bytes() == (tmp_path / "b.nc").read_bytes()


def test_one_plane_is_read_at_a_time(tmp_path, planes_per_compute, make_statements):
    stack, touched = planes_per_compute
    write_netcdf(tmp_path / "s.nc", stack, make_statements(stack))
    assert max(len(planes) for planes in touched) == 1
