"""Traces at their places: register order, corrections, gaps, faults."""

from __future__ import annotations

import numpy as np
import pytest

from planum import schema
from planum.cube.assemble import Piece, assemble, assemble_row, trace_flags, trace_positions
from planum.errors import LineError
from planum.records import FLAG_CLIPPED, FLAG_DEAD, FLAG_FILLED, FLAG_NONE, CubeGeometry, LineEntry

STEP = 0.1


def geometry(**more):
    base = {
        "direction": "x", "line0_m": 0.0, "line_step_m": 0.5, "n_lines": 3, "along0_m": 0.0, "along_step_m": 0.05,
        "n_along": 101, "time0_ns": -1.0, "time_step_ns": STEP, "n_time": 120,
    }  # fmt: skip
    return CubeGeometry(**{**base, **more})


def entry(start=(0.0, 0.0), end=(5.0, 0.0), *, first=0, last=100, row=0, zero=2.0, **more):
    return LineEntry(
        key="k", set="A/x", grid="A", line="17", row=row, file="l.sgy", first_trace=first, last_trace=last,
        start=start, end=end, **{"zero_ns": ((0, zero),), **more},
    )  # fmt: skip


def pulse(t, f=0.4):
    a = (np.pi * f * t) ** 2
    return (1 - 2 * a) * np.exp(-a)


def section(n=101, samples=200, *, zero=2.0, event=5.0):
    """Trace i carries a pulse of height 1 + i at ``event`` ns after time zero."""
    t = np.arange(samples) * STEP - zero
    return ((1.0 + np.arange(n))[:, None] * pulse(t - event)).astype(np.float32)


def heights(row, g, event=5.0):
    return row.amplitude[:, np.argmin(np.abs(g.times() - event))]


def test_first_and_last_trace_lie_on_start_and_end():
    g = geometry()
    row = assemble_row([(section(), STEP, entry())], g)
    # Whole-sample shift and places on traces: copied, so float32 equality.
    assert heights(row, g) == pytest.approx(1.0 + np.arange(101), rel=1e-6)
    assert not row.flag.any()
    assert row.x == pytest.approx(g.along())
    assert not row.y.any()


def test_a_line_walked_back_is_the_same_section_turned_round():
    g = geometry()
    there = assemble_row([(section(), STEP, entry())], g)
    back = assemble_row([(section()[::-1], STEP, entry((5.0, 0.0), (0.0, 0.0)))], g)
    assert np.array_equal(there.amplitude, back.amplitude)


def test_reverse_exchanges_start_and_end():
    g = geometry()
    turned = assemble_row([(section(), STEP, entry(reverse=True))], g)
    assert heights(turned, g) == pytest.approx(101.0 - np.arange(101), rel=1e-6)


def test_shift_and_scale_move_traces():
    x, y = trace_positions(entry((1.0, 2.0), (3.0, 2.0), last=2, along_shift_m=0.1, along_scale=1.5))
    assert x == pytest.approx([1.1, 2.6, 4.1])
    assert y == pytest.approx([2.0, 2.0, 2.0])
    x, y = trace_positions(entry((1.0, 4.0), (1.0, 2.0), last=2, along_shift_m=0.1))
    assert (list(x), y) == ([1.0] * 3, pytest.approx([4.1, 3.1, 2.1]))


def test_a_shifted_line_reads_zero_where_it_is_not():
    g = geometry()
    row = assemble_row([(section(), STEP, entry(along_shift_m=0.5))], g)
    assert heights(row, g)[10:] == pytest.approx(1.0 + np.arange(91), rel=1e-6)
    assert np.all(row.flag[:10] == FLAG_NONE)
    assert not row.amplitude[:10].any()


def test_time_zero_moves_to_zero_within_a_thousandth():
    """A third of a sample off, against the closed-form wavelet; 1e-3 is the promise."""
    g = geometry()
    row = assemble_row([(section(zero=2.033), STEP, entry(zero=2.033))], g)
    expected = (1.0 + np.arange(101))[:, None] * pulse(g.times() - 5.0)
    assert np.abs(row.amplitude - expected).max() < 1e-3 * 101


def test_drifting_time_zero_is_followed_between_its_knots():
    g = geometry()
    zero = np.interp(np.arange(101), [10, 80], [2.0, 3.4])
    t = np.arange(200)[None] * STEP - zero[:, None]
    row = assemble_row([(pulse(t - 5.0).astype(np.float32), STEP, entry(zero_ns=((10, 2.0), (80, 3.4))))], g)
    assert np.abs(row.amplitude - pulse(g.times() - 5.0)).max() < 1e-3


