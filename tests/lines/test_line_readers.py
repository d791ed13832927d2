"""Readers as plug-ins: entry points, broken ones, unknown files."""

from __future__ import annotations

import os
from importlib import metadata

import numpy as np
import pytest
import xarray as xr

from planum import plugins
from planum.errors import LineError, PlanumWarning
from planum.lines import reading
from planum.lines.reading import LineReader, line_readers, open_line, parts_in, read_line
from planum.lines.recording import RawLayout, ReadOptions, Recording
from planum.lines.segy_write import write_segy
from planum.records import FLAG_DEAD

DATA = np.random.default_rng(8).integers(-3000, 3000, (3, 60)).astype(np.int16)


class Ours:
    """A third party's reader."""

    name = "ours"
    suffixes = (".ours",)

    def claims(self, path, head):
        return path.suffix == ".ours" or head.startswith(b"OURS")

    def read(self, path, options):
        if path.stem == "bad":
            raise ZeroDivisionError("oh")
        return Recording(DATA * 1.0, 0.2, "ours", None, None, np.zeros(3, np.uint8))


class Breaks:
    name = "breaks"
    suffixes = ()

    def claims(self, path, head):
        raise KeyError("nothing")

    def read(self, path, options):
        raise AssertionError


OURS, BREAKS, NO_READER = Ours(), Breaks(), object()


@pytest.fixture
def installed(monkeypatch):
    """Install readers of this module beside the project's own."""

    class Entry:
        def __init__(self, name, reader):
            self.name, self.value, self.load = name, f"some.package:{name}", lambda: reader

    real = list(metadata.entry_points(group=reading.GROUP))

    def install(**readers):
        entries = [*real, *(Entry(n, r) for n, r in readers.items())]
        monkeypatch.setattr(plugins.metadata, "entry_points", lambda group: entries)
        line_readers.cache_clear()

    yield install
    monkeypatch.undo()
    line_readers.cache_clear()


def test_the_projects_readers_are_installed_and_fit_the_protocol():
    readers = line_readers()
    assert {"segy", "netcdf", "delimited", "raw"} <= set(readers)
    assert all(isinstance(r, LineReader) for r in readers.values())
    assert line_readers() is readers


def test_a_third_partys_reader_is_found_by_suffix_and_by_content(tmp_path, installed):
    installed(ours=OURS)
    for name, content in (("a.ours", b""), ("b.bin", b"OURS...")):
        (tmp_path / name).write_bytes(content)
        assert read_line(tmp_path / name).interval_origin == "ours"


def test_a_broken_plug_in_warns_and_the_rest_goes_on(tmp_path, installed):
    installed(ours=OURS, useless=NO_READER)
    with pytest.warns(PlanumWarning, match=r"'useless' \(some.package:useless\) .* it is no line reader"):
        readers = line_readers()
    assert "useless" not in readers
    assert {"ours", "segy"} <= set(readers)


def test_a_plug_in_that_cannot_be_imported_warns(installed, monkeypatch):
    entries = [
        *metadata.entry_points(group=reading.GROUP),
        metadata.EntryPoint("gone", "no_such_module_anywhere:READER", reading.GROUP),
    ]
    monkeypatch.setattr(plugins.metadata, "entry_points", lambda group: entries)
    line_readers.cache_clear()
    with pytest.warns(PlanumWarning, match="'gone' .*No module named 'no_such_module_anywhere'"):
        assert "segy" in line_readers()


@pytest.mark.parametrize("stem", ["bad"])
def test_whatever_a_plug_in_raises_becomes_a_line_error(tmp_path, installed, stem):
    installed(ours=OURS)
    (tmp_path / "bad.ours").write_bytes(b"")
    with pytest.raises(LineError, match=r"bad.ours: the line reader 'ours' failed: ZeroDivisionError: oh"):
        read_line(tmp_path / "bad.ours")


