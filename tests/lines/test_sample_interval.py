"""Where the interval comes from and which windows are believed."""

from __future__ import annotations

import struct

import numpy as np
import pytest

from planum.errors import LineError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy

DATA = np.random.default_rng(6).integers(-3000, 3000, (3, 200)).astype(np.int16)


@pytest.fixture
def line(tmp_path):
    write_segy(tmp_path / "a.sgy", DATA, interval_ns=0.2)
    return tmp_path / "a.sgy"


@pytest.fixture
def exact(tmp_path):
    """Revision 2: the 16-bit field rounds to 195 ps, the 64-bit one is exact."""
    write_segy(tmp_path / "b.sgy", DATA, interval_ns=0.1953125, revision=2)
    return tmp_path / "b.sgy"


def test_the_surveys_interval_beats_everything(exact):
    got = read_line(exact, ReadOptions(interval_ns=0.25, interval_unit="ns"))
    assert (got.interval_ns, got.interval_origin) == (0.25, "given")
    assert "0.25 ns per sample is given, the file's field 195 would be 0.195 ns (ps)" in str(got.problems[0])


def test_a_survey_interval_that_the_field_rounds_is_no_disagreement(exact):
    assert read_line(exact, ReadOptions(interval_ns=0.1953125)).problems == ()


def test_the_surveys_unit_beats_the_revision_2_field(exact):
    got = read_line(exact, ReadOptions(interval_unit="ps"))
    assert got.interval_ns == pytest.approx(0.195, rel=1e-15)
    assert got.interval_origin == "file, unit given: ps"
    assert got.problems == ()


def test_a_unit_that_contradicts_the_revision_2_field_is_reported(exact):
    content = bytearray(exact.read_bytes())
    struct.pack_into(">d", content, 3272, 0.3e-3)
    exact.write_bytes(content)
    got = read_line(exact, ReadOptions(interval_unit="ps"))
    assert got.interval_ns == pytest.approx(0.195, rel=1e-15)
    assert "interval 0.195 ns by interval_unit, 0.3 ns by the revision 2 field" in str(got.problems[0])


@pytest.mark.parametrize("value", [float("nan"), float("inf"), -1.0])
def test_a_damaged_revision_2_field_is_ignored_with_a_warning(exact, value):
    content = bytearray(exact.read_bytes())
    struct.pack_into(">d", content, 3272, value)
    exact.write_bytes(content)
    got = read_line(exact, ReadOptions(interval_unit="ps"))
    assert got.interval_ns == pytest.approx(0.195, rel=1e-15)
    assert got.problems[0].byte == 3272


def test_the_revision_2_field_is_exact(exact):
    got = read_line(exact)
    assert (got.interval_ns, got.interval_origin) == (0.1953125, "revision 2 field, µs")


@pytest.mark.parametrize("unit", ["ps", "ns", "us"])
def test_nothing_is_inferred_but_the_likely_unit_is_named(tmp_path, unit):
    """3 units, 3 numbers that only one unit makes believable."""
    interval = {"ps": 0.2, "ns": 2.0, "us": 2000.0}[unit]
    write_segy(
        tmp_path / "a.sgy", DATA[:, :200] if unit != "us" else DATA[:, :2], interval_ns=interval, interval_unit=unit
    )
    with pytest.raises(
        LineError, match=rf'likely unit: .*"{unit}".*; set sample_interval_ns or interval_unit'
    ) as caught:
        read_line(tmp_path / "a.sgy")
    (problem,) = caught.value.problems
    assert (problem.key, problem.byte) == ("interval_unit", 3216)


def test_a_file_without_interval_asks_for_it(line):
    content = bytearray(line.read_bytes())
    content[3216:3218] = bytes(2)
    for i in range(3):
        content[3600 + i * 640 + 116 : 3600 + i * 640 + 118] = bytes(2)
    line.write_bytes(content)
    with pytest.raises(LineError, match="gives no sample interval; set sample_interval_ns"):
        read_line(line)
    with pytest.raises(LineError, match="interval_unit is 'ps', but the file's interval field is empty"):
        read_line(line, ReadOptions(interval_unit="ps"))


def test_the_trace_headers_interval_stands_in(line):
    content = bytearray(line.read_bytes())
    content[3216:3218] = bytes(2)
    line.write_bytes(content)
    assert read_line(line, ReadOptions(interval_unit="ps")).interval_ns == pytest.approx(0.2, rel=1e-15)


def test_headers_that_disagree_are_reported(line):
    content = bytearray(line.read_bytes())
    content[3600 + 116 : 3600 + 118] = (250).to_bytes(2, "big")
    line.write_bytes(content)
    got = read_line(line, ReadOptions(interval_unit="ps"))
    assert got.interval_ns == pytest.approx(0.2, rel=1e-15)
    assert "interval field 200 in the file header, 250 in the first trace" in str(got.problems[0])


@pytest.mark.parametrize(
    ("options", "says"),
    [
        (
            ReadOptions(interval_unit="us"),
            "the window is 4e[+]07 ns: 200 samples of 200000 ns .*likely unit of 200: ps",
        ),
        (ReadOptions(interval_ns=200.0), "the window is 40000 ns.*given.*likely unit of 200: ps"),
        (ReadOptions(interval_ns=0.0002), "the window is 0.04 ns.*likely unit of 0.0002: us"),
        (ReadOptions(interval_ns=0.0249), "the window is 4.98 ns"),
        (ReadOptions(interval_ns=25.1), "the window is 5020 ns"),
    ],
)
def test_unbelievable_windows_are_refused_with_the_likely_unit(line, options, says):
    with pytest.raises(LineError, match=says):
        read_line(line, options)


@pytest.mark.parametrize("interval", [0.025, 25.0])
def test_the_bounds_themselves_are_believed(line, interval):
    assert read_line(line, ReadOptions(interval_ns=interval)).interval_ns == interval


@pytest.mark.parametrize(
    ("interval", "outcome"), [(0.3, None), (0.3125, None), (0.32, "warned"), (0.62, "warned"), (0.63, "refused")]
)
def test_samples_per_period_of_the_centre_frequency(line, interval, outcome):
    """400 MHz: a period is 2.5 ns, so 8 samples are 0.3125 ns and 4 are 0.625 ns (by hand)."""
    options = ReadOptions(interval_ns=interval, centre_frequency_ghz=0.4)
    if outcome == "refused":
        with pytest.raises(LineError, match=r"3.97 samples per period of the centre frequency"):
            read_line(line, options)
        return
    said = [str(p) for p in read_line(line, options).problems if "samples per period" in str(p)]
    assert len(said) == (outcome == "warned")


@pytest.mark.parametrize("value", [0.0, -0.1, np.nan, np.inf])
@pytest.mark.parametrize("key", ["interval_ns", "centre_frequency_ghz"])
def test_impossible_options_are_refused(line, key, value):
    with pytest.raises(LineError, match="a positive number"):
        read_line(line, ReadOptions(**{"interval_unit": "ps", key: value}))


def test_unknown_units_are_refused(line):
    with pytest.raises(LineError, match="interval_unit = 'ms'; ps, ns or us"):
        read_line(line, ReadOptions(interval_unit="ms"))
