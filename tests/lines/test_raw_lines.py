"""Raw binary in declared layouts."""

from __future__ import annotations

import numpy as np
import pytest

from planum.errors import LineError
from planum.lines.raw import preview
from planum.lines.reading import read_line
from planum.lines.recording import RawLayout, ReadOptions

DATA = np.random.default_rng(9).integers(-100, 100, (6, 70))


def write(path, kind, *, head=0, before=0):
    """The layout written byte by byte, without the reader's own record type."""
    path.write_bytes(b"\xee" * head + b"".join(b"\xdd" * before + row.astype(kind).tobytes() for row in DATA))
    return path


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("kind", ["int8", "int16", "int32", "uint8", "uint16", "uint32", "float32", "float64"])
def test_every_sample_type_in_both_orders(tmp_path, kind, order):
    half = 2 ** (np.dtype(kind).itemsize * 8 - 1) if kind.startswith("u") else 0
    path = tmp_path / "a.raw"
    path.write_bytes((DATA + half).astype(np.dtype(kind).newbyteorder(order)).tobytes())
    got = read_line(path, ReadOptions(interval_ns=0.2, layout=RawLayout(70, sample_type=kind, byte_order=order)))
    np.testing.assert_array_equal(got.data, DATA)
    assert got.data.dtype.isnative
    assert got.header["centred_on"] == half


@pytest.mark.parametrize(("head", "before"), [(0, 0), (1024, 0), (0, 4), (37, 11)])
def test_headers_are_skipped(tmp_path, head, before, monkeypatch):
    path = write(tmp_path / "a.raw", "<i2", head=head, before=before)
    layout = RawLayout(70, header_bytes=head, bytes_before_trace=before)
    for block in (1 << 25, 1):
        monkeypatch.setattr("planum.lines.raw._BLOCK", block)
        np.testing.assert_array_equal(read_line(path, ReadOptions(interval_ns=0.2, layout=layout)).data, DATA)


def test_bytes_left_over_are_reported(tmp_path):
    path = write(tmp_path / "a.raw", "<i2")
    path.write_bytes(path.read_bytes()[:-3])
    got = read_line(path, ReadOptions(interval_ns=0.2, layout=RawLayout(70)))
    np.testing.assert_array_equal(got.data, DATA[:5])
    (problem,) = got.problems
    assert "5 whole traces read, 137 bytes left over" in str(problem)
    assert problem.byte == 700


def test_unsigned_samples_declared_as_signed_are_shifted_and_reported(tmp_path):
    path = tmp_path / "a.raw"
    (DATA + 32768).astype("<u2").tofile(path)
    got = read_line(path, ReadOptions(interval_ns=0.2, layout=RawLayout(70)))
    np.testing.assert_array_equal(got.data, DATA)
    assert 'declare sample_type = "uint16"' in str(got.problems[0])


@pytest.mark.parametrize(
    ("layout", "says"),
    [
        (RawLayout(70, sample_type="int61"), "sample type 'int61'; did you mean 'int16'"),
        (RawLayout(70, byte_order="big"), "byte order 'big'; '<' or '>'"),
        (RawLayout(0), "at least 1 sample"),
        (RawLayout(70, header_bytes=-1), "no negative bytes"),
        (RawLayout(10**12), "one trace takes 2000000000000 bytes, the file has 840"),
        (RawLayout(70, header_bytes=800), "one trace takes 140 bytes, the file has 40"),
    ],
)
def test_impossible_layouts_are_refused(tmp_path, layout, says):
    path = write(tmp_path / "a.raw", "<i2")
    with pytest.raises(LineError, match=says):
        read_line(path, ReadOptions(interval_ns=0.2, layout=layout))
    with pytest.raises(LineError, match=says):
        preview(path, layout)


def test_without_layout_or_interval_the_error_says_what_to_declare(tmp_path):
    path = write(tmp_path / "a.raw", "<i2")
    with pytest.raises(LineError, match="without a declared layout; declare samples per trace"):
        read_line(path, ReadOptions(interval_ns=0.2, reader="raw"))
    with pytest.raises(LineError, match="gives no sample interval; set sample_interval_ns"):
        read_line(path, ReadOptions(layout=RawLayout(70)))


def test_the_preview_shows_first_values_and_what_is_left_over(tmp_path):
    path = write(tmp_path / "a.raw", ">i2", head=10, before=2)
    got = preview(path, RawLayout(70, header_bytes=10, bytes_before_trace=2, byte_order=">"))
    np.testing.assert_array_equal(got.values, DATA[:4, :12])
    assert (got.n_traces, got.left_over) == (6, 0)
    assert preview(path, RawLayout(70, header_bytes=10, byte_order=">")).left_over == 12
    with pytest.raises(LineError, match=r"b.raw: cannot be read: No such file"):
        preview(tmp_path / "b.raw", RawLayout(70))
