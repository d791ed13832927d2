"""Band-limited shifting and resampling against closed forms and scipy."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.signal

from planum.cube import resample

STEP = 0.15  # ns, a usual sample interval at 400 MHz


def ricker(t, f=0.4):
    """Ricker wavelet, closed form: (1 - 2a) exp(-a), a = (pi f t)^2."""
    a = (np.pi * f * t) ** 2
    return (1 - 2 * a) * np.exp(-a)


def test_a_fractional_shift_agrees_with_the_closed_form_wavelet():
    """1e-3 of the peak is asked for; a Ricker pulse at 0.4 GHz has nothing above Nyquist (3.3 GHz) to alias."""
    time = np.arange(400) * STEP
    shift = np.array([0.0, 0.25, 0.5, 0.9, 7.3, 20.125])
    data = np.stack([ricker(time - 30.0)] * 6).astype(np.float32)
    got = resample.shift_time(data, shift, 0, 300)
    expected = np.stack([ricker(time[:300] + s * STEP - 30.0) for s in shift])
    # float32 transforms leave some 1e-6.
    assert np.abs(got - expected).max() < 5e-6


def test_band_limited_noise_is_shifted_as_its_own_sum_of_sines():
    """A sum of sines up to 0.7 Nyquist, read inside the record; the ends of a cut record ring for some samples."""
    rng = np.random.default_rng(3)
    f, phase = rng.uniform(0.05, 0.35, 40), rng.uniform(0, 2 * np.pi, 40)

    def wave(u):
        return np.cos(2 * np.pi * f * np.asarray(u)[..., None] + phase).sum(axis=-1)

    got = resample.shift_time(wave(np.arange(1000))[None].astype(np.float32), np.array([0.37]), 0, 900)[0]
    inside = np.arange(300, 700)
    scale = np.abs(wave(np.arange(1000))).max()
    assert np.abs(got[inside] - wave(inside + 0.37)).max() / scale < 1e-3


def test_offset_and_drift_are_shifted_without_ringing():
    got = resample.shift_time((1000.0 + 2.0 * np.arange(200))[None].astype(np.float32), np.array([0.4]), 0, 199)[0]
    assert got == pytest.approx(1000.8 + 2.0 * np.arange(199), abs=2e-3)  # float32 at 1400: 1.2e-4 a rounding


def test_whole_samples_are_copied_bit_for_bit():
    data = np.random.default_rng(1).normal(size=(5, 64)).astype(np.float32)
    got = resample.shift_time(data, np.full(5, 7.0), 0, 50)
    assert np.array_equal(got, data[:, 7:57])


def test_beyond_the_record_the_end_value_fades_to_nothing():
    data = np.full((1, 20), 3.0, np.float32)
    got = resample.shift_time(data, np.array([0.0]), -12, 44)[0]
    assert np.array_equal(got[12:32], np.full(20, 3.0))
    assert np.all(got[:4] == 0)
    assert np.all(got[40:] == 0)
    assert np.all(np.diff(got[32 : 32 + resample.FADE]) < 0)
    assert got[:12] == pytest.approx(got[32:][::-1])


def test_a_record_that_lies_wholly_outside_reads_zero():
    assert not resample.shift_time(np.ones((2, 10), np.float32), np.array([50.0, -70.5]), 0, 12).any()


@pytest.mark.parametrize("share", [0.1, 0.4, 0.7])
def test_the_windowed_sinc_reads_tones_between_samples(share):
    """Closed form: a tone below 0.7 Nyquist, error below 1e-3 (what the module states)."""
    u = np.random.default_rng(0).uniform(20, 80, 200)
    w = resample.sinc_weights(u, 100)
    tone = np.exp(1j * np.pi * share * np.arange(100))
    assert np.abs(w @ tone - np.exp(1j * np.pi * share * u)).max() < 1e-3


def test_the_windowed_sinc_agrees_with_fourier_resampling():
    """Outside check: scipy.signal.resample of a periodic band-limited series, 4 times finer."""
    rng = np.random.default_rng(5)
    spectrum = np.zeros(129, complex)
    spectrum[1:80] = rng.normal(size=79) + 1j * rng.normal(size=79)  # up to 0.62 Nyquist
    series = np.fft.irfft(spectrum, 256)
    fine = scipy.signal.resample(series, 1024)
    inside = np.arange(4 * 20, 4 * 236)
    got = resample.sinc_weights(inside / 4.0, 256) @ series
    assert np.abs(got - fine[inside]).max() < 2e-3 * np.abs(series).max()


def test_coarser_places_are_low_passed():
    """Step 2.5 samples: a tone at 1.3 of the new Nyquist is gone (Kaiser side lobes), one at 0.5 is whole."""
    u = np.arange(40, 360, 2.5)
    w = resample.sinc_weights(u, 400, scale=2.5)
    for share, expected, off in ((0.5, 1.0, 5e-3), (1.3, 0.0, 1e-3), (2.0, 0.0, 1e-3)):
        tone = np.exp(1j * np.pi * share / 2.5 * np.arange(400))
        assert np.abs(np.abs(w @ tone) - expected).max() < off


def test_straight_lines_are_kept_inside_and_samples_are_exact():
    u = np.linspace(8, 21, 117)
    w = resample.sinc_weights(u, 30)
    # The window shifts the first moment of the normalised kernel by at most 2e-3 samples (slope 2).
    assert w @ (5.0 - 2.0 * np.arange(30)) == pytest.approx(5.0 - 2.0 * u, abs=4e-3)
    assert np.array_equal(resample.sinc_weights(np.arange(30.0), 30).toarray(), np.eye(30))


@pytest.mark.parametrize("n", [1, 2, 3, 5])
def test_short_series_keep_constants(n):
    w = resample.sinc_weights(np.linspace(0, n - 1, 7), n)
    assert w @ np.full(n, 4.0) == pytest.approx(np.full(7, 4.0))


def test_the_finest_pattern_does_not_turn_into_a_slow_one_at_the_ends():
    """Alternating samples hold nothing below Nyquist: a step of 4 reads nothing, at the ends too."""
    w = resample.sinc_weights(np.arange(0, 101, 4.0), 101, scale=4.0)
    assert np.abs(w @ (-1.0) ** np.arange(101)).max() < 1e-3


def test_a_new_time_step_agrees_with_the_closed_form():
    """From 0.15 to 0.1 ns steps, a Ricker pulse at 0.4 GHz."""
    own = ricker(np.arange(300) * STEP - 20.0)
    u0, ratio = 3.3, 0.1 / STEP
    got = resample.time_grid(300, u0, ratio, 350).T @ own
    assert np.abs(got - ricker((u0 + ratio * np.arange(350)) * STEP - 20.0)).max() < 1e-3


def test_nothing_is_drawn_across_a_gap():
    position = np.arange(60) * 0.02
    use = np.ones(60, bool)
    use[20:40] = False
    along = np.arange(119) * 0.01
    w, nearest = resample.along_weights(position, use, along, reach=0.015)
    assert not w[:, 20:40].nnz
    middle = (nearest > 21) & (nearest < 38)
    assert not w[middle].nnz
    assert np.all(np.diff(nearest) >= 0)
    left = np.asarray(w[along < 0.39][:, 40:].sum())
    assert left == 0
