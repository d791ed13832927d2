"""The SEG-Y writer: refuses what it cannot hold, leaves the caller's arrays and an older file alone."""

from __future__ import annotations

import numpy as np
import pytest

from planum.errors import LineError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy

DATA = np.random.default_rng(3).integers(-3000, 3000, (5, 60)).astype(np.int16)


@pytest.mark.parametrize("code", [1, 2, 3, 5])
def test_the_callers_array_stays_as_it_was(tmp_path, code):
    data = DATA.astype(np.float32)
    before = data.copy()
    write_segy(tmp_path / "a.sgy", data, interval_ns=0.2, sample_format=code)
    np.testing.assert_array_equal(data, before)


def test_a_dataarray_is_taken_as_it_is(tmp_path):
    write_segy(tmp_path / "a.sgy", DATA, interval_ns=0.2)
    line = read_line(tmp_path / "a.sgy", ReadOptions(interval_unit="ps")).to_dataarray()
    write_segy(tmp_path / "b.sgy", line, interval_ns=0.2)
    assert (tmp_path / "b.sgy").read_bytes() == (tmp_path / "a.sgy").read_bytes()


@pytest.mark.parametrize("interval_ns", [0.15, 0.1, 0.3, 32.767])
def test_exact_picoseconds_come_back(tmp_path, interval_ns):
    write_segy(tmp_path / "a.sgy", DATA, interval_ns=interval_ns)
    got = read_line(tmp_path / "a.sgy", ReadOptions(interval_unit="ps"))
    assert got.interval_ns == pytest.approx(interval_ns, rel=1e-15)  # one rounding of a multiplication


@pytest.mark.parametrize(
    ("settings", "says"),
    [
        ({"interval_ns": 0.1953125}, r"0.1953125 ns is 195.3125 ps; .*whole numbers from 1 to 32767; use revision=2"),
        ({"interval_ns": 40.0}, "40.0 ns is 40000 ps"),
        ({"interval_ns": -0.2}, "-0.2 ns is -200 ps"),
        ({"interval_ns": np.nan}, "nan ns is nan ps"),
        ({"interval_ns": np.inf, "revision": 2}, "inf ns"),
        ({"interval_unit": "ms"}, "interval unit 'ms'"),
        ({"sample_format": 4}, r"sample format 4 \(4-byte fixed point with gain\); revision 1 has 1, 2, 3, 5, 8"),
        ({"sample_format": 5, "revision": 0}, "revision 0 has 1, 2, 3"),
        ({"revision": 3}, "revision 3; 0, 1 or 2"),
        ({"byte_order": "="}, "byte order '='"),
        ({"text": ["x"] * 38}, "38 text rows"),
        ({"text": ["x" * 77]}, "at most 76 characters"),
        ({"field_record": 2**31}, "field record 2147483648"),
        ({"x": np.zeros(5)}, r"y of shape \(\)"),
        ({"x": np.zeros(4), "y": np.zeros(5)}, r"x of shape \(4,\)"),
        ({"x": np.full(5, np.nan), "y": np.zeros(5)}, "x of shape .*; 5 finite numbers"),
        ({"x": np.zeros(5), "y": np.zeros(5), "coordinate_scalar": -7}, "coordinate scalar -7"),
        # millimetres of a map northing overflow 32 bits: the limit is 2 147 483.647 m
        (
            {"x": np.zeros(5), "y": np.full(5, 5.4e6), "coordinate_scalar": -1000},
            "y up to 5400000 m does not fit 32 bits with coordinate scalar -1000",
        ),
    ],
)
def test_settings_that_cannot_be_held_are_refused(tmp_path, settings, says):
    with pytest.raises(LineError, match=says):
        write_segy(tmp_path / "a.sgy", DATA, **{"interval_ns": 0.2, **settings})
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("data", "code", "says"),
    [
        (DATA + 0.5, 3, "with fractions; whole numbers from -32768 to 32767"),
        (DATA * 100.0, 3, "values from -29"),
        (DATA, 8, "whole numbers from -128 to 127"),
        (np.full((2, 60), np.nan), 5, "not finite"),
        (np.full((2, 60), np.nan), 3, "values from nan to nan"),
        (np.full((2, 60), 1e39), 5, "largest 4-byte float"),
        (np.full((2, 60), 1e76), 1, "7.237e75"),
        (np.zeros((0, 60)), 3, r"shape \(0, 60\)"),
        (np.zeros(60), 3, r"shape \(60,\)"),
        (np.zeros((2, 60), complex), 3, "type complex128"),
        (np.zeros((1, 40_000), np.int16), 3, "40000 samples per trace; 32767 before revision 2"),
    ],
)
def test_values_that_cannot_be_held_are_refused_and_nothing_is_left(tmp_path, data, code, says):
    with pytest.raises(LineError, match=says):
        write_segy(tmp_path / "a.sgy", data, interval_ns=0.2, sample_format=code)
    assert list(tmp_path.iterdir()) == []


def test_a_failed_write_leaves_the_older_file(tmp_path):
    path = tmp_path / "a.sgy"
    write_segy(path, DATA, interval_ns=0.2)
    before = path.read_bytes()
    with pytest.raises(LineError, match="fractions"):
        write_segy(path, DATA + 0.5, interval_ns=0.2)
    assert path.read_bytes() == before


@pytest.mark.parametrize(("scalar", "error"), [(-1000, 0.0005), (-100, 0.005), (-1, 0.5), (1, 0.5), (10, 5)])
def test_positions_come_back_within_the_scalars_rounding(tmp_path, scalar, error):
    x, y = 451234.567 + np.arange(5), 2012345.678 - np.arange(5)
    write_segy(tmp_path / "a.sgy", DATA, interval_ns=0.2, x=x, y=y, coordinate_scalar=scalar)
    got = read_line(tmp_path / "a.sgy", ReadOptions(interval_unit="ps", header_positions=True))
    # 1e-9: representation of such numbers as float64
    np.testing.assert_allclose(got.x, x, rtol=0, atol=error + 1e-9)
    np.testing.assert_allclose(got.y, y, rtol=0, atol=error + 1e-9)


def test_long_lines_are_written_in_blocks(tmp_path, monkeypatch):
    x = np.arange(5.0)
    write_segy(tmp_path / "a.sgy", DATA, interval_ns=0.2, x=x, y=x)
    monkeypatch.setattr("planum.lines.segy_write._BLOCK", 1)
    write_segy(tmp_path / "b.sgy", DATA, interval_ns=0.2, x=x, y=x)
    assert (tmp_path / "b.sgy").read_bytes() == (tmp_path / "a.sgy").read_bytes()
