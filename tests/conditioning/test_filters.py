"""Dewow, gain and band-pass against general libraries and closed forms."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.ndimage
import scipy.signal

from planum import schema
from planum.conditioning.bandpass import band_taper, bandpass, bandpass_kernel
from planum.conditioning.dewow import dewow, dewow_kernel, odd_window
from planum.conditioning.gain import gain
from planum.errors import RecipeError

STEP = 0.1


def make_cube(traces, *, step=STEP, t0=0.0):
    traces = np.atleast_2d(np.asarray(traces, np.float32))
    return schema.cube(
        traces[None],
        line=np.array([0.0]),
        along=0.02 * np.arange(traces.shape[0]),
        time=t0 + step * np.arange(traces.shape[1]),
    )


def ricker(t, f=0.4):
    a = (np.pi * f * t) ** 2
    return (1 - 2 * a) * np.exp(-a)


def test_dewow_agrees_with_a_general_running_mean():
    """Outside check: scipy.ndimage.uniform_filter1d, interior (its edges are another convention)."""
    data = np.random.default_rng(0).normal(size=(700, 300)).astype(np.float32)
    got = dewow_kernel(data, window=51)
    expected = data - scipy.ndimage.uniform_filter1d(data.astype(float), 51, axis=1)
    assert np.abs(got - expected)[:, 25:-25].max() < 1e-6  # float32 result of order 3


def test_dewow_edges_use_the_samples_that_exist():
    data = np.random.default_rng(1).normal(size=(1, 40)).astype(np.float32)
    got = dewow_kernel(data, window=9)[0]
    for i in (0, 1, 3, 38, 39):
        assert got[i] == pytest.approx(data[0, i] - data[0, max(i - 4, 0) : i + 5].mean(dtype=float), abs=1e-6)


def test_dewow_removes_constants_and_straight_trends():
    """Closed form: a running mean of odd length leaves nothing of a constant, nor of a trend in the interior."""
    t = np.arange(300)
    assert np.array_equal(dewow_kernel(np.full((2, 300), 812.0, np.float32), window=51), np.zeros((2, 300)))
    got = dewow_kernel((40.0 + 0.5 * t)[None].astype(np.float32), window=51)
    assert np.abs(got[0, 25:-25]).max() < 1e-10


@pytest.mark.parametrize(("window_ns", "samples"), [(5.0, 51), (5.1, 51), (5.19, 51), (5.2, 53), (5.3, 53), (0.1, 3)])
def test_dewow_windows_are_odd(window_ns, samples):
    assert odd_window(window_ns, STEP) == samples


def test_a_window_longer_than_the_record_takes_its_mean():
    data = np.random.default_rng(2).normal(size=(1, 30)).astype(np.float32)
    assert dewow_kernel(data, window=401)[0] == pytest.approx(data[0] - data.mean(dtype=float), abs=1e-6)


def test_dewow_refuses_a_window_of_nothing():
    with pytest.raises(RecipeError, match=r"dewow.window_ns: window_ns is 0; a positive length"):
        dewow(make_cube(np.ones(10)), window_ns=0.0)


def test_gain_undoes_spreading_and_absorption():
    """Closed form: amplitudes falling as exp(-alpha r)/r become flat; 8.685889638 dB per neper."""
    t = STEP * np.arange(600)
    nepers = 0.05
    decay = 3.0 / np.maximum(t, STEP) * np.exp(-nepers * t)
    done = gain(make_cube(decay), power=1.0, absorption_db_per_ns=8.685889638 * nepers, start_ns=5.0, stop_ns=40.0)
    inside = (t >= 5.0) & (t <= 40.0)
    assert done.values[0, 0, inside] == pytest.approx(np.full(inside.sum(), decay[50]), rel=1e-5)


def test_gain_is_one_before_its_start_and_constant_after_its_stop():
    done = gain(make_cube(np.ones(600)), power=1.0, absorption_db_per_ns=0.5, start_ns=4.0, stop_ns=24.0).values[0, 0]
    assert np.all(done[:41] == 1.0)
    # 10 dB of absorption and a factor 24/4 of spreading.
    assert done[240:] == pytest.approx(np.full(360, 10**0.5 * 6.0), rel=1e-6)
    assert np.all(np.diff(done[40:241]) > 0)


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"power": -1.0}, r"gain.power: power is -1; 0 or more"),
        ({"absorption_db_per_ns": -0.1}, "absorption_db_per_ns is -0.1; 0 or more"),
        ({"stop_ns": 2.0}, "start_ns is 4 and stop_ns 2"),
        ({"start_ns": 0.0}, "a start above 0 when power is not 0"),
    ],
)
def test_gain_refuses_impossible_settings(change, match):
    settings = {"power": 1.0, "absorption_db_per_ns": 0.1, "start_ns": 4.0, "stop_ns": 24.0}
    with pytest.raises(RecipeError, match=match):
        gain(make_cube(np.ones(10)), **{**settings, **change})


CORNERS = (0.1, 0.2, 0.8, 1.0)
NAMES = dict(zip(("low_stop_ghz", "low_pass_ghz", "high_pass_ghz", "high_stop_ghz"), CORNERS, strict=True))


def test_the_band_has_half_cosine_edges():
    """Closed form: 0 and 1 at the corners, a half in the middle of each edge."""
    f = [0.0, 0.1, 0.15, 0.2, 0.5, 0.8, 0.9, 1.0, 4.0, -0.5]
    assert band_taper(f, CORNERS) == pytest.approx([0, 0, 0.5, 1, 1, 1, 0.5, 0, 0, 1], abs=1e-12)


def test_tones_in_the_band_pass_unchanged_and_others_vanish():
    t = STEP * np.arange(4000)
    for f, keep in ((0.4, 1.0), (0.9, 0.5), (0.05, 0.0), (1.3, 0.0)):
        tone = np.cos(2 * np.pi * f * t + 0.7)[None].astype(np.float32)
        got = bandpass_kernel(tone, step_ns=STEP, corners_ghz=CORNERS)[0, 1500:2500]
        # The ends of the cut tone are 1500 samples away: their response has fallen below 1e-4 there.
        assert np.abs(got - keep * tone[0, 1500:2500]).max() < 1e-3


def test_the_band_pass_has_zero_phase_as_filtering_both_ways_has():
    """Outside check: scipy's forward-backward Butterworth leaves the peak where it was and the pulse symmetric."""
    t = STEP * (np.arange(1001) - 500)
    pulse = ricker(t).astype(np.float32)
    ours = bandpass_kernel(pulse[None], step_ns=STEP, corners_ghz=CORNERS)[0]
    sos = scipy.signal.butter(4, [0.15, 0.9], "bandpass", fs=1 / STEP, output="sos")
    theirs = scipy.signal.sosfiltfilt(sos, pulse)
    assert np.argmax(ours) == np.argmax(theirs) == 500
    assert np.abs(ours - ours[::-1]).max() < 1e-6  # float32 transform
    both = np.stack([np.fft.rfft(np.fft.ifftshift(a)) for a in (ours[:-1], theirs[:-1])])
    inside = slice(25, 70)  # 0.25 to 0.7 GHz
    assert np.abs(np.angle(both[0] / both[1]))[inside].max() < 1e-3