def test_a_reader_that_fails_to_look_is_a_line_error_too(tmp_path, installed):
    installed(breaks=BREAKS)
    (tmp_path / "a.bin").write_bytes(b"")
    with pytest.raises(LineError, match="'breaks' failed: KeyError"):
        read_line(tmp_path / "a.bin")


def test_an_unknown_file_names_readers_and_suffixes(tmp_path):
    (tmp_path / "a.bin").write_bytes(b"\0" * 5000)
    with pytest.raises(
        LineError, match=r"no installed line reader knows this file.*delimited: .csv.*raw: declared.*sgy"
    ):
        read_line(tmp_path / "a.bin")


def test_a_reader_can_be_forced_and_a_wrong_name_is_helped(tmp_path):
    write_segy(tmp_path / "a.dat", DATA, interval_ns=0.2)
    np.testing.assert_array_equal(read_line(tmp_path / "a.dat", ReadOptions(interval_ns=0.2, reader="segy")).data, DATA)
    with pytest.raises(LineError, match="no line reader 'sgey'; did you mean 'segy'"):
        read_line(tmp_path / "a.dat", ReadOptions(interval_ns=0.2, reader="sgey"))


def test_a_declared_layout_means_the_raw_reader(tmp_path):
    DATA.astype("<i2").tofile(tmp_path / "a.sgy")
    got = read_line(tmp_path / "a.sgy", ReadOptions(interval_ns=0.2, layout=RawLayout(n_samples=60)))
    np.testing.assert_array_equal(got.data, DATA)


@pytest.mark.parametrize("what", ["missing", "folder", "pipe"])
def test_what_is_no_file_is_refused(tmp_path, what):
    """A pipe would block the reader for ever."""
    path = tmp_path / "a.sgy"
    if what == "folder":
        path.mkdir()
    if what == "pipe":
        os.mkfifo(path)
    with pytest.raises(LineError, match=r"a\.sgy: no such file"):
        read_line(path)


def test_errors_name_the_file_but_not_the_machines_folders(tmp_path):
    (tmp_path / "a.sgy").write_bytes(b"")
    with pytest.raises(LineError) as caught:
        read_line(tmp_path / "a.sgy")
    assert str(caught.value).startswith("a.sgy, byte 0: 0 bytes")
    assert str(tmp_path) not in str(caught.value)


def test_open_line_returns_a_dataarray_with_its_coordinates(tmp_path):
    write_segy(tmp_path / "a.sgy", DATA, interval_ns=0.2, x=np.arange(3.0), y=np.zeros(3) + 2)
    line = open_line(tmp_path / "a.sgy", interval_unit="ps", header_positions=True)
    assert isinstance(line, xr.DataArray)
    assert line.dims == ("trace", "sample")
    # one rounding per multiplication
    np.testing.assert_allclose(line.time, 0.2 * np.arange(60), rtol=1e-15)
    assert line.time.attrs["units"] == "ns"
    assert line.x.values.tolist() == [0, 1, 2]
    assert line.flag.dtype == np.uint8
    assert line.attrs["quantity"] == "voltage"


def test_open_line_warns_of_problems(tmp_path):
    path = tmp_path / "a.sgy"
    write_segy(path, DATA, interval_ns=0.2)
    path.write_bytes(path.read_bytes()[:-7])
    with pytest.warns(PlanumWarning, match="its last trace is cut"):
        assert open_line(path, interval_unit="ps").shape == (2, 60)


def test_single_line_formats_hold_one_part(tmp_path):
    (tmp_path / "a.csv").write_text("1,2\n")
    assert parts_in(tmp_path / "a.csv") == 1


def test_constant_traces_are_dead(tmp_path):
    data = DATA.copy()
    data[1] = -5
    write_segy(tmp_path / "a.sgy", data, interval_ns=0.2)
    assert read_line(tmp_path / "a.sgy", ReadOptions(interval_unit="ps")).flag.tolist() == [0, FLAG_DEAD, 0]
