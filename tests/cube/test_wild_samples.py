"""Broken samples: one number far beyond all others must not reach the cube, a strong reflector must."""

from __future__ import annotations

import numpy as np
import pytest

from planum.cube.assemble import assemble_row, trace_flags, wild_traces
from planum.records import FLAG_CLIPPED, FLAG_DEAD, FLAG_FILLED, CubeGeometry, LineEntry

GEOMETRY = CubeGeometry(
    direction="x", line0_m=0.0, line_step_m=0.5, n_lines=1, along0_m=0.0, along_step_m=0.05, n_along=101,
    time0_ns=-1.0, time_step_ns=0.1, n_time=120,
)  # fmt: skip
ENTRY = LineEntry(
    key="k", set="A/x", grid="A", line="17", row=0, file="l.sgy", first_trace=0, last_trace=100,
    start=(0.0, 0.0), end=(5.0, 0.0), zero_ns=((0, 2.0),),
)  # fmt: skip


def ground(dtype=np.float32, *, traces=101):
    return (1000.0 * np.random.default_rng(4).normal(size=(traces, 200)) + 3e4).astype(dtype)


@pytest.mark.parametrize("value", [1e30, -1e30, 3e38, 2e6])
def test_one_broken_sample_is_a_dead_trace_and_is_filled(value):
    """The row differs from the one whose trace was dropped by nothing at all."""
    data = ground()
    data[40, 7] = value
    row = assemble_row([(data, 0.1, ENTRY)], GEOMETRY)
    want = assemble_row([(ground(), 0.1, ENTRY.model_copy(update={"dropped": ((40, 40),)}))], GEOMETRY)
    assert row.flag[40] == FLAG_FILLED
    assert np.array_equal(row.amplitude, want.amplitude)


def test_what_float32_cannot_hold_is_dead():
    data = ground(np.float64)
    data[40:60, 7] = 1e300
    data[70, 3], data[70, 4] = 1.7e308, -1.7e308  # the swing itself overflows
    row = assemble_row([(data, 0.1, ENTRY)], GEOMETRY)
    assert np.all(row.flag[40:60] == FLAG_DEAD)
    assert row.flag[70] == FLAG_FILLED
    assert np.isfinite(row.amplitude).all()


def test_a_long_broken_run_does_not_vouch_for_itself():
    """A damaged block of a file: 20 traces of floats of all sizes; the median around them is as wild as they are."""
    data = ground()
    data[30:50] = np.random.default_rng(1).integers(0, 2**32, (20, 200), np.uint32).view(np.float32)
    data[30:50][~np.isfinite(data[30:50])] = 0.0
    assert np.flatnonzero(wild_traces(data)).tolist() == list(range(30, 50))


@pytest.mark.parametrize("at", [0, 1, 50, 99, 100])
def test_broken_traces_at_a_lines_end_are_seen_too(at):
    data = ground()
    data[at, 100] = 1e9
    assert np.flatnonzero(wild_traces(data)).tolist() == [at]


def test_strong_things_in_the_ground_are_not_wild():
    """A pipe 50 dB above a record whose direct wave was taken off; a line that is nearly silent for three quarters."""
    rng = np.random.default_rng(2)
    quiet = rng.normal(size=(200, 150)).astype(np.float32)
    pipe = 300.0 * 8.0 * np.exp(-(((np.arange(200) - 90) / 12.0) ** 2))
    quiet[:, 60] += pipe
    assert not wild_traces(quiet).any()
    silent = rng.normal(size=(200, 150)).astype(np.float32)
    silent[:60] *= 1e4
    assert not wild_traces(silent).any()


def test_whole_numbers_follow_the_same_rule_and_few_traces_are_no_majority():
    data = np.random.default_rng(0).integers(-20, 20, (60, 80)).astype(np.int32)
    data[5, 3] = 2**30
    assert np.flatnonzero(wild_traces(data)).tolist() == [5]
    assert not wild_traces(data[5:6]).any()
    assert wild_traces(data[4:6]).tolist() == [False, True]
    assert not wild_traces(np.zeros((3, 0), np.int16)).any()


def test_clipping_is_judged_without_broken_traces():
    """The largest value of a float record is not the broken one."""
    data = ground()
    data[3, 10:14] = 4e4
    data[40, 7] = 1e30
    flag = trace_flags(data)
    assert (flag[3], flag[40]) == (FLAG_CLIPPED, FLAG_DEAD)
