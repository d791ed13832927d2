"""Depth intervals and means over time windows."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.integrate
import xarray as xr

from planum.errors import RecipeError
from planum.slices.intervals import intervals
from planum.slices.windows import window_means, window_means_kernel


def test_intervals_step_down_and_may_overlap():
    assert intervals(0.0, 0.3, 0.1, 0.1) == ((0.0, 0.1), (0.1, 0.2), (0.2, 0.3))
    assert intervals(0.2, 0.4, 0.1, 0.05) == ((0.2, 0.3), (0.25, 0.35), (0.3, 0.4))
    assert intervals(0.0, 0.1, 0.1, 7.0) == ((0.0, 0.1),)


def test_decimal_steps_neither_lose_nor_add_an_interval():
    """0.1 has no exact binary form: 2 m by 0.1 and 0.05 m give 20 and 39 intervals, edges as typed."""
    assert len(intervals(0.0, 2.0, 0.1, 0.1)) == 20
    found = intervals(0.0, 2.0, 0.1, 0.05)
    assert len(found) == 39
    assert found[-1] == (1.9, 2.0)


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ((0.0, 1.0, 0.0, 0.1), r"thickness_m: thickness_m is 0; a positive number"),
        ((0.0, 1.0, 0.1, -0.1), "step_m is -0.1"),
        ((0.0, 1.0, 0.1, float("nan")), "step_m is nan"),
        ((1.0, 1.05, 0.1, 0.1), "leave no interval"),
        ((-0.1, 1.0, 0.1, 0.1), "0 <= top_m"),
        ((0.0, 10.0, 0.1, 1e-6), "at most 10000"),
    ],
)
def test_impossible_intervals_are_refused(settings, match):
    with pytest.raises(RecipeError, match=match):
        intervals(*settings)


def test_means_of_a_linear_function_are_exact_for_any_edges():
    """Closed form: the mean of a + b t over a window is its value in the middle."""
    rng = np.random.default_rng(0)
    low = rng.uniform(0, 80, 200)
    high = np.minimum(low + rng.uniform(0.01, 40, 200), 99)
    got = window_means_kernel((3.0 + 0.25 * np.arange(100))[None].astype(np.float32), low, high)[0]
    assert got == pytest.approx(3.0 + 0.25 * (low + high) / 2, rel=2e-7)  # float32 result


def test_means_agree_with_the_trapezoid_rule():
    """Outside check: scipy.integrate.trapezoid over the samples and the interpolated edges."""
    data = np.random.default_rng(1).gamma(2.0, size=(4, 60)).astype(np.float32)
    low, high = np.array([0.0, 3.3, 10.25, 20.9]), np.array([59.0, 3.9, 31.0, 22.05])
    got = window_means_kernel(data, low, high)
    for k, (a, b) in enumerate(zip(low, high, strict=True)):
        at = np.unique(np.concatenate([[a, b], np.arange(np.ceil(a), np.floor(b) + 1)]))
        for row in range(4):
            expected = scipy.integrate.trapezoid(np.interp(at, np.arange(60), data[row]), at) / (b - a)
            assert got[row, k] == pytest.approx(expected, rel=1e-6)


def test_a_small_signal_late_in_a_loud_record_keeps_its_digits():
    """Sums run in float64: 1e6 early, 1 late, no more than float32 rounding of the result."""
    data = np.ones((1, 5000), np.float32)
    data[0, :100] = 1e6
    assert window_means_kernel(data, np.array([4000.3]), np.array([4001.1]))[0, 0] == pytest.approx(1.0, rel=1e-6)


def test_windows_beyond_the_record_are_unknown():
    data = np.ones((1, 11), np.float32)
    got = window_means_kernel(data, np.array([-0.5, 0.0, 9.5, 20.0]), np.array([2.0, 10.0, 10.5, 30.0]))[0]
    assert list(np.isnan(got)) == [True, False, True, True]


def test_the_slice_axis_carries_its_windows():
    time = -2.0 + 0.1 * np.arange(300)
    env = xr.DataArray(
        np.broadcast_to(time, (2, 3, 300)).astype(np.float32),
        dims=("line", "along", "time"),
        coords={"time": time, "line": [0.0, 1.0]},
        attrs={"quantity": "envelope"},
    )
    got = window_means(env, [(0.0, 1.0), (0.5, 5.5)])
    assert got.dims == ("line", "along", "slice")
    assert got.dtype == np.float32
    assert got.values[1, 2] == pytest.approx([0.5, 3.0], abs=1e-6)
    assert list(got.start_ns.values) == [0.0, 0.5]
    assert list(got.end_ns.values) == [1.0, 5.5]
    assert got.attrs == env.attrs
    assert "line" in got.coords


@pytest.mark.parametrize(("windows", "match"), [([], "no time windows"), ([(1.0, 2.0), (3.0, 3.0)], "from 3 to 3 ns")])
def test_empty_windows_are_refused(windows, match):
    env = xr.DataArray(np.ones((2, 50), np.float32), dims=("along", "time"), coords={"time": np.arange(50.0)})
    with pytest.raises(RecipeError, match=match):
        window_means(env, windows)
