"""Delimited text in the habits of spreadsheets; values written here by hand or by numpy.savetxt."""

from __future__ import annotations

import numpy as np
import pytest

from planum.errors import LineError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions

DATA = np.random.default_rng(10).integers(-4000, 4000, (4, 40)) / 8
OPTIONS = ReadOptions(interval_ns=0.2)


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize(
    ("separator", "decimal"), [(",", "."), (", ", "."), (";", "."), (";", ","), ("\t", ","), (" ", "."), ("   ", ",")]
)
def test_separators_and_decimal_signs(tmp_path, separator, decimal, end):
    rows = [separator.join(f"{v:.3f}".replace(".", decimal) for v in row) for row in DATA]
    (tmp_path / "a.csv").write_bytes(end.join(rows).encode())
    got = read_line(tmp_path / "a.csv", OPTIONS)
    np.testing.assert_array_equal(got.data, DATA)
    assert got.data.dtype == np.float32


@pytest.mark.parametrize("style", ["%.3f", "%.4e"])
def test_what_numpy_writes(tmp_path, style):
    """Reference: numpy.savetxt, with its comment header."""
    np.savetxt(tmp_path / "a.txt", DATA, fmt=style, header="line 3\nwest to east")
    got = read_line(tmp_path / "a.txt", OPTIONS)
    np.testing.assert_allclose(got.data, DATA, rtol=1e-4)  # 5 digits written
    assert got.header["text"] == ["# line 3", "# west to east"]


def test_rows_may_be_samples_and_the_interval_declared(tmp_path):
    with (tmp_path / "a.csv").open("w") as stream:
        stream.write("\ufeff# rows: samples\n#sample_interval_ns = 0.25\n\n")
        np.savetxt(stream, DATA.T, fmt="%.3f", delimiter=";")
    got = read_line(tmp_path / "a.csv")
    np.testing.assert_array_equal(got.data, DATA)
    assert (got.interval_ns, got.interval_origin) == (0.25, "comment in the file")
    assert read_line(tmp_path / "a.csv", OPTIONS).interval_origin == "given"


def test_a_separator_at_the_end_of_rows_is_no_value(tmp_path):
    (tmp_path / "a.csv").write_text("1;2;3;\n4;5;7;\n")
    got = read_line(tmp_path / "a.csv", ReadOptions(interval_ns=2.0))
    assert got.data.tolist() == [[1, 2, 3], [4, 5, 7]]


def test_latin_1_comments_do_not_stop_the_reader(tmp_path):
    (tmp_path / "a.csv").write_bytes(b"# H\xf6he\n1,2,3\n3,2,1\n")
    assert read_line(tmp_path / "a.csv", ReadOptions(interval_ns=2.0)).header["text"] == ["# Höhe"]


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "no numbers in the file"),
        ("# only words\n", "no numbers in the file"),
        ("1,2,3\n1,2\n", r"a.csv, line 2: 2 values; 3, as in line 1"),
        ("# x\n\n1,2,3\n1,zwei,3\n", r"line 4: 'zwei' is no number; put # before"),
        ("trace;1\n", "line 1: 'trace' is no number"),
        ("1;;3\n", "line 1: '' is no number"),
        ("1.234,5;2\n", "line 1: '1.234.5' is no number"),
        ("# rows: columns\n1,2\n", "rows: columns; traces or samples"),
        ("# sample_interval_ns: often\n1,2\n", "sample_interval_ns: often; a positive number"),
        ("# sample_interval_ns: -1\n1,2\n", "sample_interval_ns: -1; a positive number"),
    ],
)
def test_mistakes_are_named_with_their_line(tmp_path, text, says):
    (tmp_path / "a.csv").write_text(text)
    options = ReadOptions() if "interval" in text else ReadOptions(interval_ns=2.0)
    with pytest.raises(LineError, match=says):
        read_line(tmp_path / "a.csv", options)


def test_the_interval_has_to_be_known(tmp_path):
    (tmp_path / "a.csv").write_text("1,2,3\n")
    with pytest.raises(LineError, match="gives no sample interval"):
        read_line(tmp_path / "a.csv")


def test_text_too_long_to_be_a_line_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr("planum.lines.delimited._LARGEST", 10)
    (tmp_path / "a.csv").write_text("1,2,3,4,5,6\n")
    with pytest.raises(LineError, match="12 bytes of text"):
        read_line(tmp_path / "a.csv", OPTIONS)