def test_the_record_does_not_wrap_round():
    """A pulse at the very end, against the same record followed by 20 000 zeros."""
    data = np.zeros((1, 400), np.float32)
    data[0, -20:] = ricker(STEP * (np.arange(20) - 10))
    longer = np.concatenate([data, np.zeros((1, 20_000), np.float32)], axis=1)
    short = bandpass_kernel(data, step_ns=STEP, corners_ghz=CORNERS)
    whole = bandpass_kernel(longer, step_ns=STEP, corners_ghz=CORNERS)[:, :400]
    # Padding of 4 / edge width: the response has died to 1e-3 of its peak.
    assert np.abs(short - whole).max() < 1e-3 * np.abs(whole).max()


@pytest.mark.parametrize("corners", [(0.2, 0.1, 0.8, 1.0), (-0.1, 0.2, 0.8, 1.0), (0.1, 0.2, 0.8, 0.8), (5.5, 6, 7, 8)])
def test_corners_that_do_not_ascend_below_nyquist_are_refused(corners):
    with pytest.raises(RecipeError, match="four ascending frequencies from 0"):
        bandpass(make_cube(np.ones(64)), **dict(zip(NAMES, corners, strict=True)))


def test_coords_and_attrs_stay():
    cube = make_cube(np.random.default_rng(0).normal(size=(5, 200)), t0=-2.0)
    for done in (
        dewow(cube, window_ns=5.0),
        gain(cube, power=1.0, absorption_db_per_ns=0.1, start_ns=3.0, stop_ns=15.0),
        bandpass(cube, **NAMES),
    ):
        assert done.dims == cube.dims
        assert done.dtype == np.float32
        assert done.attrs == cube.attrs
        assert done.coords.to_dataset().identical(cube.coords.to_dataset())
        schema.check_cube(done)
