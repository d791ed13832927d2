"""SEG-Y headers in all the states files come in. Byte positions: SEG-Y rev 0, 1, 2.0, 2.1 (from memory, checked
against the field enumerations of segyio). Errors count bytes from 0, the standard from 1."""

from __future__ import annotations

import struct

import numpy as np
import pytest

from planum.errors import LineError
from planum.lines.reading import parts_in, read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy
from planum.records import FLAG_DEAD

PS = ReadOptions(interval_unit="ps")
DATA = np.random.default_rng(11).integers(-3000, 3000, (9, 80)).astype(np.int16)
SIZE = 240 + 160


def write(path, data=DATA, **settings):
    write_segy(path, data, **{"interval_ns": 0.2, **settings})
    return path


def patch(path, *changes):
    """Change fields: (1-based byte, struct code with order, value)."""
    content = bytearray(path.read_bytes())
    for at, code, value in changes:
        struct.pack_into(code, content, at - 1, value)
    path.write_bytes(content)
    return path


def texts(path, *blocks):
    """Put extended text headers behind the file header."""
    content = path.read_bytes()
    path.write_bytes(content[:3600] + b"".join(b.ljust(3200, b"\x40")[:3200] for b in blocks) + content[3600:])
    return path


def only(got, says):
    (problem,) = got.problems
    assert says in str(problem)
    return problem


@pytest.mark.parametrize("field", [0x0010, 0x0700, 0xFFFF, 0x0000, 0x0102])
def test_junk_in_the_revision_field_is_tolerated(tmp_path, field):
    got = read_line(patch(write(tmp_path / "a.sgy"), (3501, ">H", field)), PS)
    np.testing.assert_array_equal(got.data, DATA)
    assert got.header["revision"] == "0.0"
    assert got.header["revision_field"] == f"0x{field:04x}"


def test_little_endian_revision_written_as_one_number_is_understood(tmp_path):
    path = patch(write(tmp_path / "a.sgy", byte_order="<"), (3501, "<H", 0x0100))
    assert read_line(path, PS).header["revision"] == "1.0"


def test_byte_order_constant_beats_the_revision_field(tmp_path):
    path = patch(write(tmp_path / "a.sgy", revision=2, byte_order="<"), (3501, "<H", 0))
    got = read_line(path, ReadOptions())
    assert (got.header["revision"], got.header["byte_order"]) == ("2.0", "little")
    np.testing.assert_array_equal(got.data, DATA)


def test_pairwise_swapped_bytes_are_refused(tmp_path):
    path = patch(write(tmp_path / "a.sgy", revision=2), (3297, ">i", 0x02010403))
    with pytest.raises(LineError, match="byte 3296: bytes are swapped in pairs"):
        read_line(path, PS)


@pytest.mark.parametrize("n", [1, 3])
def test_declared_extended_texts_are_skipped(tmp_path, n):
    path = patch(texts(write(tmp_path / "a.sgy"), *[b"\xc1" * 100] * n), (3505, ">h", n))
    got = read_line(path, PS)
    np.testing.assert_array_equal(got.data, DATA)
    assert got.problems == ()


@pytest.mark.parametrize("encoding", ["cp037", "ascii"])
@pytest.mark.parametrize("declared", [0, 5, -7])
def test_wrongly_declared_extended_texts_are_found(tmp_path, declared, encoding):
    blocks = ["FIELD NOTES, LINE WEST OF THE HEDGE".ljust(3200).encode(encoding)] * 2
    path = patch(texts(write(tmp_path / "a.sgy"), *blocks), (3505, ">h", declared))
    got = read_line(path, PS)
    np.testing.assert_array_equal(got.data, DATA)
    assert only(got, f"2 extended text header(s) found, {declared} declared").byte == 3504


def test_declared_but_absent_extended_texts_are_noticed(tmp_path):
    """Rows long enough that a trace would fit where the texts should have ended."""
    data = np.tile(DATA, (8, 1))
    got = read_line(patch(write(tmp_path / "a.sgy", data), (3505, ">h", 1)), PS)
    np.testing.assert_array_equal(got.data, data)
    only(got, "0 extended text header(s) found, 1 declared")


