"""NetCDF lines written by xarray (h5netcdf and scipy engines) and by h5py."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
import xarray as xr

from planum.errors import LineError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.records import FLAG_DEAD

DATA = np.random.default_rng(12).normal(0, 900, (5, 80)).astype(np.float32)
ENGINES = {"h5netcdf": "NETCDF4", "scipy": "NETCDF3_64BIT"}


def dataset(unit="ns", sample="sample", data=DATA):
    return xr.Dataset(
        {"amplitude": (("trace", sample), data)},
        coords={
            "time": (sample, 0.25 * np.arange(80), {"units": unit} if unit else {}),
            "x": ("trace", 100 + 0.5 * np.arange(5), {"units": "m"}),
            "y": ("trace", np.full(5, 7.0), {"units": "m"}),
        },
    )


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("sample", ["sample", "time"])
def test_amplitude_time_and_positions(tmp_path, engine, sample):
    dataset(sample=sample).to_netcdf(tmp_path / "a.nc", engine=engine, format=ENGINES[engine])
    got = read_line(tmp_path / "a.nc", ReadOptions(header_positions=True))
    np.testing.assert_array_equal(got.data, DATA)
    assert got.data.dtype.isnative
    assert (got.interval_ns, got.interval_origin) == (0.25, "time coordinate of the file, unit ns")
    assert got.x.tolist() == [100, 100.5, 101, 101.5, 102]
    assert got.y.tolist() == [7] * 5
    assert got.problems == ()


def test_our_own_dataarray_comes_back(tmp_path):
    dataset().to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    first = read_line(tmp_path / "a.nc", ReadOptions(header_positions=True)).to_dataarray()
    first.to_netcdf(tmp_path / "b.nc", engine="h5netcdf")
    second = read_line(tmp_path / "b.nc", ReadOptions(header_positions=True)).to_dataarray()
    xr.testing.assert_equal(first, second)


@pytest.mark.parametrize("engine", ENGINES)
def test_transposed_variables_are_turned(tmp_path, engine):
    dataset().transpose("sample", "trace").to_netcdf(tmp_path / "a.nc", engine=engine, format=ENGINES[engine])
    np.testing.assert_array_equal(read_line(tmp_path / "a.nc").data, DATA)


@pytest.mark.parametrize(("unit", "factor"), [("ps", 1e-3), ("ns", 1), ("us", 1e3), ("s", 1e9)])
def test_the_time_coordinates_unit_is_part_of_its_numbers(tmp_path, unit, factor):
    data = dataset(unit)
    data["time"] = ("sample", np.arange(80) * 0.25 / factor, {"units": unit})
    data.to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    got = read_line(tmp_path / "a.nc", ReadOptions(interval_unit="ps"))
    assert got.interval_ns == pytest.approx(0.25, rel=1e-12)


def test_a_time_coordinate_without_unit_asks_for_it(tmp_path):
    dataset(None).to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    with pytest.raises(LineError, match=r'field holds 0.25 and its unit is not known; likely unit: "ns"'):
        read_line(tmp_path / "a.nc")
    assert read_line(tmp_path / "a.nc", ReadOptions(interval_unit="ns")).interval_ns == 0.25


def test_packed_values_and_fill_values_follow_the_conventions(tmp_path):
    """CF conventions, packed data: value = packed * scale_factor + add_offset; xarray packs here."""
    values = np.round(DATA.astype(float) * 2) / 2
    values[3, 7] = np.nan
    packing = {"amplitude": {"dtype": "int16", "scale_factor": 0.5, "add_offset": 10.0, "_FillValue": -32768}}
    dataset(data=values).to_netcdf(tmp_path / "a.nc", engine="h5netcdf", encoding=packing)
    got = read_line(tmp_path / "a.nc")
    assert np.flatnonzero(got.flag & FLAG_DEAD).tolist() == [3]
    keep = [0, 1, 2, 4]
    np.testing.assert_array_equal(got.data[keep], values[keep].astype(np.float32))


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (lambda d: d.rename(trace="row"), r"0 numeric variables .*there is .*amplitude\(row, sample\)"),
        (lambda d: d.rename(amplitude="a").assign(b=d.amplitude * 2), "2 numeric variables"),
        (
            lambda d: d.assign_coords(time=("sample", np.arange(80.0)[::-1], {"units": "ns"})),
            "not regular and ascending",
        ),
        (lambda d: d.isel(trace=slice(0)), r"amplitude is empty: \(0, 80\)"),
    ],
)
def test_what_does_not_fit_is_refused(tmp_path, change, says):
    change(dataset()).to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    with pytest.raises(LineError, match=says):
        read_line(tmp_path / "a.nc")


@pytest.mark.parametrize("missing", [["x"], ["x", "y"]])
def test_missing_positions_are_reported(tmp_path, missing):
    dataset().drop_vars(missing).to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    got = read_line(tmp_path / "a.nc", ReadOptions(header_positions=True))
    assert got.x is None
    assert "no finite x and y (trace) in m" in str(got.problems[0])


def _external_link(path, secret):
    with h5py.File(path, "a") as file:
        file["other"] = h5py.ExternalLink(secret, "/amplitude")


def _nested_external_link(path, secret):
    with h5py.File(path, "a") as file:
        group = file.create_group("a/b")
        group["loop"] = file["a"]  # a hard link to its own parent: must not be followed for ever
        group["loop2"] = file["a"]
        group["other"] = h5py.ExternalLink(secret, "/amplitude")


def _external_storage(path, secret):
    with h5py.File(path, "a") as file:
        file.create_dataset("other", (4,), "i1", external=[(secret, 0, 4)])


def _virtual(path, secret):
    layout = h5py.VirtualLayout((5, 80), "f4")
    layout[:] = h5py.VirtualSource(secret, "amplitude", (5, 80))
    with h5py.File(path, "a") as file:
        file.create_virtual_dataset("other", layout)


@pytest.mark.parametrize(
    ("add", "says"),
    [
        (_external_link, "link to another file"),
        (_nested_external_link, "/a/b/other is a link to another file"),
        (_external_storage, "external storage"),
        (_virtual, "virtual dataset"),
    ],
)
def test_hdf5_that_reads_elsewhere_is_refused(tmp_path, add, says):
    dataset().to_netcdf(tmp_path / "secret.nc", engine="h5netcdf")
    dataset().to_netcdf(tmp_path / "a.nc", engine="h5netcdf")
    add(tmp_path / "a.nc", str(tmp_path / "secret.nc"))
    with pytest.raises(LineError, match=says):
        read_line(tmp_path / "a.nc")


def test_a_huge_variable_that_was_never_written_is_refused(tmp_path):
    """1 TB of fill values in a file of some kilobytes."""
    with h5py.File(tmp_path / "a.nc", "w") as file:
        big = file.create_dataset("amplitude", (10**6, 250_000), "f4", chunks=(1000, 1000))
        for i, (name, n) in enumerate({"trace": 10**6, "sample": 250_000}.items()):
            scale = file.create_dataset(name, (n,), "f4", chunks=(1000,))
            scale.make_scale(name)
            big.dims[i].attach_scale(scale)
    with pytest.raises(LineError, match="bytes of values from 0 stored ones"):
        read_line(tmp_path / "a.nc", ReadOptions(interval_ns=0.2))


@pytest.mark.parametrize("engine", ENGINES)
def test_damage_is_a_line_error(tmp_path, engine):
    dataset().to_netcdf(tmp_path / "a.nc", engine=engine, format=ENGINES[engine])
    whole = (tmp_path / "a.nc").read_bytes()
    for keep in (0, 3, 9, 100, len(whole) // 2, len(whole) - 1):
        (tmp_path / "a.nc").write_bytes(whole[:keep])
        with pytest.raises(LineError, match=r"a.nc"):
            read_line(tmp_path / "a.nc")
