"""SEG-Y against two independent implementations (segyio, ObsPy) and ObsPy's packaged files with their arrays."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import pytest
import segyio

from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # ObsPy's own deprecations
    from obspy import Stream, Trace
    from obspy.io.segy import segy as obspy_segy

FORMATS = {1: "f4", 2: "i4", 3: "i2", 5: "f4", 6: "f8", 8: "i1", 10: "u4", 11: "u2", 16: "u1"}
UNSIGNED = {10: 2**31, 11: 2**15, 16: 2**7}
OBSPY_HAS = (1, 2, 3, 5)  # its functions for 8 raise NotImplementedError
PACKAGED = Path(obspy_segy.__file__).parent / "tests" / "data"


def line(code: int) -> np.ndarray:
    """A line that format ``code`` holds exactly: (trace, sample)."""
    rng = np.random.default_rng(code)
    kind = np.dtype(FORMATS[code])
    if kind.kind == "f":
        # multiples of 1/8 up to 4000 need 15 bits: exact in every float format
        return (rng.integers(-32000, 32000, (7, 60)) / 8).astype(kind)
    half = np.iinfo(kind).max // 2
    around = UNSIGNED.get(code, 0)
    return (around + rng.integers(-half // 2, half // 2, (7, 60))).astype(kind)


def revision(code: int) -> int:
    return 2 if code in (6, 10, 11, 16) else 1


@pytest.mark.parametrize("order", ["big", "little"])
@pytest.mark.parametrize("code", FORMATS)
def test_segyio_reads_what_we_write(tmp_path, code, order):
    """Reference: segyio."""
    data = line(code)
    path = tmp_path / "a.sgy"
    x, y = 432100.25 + 0.05 * np.arange(7), 5401234.5 - 0.1 * np.arange(7)
    write_segy(
        path,
        data,
        interval_ns=0.15,
        sample_format=code,
        revision=revision(code),
        text=["SITE ONE"],
        x=x,
        y=y,
        field_record=12,
        byte_order=">" if order == "big" else "<",
    )
    with segyio.open(path, strict=False, ignore_geometry=True, endian=order) as file:
        np.testing.assert_array_equal(file.trace.raw[:], data)
        assert file.bin[segyio.BinField.Interval] == 150
        assert file.bin[segyio.BinField.Samples] == 60
        assert file.bin[segyio.BinField.Format] == code
        assert file.bin[segyio.BinField.MeasurementSystem] == 1
        heads = {f: file.attributes(f)[:] for f in (1, 5, 9, 29, 71, 73, 77, 89, 115, 117, 181, 185)}
        text = segyio.tools.wrap(file.text[0].decode("ascii"))
    assert text.splitlines()[0].rstrip() == "C 1 SITE ONE"
    assert "0.15 NS" in text.splitlines()[37]
    np.testing.assert_array_equal(heads[1], np.arange(1, 8))
    np.testing.assert_array_equal(heads[5], np.arange(1, 8))
    for at, value in {9: 12, 29: 1, 71: -100, 89: 1, 115: 60, 117: 150}.items():
        assert set(heads[at]) == {value}, at
    # half a centimetre is the rounding of scalar -100
    for at, metres in {73: x, 77: y, 181: x, 185: y}.items():
        np.testing.assert_allclose(heads[at] / 100, metres, atol=0.005 + 1e-9)


@pytest.mark.parametrize("order", [">", "<"])
@pytest.mark.parametrize("code", OBSPY_HAS)
def test_obspy_reads_what_we_write(tmp_path, code, order):
    """Reference: ObsPy."""
    data = line(code)
    path = tmp_path / "a.sgy"
    write_segy(path, data, interval_ns=0.15, sample_format=code, byte_order=order)
    with path.open("rb") as stream:
        file = obspy_segy.SEGYFile(stream)
        assert file.endian == order
        assert file.textual_header_encoding == "EBCDIC"
        np.testing.assert_array_equal(np.stack([trace.data for trace in file.traces]), data)
    assert file.binary_file_header.sample_interval_in_microseconds == 150
    assert file.traces[0].header.number_of_samples_in_this_trace == 60
    assert file.traces[6].header.trace_sequence_number_within_line == 7


@pytest.mark.parametrize("order", [">", "<"])
@pytest.mark.parametrize("code", OBSPY_HAS)
def test_we_read_what_obspy_writes(tmp_path, code, order):
    """Reference: ObsPy's own stream writer, ASCII text header."""
    data = line(code)
    path = tmp_path / "a.sgy"
    stream = Stream([Trace(trace.copy(), {"delta": 150e-6}) for trace in data])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # it says that it fills the headers by itself
        stream.write(str(path), format="SEGY", data_encoding=code, byteorder=order)
    got = read_line(path, ReadOptions(interval_unit="ps"))
    np.testing.assert_array_equal(got.data, data)
    assert got.interval_ns == pytest.approx(0.15, rel=1e-12)
    assert got.header["text_encoding"] == "ascii"
    assert got.header["byte_order"] == ("big" if order == ">" else "little")