@pytest.mark.parametrize("encoding", ["cp037", "ascii"])
def test_variable_extended_texts_end_at_their_stanza(tmp_path, encoding):
    blocks = [s.ljust(3200).encode(encoding) for s in ("((SEG: Layout ver 1.0))", "more", "((SEG: EndText))")]
    got = read_line(patch(texts(write(tmp_path / "a.sgy"), *blocks), (3505, ">h", -1)), PS)
    np.testing.assert_array_equal(got.data, DATA)
    assert got.problems == ()


def test_variable_extended_texts_without_stanza_are_still_found(tmp_path):
    path = patch(texts(write(tmp_path / "a.sgy"), "notes".ljust(3200).encode("cp037")), (3505, ">h", -1))
    got = read_line(path, PS)
    np.testing.assert_array_equal(got.data, DATA)
    assert any("end stanza is missing" in str(p) for p in got.problems)


@pytest.mark.parametrize("order", [">", "<"])
def test_revision_2_fields_are_used(tmp_path, order):
    """64-bit interval, first-trace offset past a gap of odd size, extended sample count."""
    path = write(tmp_path / "a.sgy", revision=2, interval_ns=0.123456789, byte_order=order)
    content = path.read_bytes()
    path.write_bytes(content[:3600] + bytes(1234) + content[3600:])
    patch(path, (3521, order + "Q", 3600 + 1234), (3221, order + "H", 0))
    got = read_line(path, ReadOptions())
    np.testing.assert_array_equal(got.data, DATA)
    # a float64 in µs and back: rounding of two multiplications
    assert got.interval_ns == pytest.approx(0.123456789, rel=1e-15)
    assert got.interval_origin == "revision 2 field, µs"


def test_more_samples_than_16_bits_hold(tmp_path):
    data = np.random.default_rng(1).integers(-99, 99, (2, 70_000)).astype(np.int16)
    got = read_line(write(tmp_path / "a.sgy", data, revision=2, interval_ns=0.05), ReadOptions())
    np.testing.assert_array_equal(got.data, data)


@pytest.mark.parametrize(("minor", "code"), [(0, ">i"), (1, ">h")])
def test_extra_trace_headers_are_skipped(tmp_path, minor, code):
    """int32 at 3507 in revision 2.0; int16 in 2.1, where the survey type follows."""
    path = write(tmp_path / "a.sgy", revision=2)
    content = path.read_bytes()
    traces = [content[i : i + SIZE] for i in range(3600, len(content), SIZE)]
    path.write_bytes(content[:3600] + b"".join(t[:240] + b"\x07" * 480 + t[240:] for t in traces))
    changes = [(3502, ">B", minor), (3507, code, 2)] + ([(3509, ">h", 2)] if minor else [])
    got = read_line(patch(path, *changes), ReadOptions())
    np.testing.assert_array_equal(got.data, DATA)
    assert got.header["extra_trace_headers"] == 2


@pytest.mark.parametrize("stated", [2, -1])
@pytest.mark.parametrize("declared", [True, False])
def test_data_trailers_are_no_traces(tmp_path, stated, declared):
    path = write(tmp_path / "a.sgy", revision=2)
    trailer = "((SEG: Notes ver 1.0))".ljust(6400).encode("cp037")
    path.write_bytes(path.read_bytes() + trailer)
    got = read_line(patch(path, (3529, ">i", stated), (3513, ">Q", 9 if declared else 0)), ReadOptions())
    np.testing.assert_array_equal(got.data, DATA)
    assert got.problems == ()


