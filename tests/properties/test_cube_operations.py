"""What every operation on a cube promises: lazy until asked, the same by blocks, the caller's array untouched."""

from __future__ import annotations

from functools import partial

import dask
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planum import schema
from planum.conditioning.background import background
from planum.conditioning.bandpass import bandpass
from planum.conditioning.dewow import dewow
from planum.conditioning.gain import gain
from planum.envelope import envelope
from planum.records import FLAG_NONE
from planum.slices.windows import window_means

N_TIME = 96

OPERATIONS = {
    "dewow": partial(dewow, window_ns=1.1),
    "gain": partial(gain, power=1.0, absorption_db_per_ns=0.4, start_ns=1.0, stop_ns=7.0),
    "bandpass": partial(bandpass, low_stop_ghz=0.1, low_pass_ghz=0.3, high_pass_ghz=1.5, high_stop_ghz=2.0),
    "background of the set": partial(
        background,
        scope="set",
        traces=[list(np.sin(np.arange(N_TIME))), list(np.cos(np.arange(N_TIME)))],
        at_m=[0.2, 0.9],
    ),
    "background along the line": partial(background, scope="line", window_m=0.5),
    "envelope": envelope,
    "window means": partial(window_means, windows_ns=[(0.0, 1.0), (0.55, 3.21), (6.0, 60.0)]),
}
WHOLE_LINES = {"background along the line"}


def make_cube(n_lines, n_along, seed):
    rng = np.random.default_rng(seed)
    flag = np.where(rng.random((n_lines, n_along)) < 0.2, FLAG_NONE, 0).astype(np.uint8)
    data = rng.normal(size=(n_lines, n_along, N_TIME)).astype(np.float32)
    data[flag > 0] = 0.0
    return schema.cube(
        data,
        line=0.25 * np.arange(n_lines),
        along=0.05 * np.arange(n_along),
        time=-1.0 + 0.1 * np.arange(N_TIME),
        flag=flag,
    )


def refuse(graph, keys, **_):
    raise AssertionError("something was computed before it was asked for")


def test_the_refusing_scheduler_refuses():
    lazy = make_cube(2, 4, 0).chunk({"line": 1})
    with dask.config.set(scheduler=refuse), pytest.raises(AssertionError, match="before it was asked for"):
        lazy.compute()


@pytest.mark.parametrize("name", OPERATIONS)
@settings(max_examples=8, deadline=None)
@given(
    n_lines=st.integers(1, 5),
    n_along=st.integers(2, 24),
    chunk=st.tuples(st.integers(1, 3), st.integers(1, 9)),
    seed=st.integers(0, 99),
)
def test_blocks_give_what_the_whole_gives_and_nothing_runs_early(name, n_lines, n_along, chunk, seed):
    operation = OPERATIONS[name]
    cube = make_cube(n_lines, n_along, seed)
    before = cube.copy(deep=True)
    whole = operation(cube)
    lazy = cube.chunk({"line": chunk[0], "along": -1 if name in WHOLE_LINES else chunk[1], "time": -1})
    with dask.config.set(scheduler=refuse):
        waiting = operation(lazy)
    assert waiting.chunks is not None
    assert (waiting.dtype, waiting.dims, waiting.attrs) == (whole.dtype, whole.dims, whole.attrs)
    with dask.config.set(scheduler="synchronous"):
        assert waiting.compute().identical(whole)  # bit for bit: transforms and sums do not look beyond a trace
    assert cube.identical(before)


@pytest.mark.parametrize("name", OPERATIONS)
def test_a_record_in_several_pieces_along_time_is_refused(name):
    """A split axis cannot be filtered block by block; gain and the learned background may be, and are equal."""
    cube = make_cube(2, 6, 0)
    split = cube.chunk({"time": 40})
    if name == "gain":
        with dask.config.set(scheduler="synchronous"):
            assert OPERATIONS[name](split).compute().identical(OPERATIONS[name](cube))
    else:
        with pytest.raises(ValueError, match="consists of multiple chunks"):
            OPERATIONS[name](split)


@pytest.mark.parametrize("name", OPERATIONS)
def test_integers_become_float32_and_stay_where_they_were(name):
    cube = (1000 * make_cube(2, 6, 1)).astype(np.int16)
    before = cube.copy(deep=True)
    assert OPERATIONS[name](cube).dtype == np.float32
    assert cube.identical(before)
