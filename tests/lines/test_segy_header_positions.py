"""Positions from SEG-Y trace headers: scalar, unit and place rules of the standard (rev 1, trace bytes 71-90, 181-188;
from memory)."""

from __future__ import annotations

import struct

import numpy as np
import pytest

from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy

OPTIONS = ReadOptions(interval_unit="ps", header_positions=True)
DATA = np.random.default_rng(4).integers(-3000, 3000, (2, 60)).astype(np.int16)
SIZE = 240 + 120


def heads(path, file=(), **fields):
    """A file whose trace headers hold ``fields``: name -> value for both traces, or one each."""
    places = {"scalar": (71, ">h"), "sx": (73, ">i"), "sy": (77, ">i"), "gx": (81, ">i"), "gy": (85, ">i")}
    places |= {"unit": (89, ">h"), "ex": (181, ">i"), "ey": (185, ">i")}
    write_segy(path, DATA, interval_ns=0.2)
    content = bytearray(path.read_bytes())
    for at, code, value in file:
        struct.pack_into(code, content, at - 1, value)
    for name, value in fields.items():
        at, code = places[name]
        for i, v in enumerate(value if isinstance(value, tuple) else (value, value)):
            struct.pack_into(code, content, 3600 + i * SIZE + at - 1, v)
    path.write_bytes(content)
    return read_line(path, OPTIONS)


@pytest.mark.parametrize(("scalar", "factor"), [(-100, 0.01), (-1, 1), (0, 1), (1, 1), (10, 10)])
def test_a_negative_scalar_divides_and_zero_is_one(tmp_path, scalar, factor):
    got = heads(tmp_path / "a.sgy", scalar=scalar, sx=(1000, 1200), sy=(-50, 70), unit=1)
    np.testing.assert_allclose(got.x, np.array([1000, 1200]) * factor, rtol=1e-15)
    np.testing.assert_allclose(got.y, np.array([-50, 70]) * factor, rtol=1e-15)
    assert got.problems == ()


def test_source_and_group_give_their_midpoint(tmp_path):
    got = heads(tmp_path / "a.sgy", sx=100, sy=20, gx=101, gy=24, unit=1, ex=7, ey=7)
    assert (got.x.tolist(), got.y.tolist()) == ([100.5, 100.5], [22.0, 22.0])


@pytest.mark.parametrize("place", [("sx", "sy"), ("gx", "gy"), ("ex", "ey")])
def test_the_one_place_that_is_filled_in_is_used(tmp_path, place):
    got = heads(tmp_path / "a.sgy", **dict(zip(place, ((3, 4), (5, 6)), strict=True)))
    assert (got.x.tolist(), got.y.tolist()) == ([3, 4], [5, 6])


def test_feet_become_metres(tmp_path):
    got = heads(tmp_path / "a.sgy", file=[(3255, ">h", 2)], sx=100, sy=200, unit=1)
    # the international foot is 0.3048 m by definition
    np.testing.assert_allclose([got.x[0], got.y[0]], [30.48, 60.96], rtol=1e-15)


@pytest.mark.parametrize(
    ("unit", "name"), [(2, "arc-seconds"), (3, "decimal degrees"), (4, "degrees, minutes"), (9, "unknown unit 9")]
)
def test_angles_are_never_taken_for_metres(tmp_path, unit, name):
    got = heads(tmp_path / "a.sgy", sx=100, sy=200, unit=(1, unit))
    assert got.x is None
    assert got.y is None
    (problem,) = got.problems
    assert name in str(problem)
    assert "projection" in str(problem)


def test_empty_headers_are_reported(tmp_path):
    got = heads(tmp_path / "a.sgy")
    assert got.x is None
    assert "no coordinates in the trace headers" in str(got.problems[0])


def test_a_scalar_outside_the_standard_is_applied_and_reported(tmp_path):
    got = heads(tmp_path / "a.sgy", scalar=-50, sx=100, sy=200, unit=1)
    assert got.x.tolist() == [2, 2]
    assert "coordinate scalar 50 is none of the standard's" in str(got.problems[0])


def test_positions_are_read_only_when_asked_for(tmp_path):
    heads(tmp_path / "a.sgy", sx=100, sy=200, unit=1)
    assert read_line(tmp_path / "a.sgy", ReadOptions(interval_unit="ps")).x is None