@pytest.mark.parametrize("cut", [1, 160, 399, 400, 401])
def test_a_cut_file_gives_its_whole_traces(tmp_path, cut):
    path = write(tmp_path / "a.sgy", revision=2)
    path.write_bytes(path.read_bytes()[:-cut])
    got = read_line(path, ReadOptions())
    whole = 9 - -(-cut // SIZE)
    np.testing.assert_array_equal(got.data, DATA[:whole])
    problem = only(
        got, f"{9 - whole} of 9 traces are missing; {whole} whole traces kept, {-cut % SIZE} bytes left over"
    )
    assert problem.severity == "warning"
    assert problem.byte == 3600 + whole * SIZE


def test_a_cut_file_without_declared_traces_still_says_so(tmp_path):
    path = write(tmp_path / "a.sgy")
    path.write_bytes(path.read_bytes()[:-100])
    got = read_line(path, PS)
    np.testing.assert_array_equal(got.data, DATA[:-1])
    only(got, "its last trace is cut; 8 whole traces kept, 300 bytes left over")


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ([(3225, ">h", 77)], "byte 3224: unknown sample format code 77"),
        ([(3225, ">h", 4)], r"byte 3224: sample format code 4 \(4-byte fixed point with gain\)"),
        ([(3221, ">H", 0)], "byte 3220: 0 samples per trace"),
        ([(3221, ">H", 60000)], "byte 3220: a trace of 60000 samples takes 120240 bytes, 3600 follow"),
        # traces of 400 bytes, 8 to a text header: the ninth must not be taken for the first behind a text
        ([(3600 + 115, ">H", 79)], "byte 3714: a trace states 79 samples, the file 80"),
        ([(3221, ">H", 81)], "byte 3714: a trace states 80 samples, the file 81"),
        ([(3600 + 3 * SIZE + 115, ">H", 79)], f"byte {3600 + 3 * SIZE + 114}: a trace states 79 samples, the file 80"),
    ],
)
def test_damage_is_named_with_its_byte(tmp_path, changes, says):
    with pytest.raises(LineError, match=says):
        read_line(patch(write(tmp_path / "a.sgy"), *changes), PS)


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ([(3269, ">i", -5)], "byte 3268: -5 samples"),
        ([(3269, ">i", 2**31 - 1)], "byte 3220: a trace of 2147483647 samples"),
        ([(3507, ">i", -1)], "byte 3506: -1 extra trace headers"),
        ([(3507, ">i", 10**9)], "byte 3506: 1000000000 extra trace headers"),
        ([(3521, ">Q", 2**63)], "byte 3520: first trace stated at byte 9223372036854775808"),
        ([(3521, ">Q", 100)], "byte 3520: first trace stated at byte 100"),
    ],
)
def test_impossible_revision_2_sizes_are_refused_before_memory_is_asked_for(tmp_path, changes, says):
    with pytest.raises(LineError, match=says):
        read_line(patch(write(tmp_path / "a.sgy", revision=2), *changes), ReadOptions())


@pytest.mark.parametrize("length", [0, 1, 3599])
def test_a_file_shorter_than_its_headers_is_refused(tmp_path, length):
    path = write(tmp_path / "a.sgy")
    path.write_bytes(path.read_bytes()[:length])
    with pytest.raises(LineError, match=f"byte {length}: {length} bytes, shorter than the 3600"):
        read_line(path, PS)


def test_a_file_of_headers_alone_is_refused(tmp_path):
    path = write(tmp_path / "a.sgy")
    path.write_bytes(path.read_bytes()[: 3600 + 399])
    with pytest.raises(LineError, match="399 follow the file headers"):
        read_line(path, PS)


@pytest.mark.parametrize("order", [">", "<"])
def test_unsigned_samples_in_a_signed_file_are_shifted_and_reported(tmp_path, order):
    t = np.arange(300)
    true = np.rint(12000 * np.exp(-t / 50) * np.sin(t / 4) + np.random.default_rng(2).normal(0, 40, (20, 300))).astype(
        np.int32
    )
    wrapped = (true + 32768).astype(np.uint16).view(np.int16)
    got = read_line(write(tmp_path / "a.sgy", wrapped, byte_order=order), PS)
    np.testing.assert_array_equal(got.data, true)
    assert got.data.dtype == np.int16
    assert got.header["centred_on"] == 32768
    assert only(got, "centred on 32768").byte == 3224