def test_another_time_step_keeps_the_pulse():
    g = geometry(time_step_ns=0.16, n_time=70)
    row = assemble_row([(section(), STEP, entry())], g)
    expected = (1.0 + np.arange(101))[:, None] * pulse(g.times() - 5.0)
    # The windowed sinc's own error, 1e-3.
    assert np.abs(row.amplitude - expected).max() < 1.5e-3 * 101


def test_only_the_traces_of_the_row_are_used_and_gain_multiplies():
    g = geometry()
    row = assemble_row([(section(), STEP, entry((1.0, 0), (2.0, 0), first=20, last=40, gain=2.0))], g)
    assert heights(row, g)[20:41] == pytest.approx(2.0 * (21.0 + np.arange(21)), rel=1e-6)
    assert np.all(row.flag[:20] == FLAG_NONE)
    assert np.all(row.flag[41:] == FLAG_NONE)


def test_offset_is_kept():
    g = geometry(n_time=60)
    row = assemble_row([(section() + 500.0, STEP, entry(zero=2.04))], g)
    assert row.amplitude[:, 0] == pytest.approx(np.full(101, 500.0), abs=0.1)


def test_a_coarser_axis_does_not_alias():
    """A pattern of two traces per cycle vanishes on an axis four times coarser instead of turning into a slow one."""
    g = geometry(along_step_m=0.2, n_along=26)
    data = section(n=101)
    data /= (1.0 + np.arange(101))[:, None]
    data[1::2] *= -1
    row = assemble_row([(data, STEP, entry())], g)
    assert np.abs(heights(row, g)).max() < 2e-3


def test_a_finer_axis_interpolates_between_traces():
    g = geometry(along_step_m=0.02, n_along=251)
    data = section() / (1.0 + np.arange(101))[:, None] * np.sin(2 * np.pi * np.arange(101) * 0.05 / 0.8)[:, None]
    row = assemble_row([(data.astype(np.float32), STEP, entry())], g)
    expected = np.sin(2 * np.pi * g.along() / 0.8)
    assert np.abs(heights(row, g) - expected)[20:-20].max() < 2e-3


def test_pieces_round_an_obstacle_join_and_leave_the_gap():
    g = geometry()
    whole = section()
    pieces = [
        (whole[:41], STEP, entry(end=(2.0, 0.0), last=40)),
        (whole[60:][::-1], STEP, entry((5.0, 0.0), (3.0, 0.0), last=40)),
    ]
    row = assemble_row(pieces, g)
    got = heights(row, g)
    assert got[:41] == pytest.approx(1.0 + np.arange(41), rel=1e-6)
    assert got[60:] == pytest.approx(61.0 + np.arange(41), rel=1e-6)
    assert np.all(row.flag[41:60] == FLAG_NONE)
    assert not row.amplitude[41:60].any()


def test_the_first_of_two_overlapping_pieces_counts_unless_it_is_dead():
    g = geometry()
    first = section()
    first[50:60] = 7.0
    row = assemble_row([(first, STEP, entry()), (2 * section(), STEP, entry())], g)
    got = heights(row, g) / (1.0 + np.arange(101))
    assert got[[10, 49, 60, 90]] == pytest.approx(np.ones(4), rel=1e-6)
    assert got[50:60] == pytest.approx(np.full(10, 2.0), rel=1e-6)
    assert not row.flag.any()


@pytest.mark.parametrize(("n", "flag"), [(1, FLAG_FILLED), (3, FLAG_FILLED), (4, FLAG_DEAD)])
def test_short_runs_of_dead_traces_are_filled_and_long_ones_are_not(n, flag):
    g = geometry()
    data = section()
    data[30 : 30 + n] = -3.0
    row = assemble_row([(data, STEP, entry())], g)
    assert np.all(row.flag[30 : 30 + n] == flag)
    assert np.count_nonzero(row.flag) == n
    filled = heights(row, g)[30 : 30 + n]
    # Heights grow linearly, so the straight fill is exact; a long run holds 0.
    assert filled == pytest.approx(31.0 + np.arange(n) if flag == FLAG_FILLED else np.zeros(n), rel=1e-6)


def test_dead_ends_and_dropped_traces_are_not_invented():
    g = geometry()
    data = section()
    data[:2] = 0.0
    row = assemble_row([(data, STEP, entry(dropped=((60, 69),)))], g)
    assert np.all(row.flag[[0, 1, *range(60, 70)]] == FLAG_DEAD)
    assert not row.amplitude[[0, 1, *range(60, 70)]].any()
    assert np.count_nonzero(row.flag) == 12


