"""Properties of SEG-Y over many files: round trips, and damage that never raises anything but LineError."""

from __future__ import annotations

import contextlib
import math

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from planum.errors import LineError
from planum.lines.reading import line_readers
from planum.lines.recording import ReadOptions
from planum.lines.segy import READER
from planum.lines.segy_write import write_segy

KINDS = {1: "f4", 2: "i4", 3: "i2", 5: "f4", 6: "f8", 8: "i1", 10: "u4", 11: "u2", 16: "u1"}
quiet = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None, max_examples=60)


@st.composite
def lines(draw):
    """A format, and a line it holds exactly: integers to half their range (beyond it wraps are looked for)."""
    code = draw(st.sampled_from(sorted(KINDS)))
    kind = np.dtype(KINDS[code])
    shape = (draw(st.integers(1, 6)), draw(st.integers(1, 40)))
    if kind.kind == "f":
        # 20 bits are exact in a hexadecimal float, whose 24 may begin with three zeros
        values = st.integers(-(2**20), 2**20).map(lambda i: i / 16)
    elif kind.kind == "u":
        values = st.integers(0, np.iinfo(kind).max)
    else:
        half = np.iinfo(kind).max // 2
        values = st.integers(-half, half)
    return code, draw(hnp.arrays(kind, shape, elements=values))


@quiet
@given(
    line=lines(),
    order=st.sampled_from("<>"),
    old=st.booleans(),
    picoseconds=st.integers(1, 32767),
    scalar=st.sampled_from([-1000, -100, -10, 1]),
    start=st.tuples(st.integers(-2000, 2000), st.integers(-2000, 2000)),
)
def test_what_is_written_is_read(tmp_path, line, order, old, picoseconds, scalar, start):
    code, data = line
    path = tmp_path / "a.sgy"
    revision = 2 if code in (6, 10, 11, 16) or not old else 1
    x = start[0] + np.arange(len(data), dtype=float)
    y = start[1] - np.arange(len(data), dtype=float)
    write_segy(
        path,
        data,
        interval_ns=picoseconds / 1000,
        sample_format=code,
        revision=revision,
        byte_order=order,
        x=x,
        y=y,
        coordinate_scalar=scalar,
    )
    got = READER.read(path, ReadOptions(interval_unit="ps", header_positions=True))
    np.testing.assert_array_equal(got.data.astype(np.float64) + got.header["centred_on"], data)
    assert got.data.dtype.isnative
    assert got.data.dtype.kind in "if"
    assert math.isclose(got.interval_ns, picoseconds / 1000, rel_tol=1e-15)
    if x.any() or y.any():  # a line that stands at the origin cannot be told from empty headers
        np.testing.assert_allclose(got.x, x, rtol=1e-12)
        np.testing.assert_allclose(got.y, y, rtol=1e-12, atol=1e-12)


@pytest.fixture(scope="module")
def originals():
    """Bytes of small files in several revisions, formats and orders, one with extended texts."""
    import tempfile
    from pathlib import Path

    rng = np.random.default_rng(13)
    files = []
    with tempfile.TemporaryDirectory() as folder:
        for revision, code, order in [(0, 1, ">"), (1, 3, ">"), (1, 5, "<"), (2, 6, "<"), (2, 11, ">")]:
            path = Path(folder) / "a.sgy"
            data = rng.integers(0, 200, (4, 25))
            write_segy(path, data, interval_ns=0.4, sample_format=code, revision=revision, byte_order=order)
            files.append(path.read_bytes())
    texts = bytearray(files[1])
    texts[3504:3506] = (1).to_bytes(2, "big")
    files.append(bytes(texts[:3600]) + "NOTES".ljust(3200).encode("cp037") + bytes(texts[3600:]))
    return files


OPTIONS = [
    ReadOptions(),
    ReadOptions(interval_unit="ps", header_positions=True),
    ReadOptions(interval_ns=0.4, split="fieldrecord", part=0),
    ReadOptions(interval_ns=0.4, part=1),
]


def _only_line_errors(path, options):
    """The reader itself, without the safety net of read_line; and read_line's choice of it."""
    try:
        got = READER.read(path, options)
    except LineError:
        return
    size = path.stat().st_size
    assert got.data.nbytes <= size
    assert got.flag.shape == got.data.shape[:1]
    with contextlib.suppress(LineError):
        READER.parts(path, options)


@settings(quiet, max_examples=200)
@given(data=st.data())
def test_flipped_header_bytes_raise_nothing_but_line_errors(tmp_path, originals, data):
    content = bytearray(data.draw(st.sampled_from(originals)))
    # the binary file header and the first trace header, where all sizes are; sometimes anywhere
    places = st.one_of(st.integers(3200, 3839), st.integers(3500, 3540), st.integers(0, len(content) - 1))
    for at in data.draw(st.lists(places, min_size=1, max_size=6)):
        content[at] = data.draw(st.integers(0, 255))
    path = tmp_path / "a.sgy"
    path.write_bytes(content)
    _only_line_errors(path, data.draw(st.sampled_from(OPTIONS)))


@settings(quiet, max_examples=150)
@given(data=st.data())
def test_files_cut_anywhere_raise_nothing_but_line_errors(tmp_path, originals, data):
    content = data.draw(st.sampled_from(originals))
    path = tmp_path / "a.sgy"
    path.write_bytes(content[: data.draw(st.integers(0, len(content)))])
    _only_line_errors(path, data.draw(st.sampled_from(OPTIONS)))


@settings(quiet, max_examples=60)
@given(content=st.binary(max_size=64), at=st.integers(3200, 3590))
def test_random_words_in_the_file_header_raise_nothing_but_line_errors(tmp_path, originals, content, at):
    for original in originals:
        path = tmp_path / "a.sgy"
        path.write_bytes((original[:at] + content + original[at + len(content) :])[: len(original)])
        _only_line_errors(path, OPTIONS[1])


@settings(quiet, max_examples=25)
@given(content=st.binary(max_size=300))
def test_random_bytes_raise_nothing_but_line_errors_in_any_reader(tmp_path, content):
    for reader in line_readers().values():
        for start in (b"", b"CDF\x01", b"CDF\x02", b"\x89HDF\r\n\x1a\n", b"# 1\n"):
            path = tmp_path / "a.sgy"
            path.write_bytes(start + content)
            reader.claims(path, content)
            try:
                reader.read(path, ReadOptions(interval_ns=0.4))
            except LineError:
                continue