def test_traces_marked_dead_constant_or_not_finite_are_flagged(tmp_path):
    data = DATA.astype(np.float32)
    data[4] = 7.0
    path = write(tmp_path / "a.sgy", data, sample_format=5)
    patch(path, (3600 + 2 * 560 + 29, ">h", 2), (3600 + 6 * 560 + 241 + 40, ">f", np.nan))
    got = read_line(path, PS)
    assert np.flatnonzero(got.flag & FLAG_DEAD).tolist() == [2, 4, 6]
    assert not got.data[6].any()
    np.testing.assert_array_equal(got.data[2], DATA[2])
    only(got, "1 trace(s) hold values that are not finite, first in trace 6")


def test_hexadecimal_floats_beyond_four_bytes_make_a_dead_trace(tmp_path):
    path = write(tmp_path / "a.sgy", DATA, sample_format=1)
    got = read_line(patch(path, (3841, ">I", 0x7FFFFFFF)), PS)
    assert np.flatnonzero(got.flag & FLAG_DEAD).tolist() == [0]


def _three(path):
    """Three lines in one file: records 7, 9, 8; trace counters start again."""
    write(path)
    for i in range(9):
        at = 3600 + i * SIZE
        patch(path, (at + 1, ">i", i % 3 + 1), (at + 5, ">i", i + 1), (at + 9, ">i", (7, 9, 8)[i // 3]))
    return path


@pytest.mark.parametrize("split", ["counter", "fieldrecord"])
def test_several_lines_in_one_file_are_told_apart(tmp_path, split):
    path = _three(tmp_path / "a.sgy")
    assert parts_in(path, ReadOptions(split=split)) == 3
    for part in range(3):
        got = read_line(path, ReadOptions(interval_unit="ps", split=split, part=part))
        np.testing.assert_array_equal(got.data, DATA[3 * part : 3 * part + 3])
        assert got.header["first_trace_in_file"] == 3 * part


def test_interleaved_lines_are_told_apart_by_their_field(tmp_path):
    path = write(tmp_path / "a.sgy")
    for i in range(9):
        patch(path, (3600 + i * SIZE + 13, ">i", i % 2 + 1))
    got = read_line(path, ReadOptions(interval_unit="ps", split="trace_number", part=1))
    np.testing.assert_array_equal(got.data, DATA[1::2])


def test_the_part_has_to_be_named_and_to_exist(tmp_path):
    path = _three(tmp_path / "a.sgy")
    with pytest.raises(LineError, match=r"holds 3 line\(s\) by 'fieldrecord', no part is named; parts 0 to 2"):
        read_line(path, ReadOptions(interval_unit="ps", split="fieldrecord"))
    with pytest.raises(LineError, match="part 3 is asked for; parts 0 to 2"):
        read_line(path, ReadOptions(interval_unit="ps", part=3))
    with pytest.raises(LineError, match=r"allowed: fieldrecord, .*counter"):
        read_line(path, ReadOptions(interval_unit="ps", split="record"))


def test_a_counter_that_starts_again_is_reported_when_nobody_splits(tmp_path):
    got = read_line(_three(tmp_path / "a.sgy"), PS)
    np.testing.assert_array_equal(got.data, DATA)
    only(got, "it may hold several lines")


def test_long_files_are_read_in_blocks(tmp_path, monkeypatch):
    """One trace per block gives the same as one block."""
    path = write(tmp_path / "a.sgy")
    monkeypatch.setattr("planum.lines.segy._BLOCK", 1)
    np.testing.assert_array_equal(read_line(path, PS).data, DATA)


def test_a_file_that_shrinks_while_it_is_read_is_an_error(tmp_path, monkeypatch):
    import planum.lines.segy as module

    path = write(tmp_path / "a.sgy")
    layout = module.find_layout(path)
    monkeypatch.setattr(module, "find_layout", lambda p: layout)
    path.write_bytes(path.read_bytes()[:-SIZE])
    with pytest.raises(LineError, match="became shorter while it was read"):
        read_line(path, PS)