def test_non_finite_traces_are_dead():
    g = geometry()
    data = section()
    data[40, 7] = np.nan
    data[70:80, 3] = np.inf
    row = assemble_row([(data, STEP, entry())], g)
    assert row.flag[40] == FLAG_FILLED
    assert np.all(row.flag[70:80] == FLAG_DEAD)
    assert np.isfinite(row.amplitude).all()


def test_flat_tops_are_clipped_and_single_maxima_are_not():
    data = np.random.default_rng(0).integers(-2000, 2000, (6, 80)).astype(np.int16)
    data[1, 30:33] = 32767
    data[2, 10:14] = -32768
    data[3, 20] = 32767
    assert list(trace_flags(data)) == [0, FLAG_CLIPPED, FLAG_CLIPPED, 0, 0, 0]
    quiet = np.random.default_rng(0).integers(-2, 3, (6, 80)).astype(np.int16)
    assert not trace_flags(quiet).any()
    assert np.all(trace_flags(np.zeros((3, 0), np.int16)) == FLAG_DEAD)


def test_the_readers_flags_are_kept():
    g = geometry()
    flag = np.zeros(101, np.uint8)
    flag[50] = FLAG_CLIPPED
    row = assemble_row([Piece(section(), STEP, entry(), flag=flag)], g)
    assert (row.flag[50], np.count_nonzero(row.flag)) == (FLAG_CLIPPED, 1)


def test_header_positions_are_projected_and_kept_as_true_places():
    g = geometry()
    x = 5.0 * np.linspace(0, 1, 101) ** 1.2
    y = 0.03 * np.sin(x)
    data = section() / (1.0 + np.arange(101))[:, None] * np.cos(2 * np.pi * x / 2.5)[:, None]
    row = assemble_row([Piece(data.astype(np.float32), STEP, entry(), x=x, y=y)], g)
    # Traces up to 6 cm apart against a 2.5 m wave; the uneven start of the line is the worst place.
    assert np.abs(heights(row, g) - np.cos(2 * np.pi * g.along() / 2.5))[3:-3].max() < 5e-3
    assert row.y == pytest.approx(0.03 * np.sin(g.along()), abs=1e-4)


def test_an_antenna_that_stands_still_or_steps_back_is_read_once():
    g = geometry()
    x = np.concatenate([np.linspace(0, 2, 41), np.full(19, 2.0), np.linspace(1.98, 5, 62)])
    data = np.repeat(section(1), x.size, axis=0) * np.linspace(1, 2, x.size)[:, None].astype(np.float32)
    row = assemble_row([Piece(data, STEP, entry(last=x.size - 1), x=x, y=np.zeros_like(x))], g)
    assert not row.flag.any()
    assert np.isfinite(row.amplitude).all()


def test_a_cube_has_regular_axes_empty_rows_and_true_places():
    g = geometry()
    cube = assemble({0: [(section(), STEP, entry())], 2: [(section(), STEP, entry((0, 1.02), (5, 0.98), row=2))]}, g)
    schema.check_cube(cube)
    assert cube.dtype == np.float32
    assert np.all(cube.flag[1] == FLAG_NONE)
    assert not cube[1].any()
    assert cube.y[1].values == pytest.approx(np.full(101, 0.5))
    assert cube.y[2].values == pytest.approx(np.linspace(1.02, 0.98, 101))
    assert cube.time.values[0] == -1.0


def test_lines_along_y_exchange_the_places():
    g = geometry(direction="y", line0_m=2.0)
    row = assemble_row([(section(), STEP, entry((2.5, 0.0), (2.5, 5.0), row=1))], g)
    assert row.y == pytest.approx(g.along())
    assert row.x == pytest.approx(np.full(101, 2.5))
    assert heights(row, g) == pytest.approx(1.0 + np.arange(101), rel=1e-6)


def test_a_line_of_one_trace_reads_at_its_middle_only():
    g = geometry()
    row = assemble_row([(section(1), STEP, entry((1.0, 0.0), (1.1, 0.0), last=0))], g)
    assert list(np.flatnonzero(row.flag == 0)) == [21]


def test_the_recording_is_not_touched():
    g = geometry()
    data = (section() * 100).astype(np.int16)
    data[30:32] = 0
    before = data.copy()
    assemble_row([(data, STEP, entry(gain=3.0, dropped=((5, 6),)))], g)
    assert np.array_equal(data, before)


def test_too_few_traces_are_refused_with_the_line():
    with pytest.raises(LineError, match=r"line 17 has .* its row wants traces 0 to 100") as caught:
        assemble_row([(section(90), STEP, entry())], geometry())
    assert caught.value.problems[0].file == "l.sgy"


def test_a_row_outside_the_cube_is_refused():
    with pytest.raises(ValueError, match=r"rows \[5\] are outside 0..2"):
        assemble({5: []}, geometry())