@pytest.mark.parametrize("filled", [True, False], ids=["headers filled", "headers left at 0"])
@pytest.mark.parametrize("order", ["big", "little"])
@pytest.mark.parametrize("code", FORMATS)
def test_we_read_what_segyio_writes(tmp_path, code, order, filled):
    """Reference: segyio; it leaves the trace headers' sample count and interval at 0 unless told."""
    data = line(code)
    path = tmp_path / "a.sgy"
    spec = segyio.spec()
    spec.format, spec.samples, spec.tracecount, spec.endian = code, np.arange(60.0), 7, order
    with segyio.create(path, spec) as file:
        for i in range(7):
            file.trace[i] = data[i].copy()  # segyio changes the caller's array when it writes format 1
            if filled:
                file.header[i] = {115: 60, 117: 100, 1: i + 1}
        file.bin[segyio.BinField.Interval] = 100
    got = read_line(path, ReadOptions(interval_unit="ps"))
    np.testing.assert_array_equal(got.data.astype(np.float64) + UNSIGNED.get(code, 0), data)
    assert got.interval_ns == pytest.approx(0.1, rel=1e-12)
    assert got.header["byte_order"] == order
    assert got.problems == ()


def test_we_read_segyios_declared_extended_text(tmp_path):
    """Reference: segyio, two extended text headers."""
    data = line(3)
    path = tmp_path / "a.sgy"
    spec = segyio.spec()
    spec.format, spec.samples, spec.tracecount, spec.ext_headers = 3, np.arange(60.0), 7, 2
    with segyio.create(path, spec) as file:
        file.text[1] = b"first".ljust(3200)
        file.text[2] = b"second".ljust(3200)
        for i in range(7):
            file.header[i] = {115: 60, 117: 100}
            file.trace[i] = data[i]
        file.bin.update({segyio.BinField.Interval: 100, segyio.BinField.SEGYRevision: 1})
    got = read_line(path, ReadOptions(interval_unit="ps"))
    np.testing.assert_array_equal(got.data, data)
    assert got.header["first_trace_byte"] == 3600 + 6400


@pytest.mark.parametrize("array", sorted(PACKAGED.glob("*.npy")), ids=lambda p: p.stem)
def test_obspys_packaged_files_match_their_arrays(array):
    """Reference: the arrays beside ObsPy's test files; seismic files, so the interval is set to a radar's."""
    got = read_line(array.with_suffix(""), ReadOptions(interval_ns=0.25, reader="segy"))
    expected = np.load(array)
    assert expected.shape[0] == 1
    np.testing.assert_array_equal(got.data, expected)


def test_obspys_packaged_files_are_all_there():
    """A parametrized list that came back empty would pass in silence; seven files are known (ObsPy 1.5)."""
    assert len(list(PACKAGED.glob("*.npy"))) >= 7


@pytest.mark.parametrize(
    ("name", "order", "encoding", "code"),
    [
        ("00001034.sgy_first_trace", "little", "ascii", 1),
        ("example.y_first_trace", "big", "ebcdic", 3),
        ("ld0042_file_00018.sgy_first_trace", "big", "ebcdic", 1),
        ("planes.segy_first_trace", "little", "ebcdic", 1),
        ("one_trace_year_11.sgy", "big", None, 2),
    ],
)
def test_obspys_packaged_files_are_recognised_without_a_suffix(name, order, encoding, code):
    """Byte orders, encodings and formats as ObsPy reports them; the last has an empty text and revision 0x0010."""
    got = read_line(PACKAGED / name, ReadOptions(interval_ns=0.25))
    assert got.header["byte_order"] == order
    assert got.header["sample_format"] == code
    assert encoding is None or got.header["text_encoding"] == encoding
    assert got.header["revision"] == "0.0"
