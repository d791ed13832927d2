"""What instrument and field add, measured back from the recorded numbers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import hilbert

from planum.constants import SPEED_OF_LIGHT
from planum.synthetic.modelling import Aerial, Ground
from planum.synthetic.recording import Faults, Noise, Pass, Radar, record_pass
from planum.synthetic.scene import Scatterers

NOTHING = Scatterers(np.zeros((0, 3)), np.zeros(0))
SILENT = replace(Noise.none(), direct=0.0)


def recorded(noise, *, radar=None, faults=None, n=400, line=1, piece=0, zero=6.0, gain=1.0, seed=1, scatterers=NOTHING):
    places = np.column_stack([0.05 * np.arange(n), np.zeros(n)])
    radar = radar or Radar(sample_format=6, counts=1.0)
    walked = Pass(line, piece, places, np.full(n, zero), gain)
    return record_pass(
        walked,
        scatterers,
        ground=Ground(),
        radar=radar,
        noise=noise,
        faults=faults or Faults(),
        rng=np.random.default_rng(seed),
    )


@pytest.mark.parametrize("separation", [0.0, 0.16, 0.5])
@pytest.mark.parametrize("zero", [6.0, 7.13])
def test_direct_wave_peaks_at_separation_over_c(separation, zero):
    """Envelope maximum at time zero plus s/c, to a fiftieth of a sample (parabola at 0.3 ns)."""
    radar = Radar(sample_format=6, counts=1.0, aerial=Aerial(separation_m=separation))
    trace = recorded(Noise.none(), radar=radar, n=2, zero=zero)[0]
    e = np.abs(hilbert(trace))
    k = int(np.argmax(e))
    a, b, c = e[k - 1 : k + 2]
    assert (k + 0.5 * (a - c) / (a - 2 * b + c)) * 0.3 == pytest.approx(zero + separation / SPEED_OF_LIGHT, abs=0.006)
    assert e.max() == pytest.approx(1.0, abs=0.05)  # sampled at eight a period


def test_ground_wave_arrives_at_separation_over_v():
    """Without the air wave, s/v remains."""
    noise = replace(SILENT, ground_wave=0.1)
    radar = Radar(sample_format=6, counts=1.0, aerial=Aerial(separation_m=0.7))
    trace = recorded(noise, radar=radar, n=2)[0]
    assert np.argmax(np.abs(hilbert(trace))) * 0.3 == pytest.approx(6.0 + 0.7 / 0.0875, abs=0.15)


def test_white_noise_has_its_stated_deviation():
    """64 000 samples: 0.3 % (1 sigma) of the deviation; neighbours do not know each other."""
    data = recorded(replace(SILENT, white=0.01))
    assert data.std() == pytest.approx(0.01, rel=0.015)
    assert np.mean(data[:, 1:] * data[:, :-1]) / data.var() == pytest.approx(0.0, abs=0.02)


def test_coloured_noise_has_its_deviation_and_its_fall():
    """Standard deviation as stated; amplitude at f0 half of that at 0 (the formula)."""
    data = recorded(replace(SILENT, coloured=0.01), n=3000)
    assert data.std() == pytest.approx(0.01, rel=0.03)
    power = np.mean(np.abs(np.fft.rfft(data, axis=1)) ** 2, axis=0)
    f = np.fft.rfftfreq(data.shape[1], 0.3)
    expected = 1 / (1 + (f / 0.1) ** 2) ** 2
    # 3000 traces: 1.8 % (1 sigma) per frequency
    np.testing.assert_allclose(power[1:30] / power[1:30].mean(), expected[1:30] / expected[1:30].mean(), rtol=0.1)


def test_coupling_changes_slowly_and_by_its_size():
    """Relative deviation as stated (a line of 200 m), nearly equal from trace to trace."""
    noise = replace(Noise.none(), coupling=0.05)
    peak = recorded(noise, n=4000).max(axis=1)
    assert peak.std() / peak.mean() == pytest.approx(0.05, rel=0.2)  # about 120 independent stretches
    assert np.abs(np.diff(peak)).max() < 0.03 * peak.mean()


def test_slow_tail_begins_at_time_zero_and_peaks_at_its_decay_time():
    """x exp(1 - x) has its maximum 1 at x = 1."""
    data = recorded(replace(SILENT, wow=0.1, wow_ns=12.0), n=400).mean(axis=0)
    assert not data[:20].any()
    assert np.argmax(data) * 0.3 == pytest.approx(18.0, abs=0.3)
    assert data.max() == pytest.approx(0.1, rel=0.02)  # 10 % scatter over 400 traces


def test_gain_is_a_factor_on_everything():
    """6.02 dB doubles every number."""
    once, twice = recorded(Noise(), gain=1.0), recorded(Noise(), gain=2.0)
    np.testing.assert_allclose(twice, 2 * once, rtol=1e-12)


def test_dead_traces_hold_nothing_and_the_others_stay():
    """Only the first piece of the line is struck."""
    faults = Faults(dead={3: ((10, 2), (50, 1))})
    data, clean = recorded(Noise(), line=3, faults=faults), recorded(Noise(), line=3)
    assert sorted(np.flatnonzero(~data.any(axis=1))) == [10, 11, 50]
    np.testing.assert_array_equal(np.delete(data, [10, 11, 50], 0), np.delete(clean, [10, 11, 50], 0))
    assert recorded(Noise(), line=3, piece=1, faults=faults).any(axis=1).all()


def test_clipping_cuts_at_its_level():
    """Nothing beyond, and everything within unchanged."""
    data, clean = recorded(Noise(), line=2, faults=Faults(clipped={2: 0.5})), recorded(Noise(), line=2)
    assert data.max() == 0.5
    np.testing.assert_array_equal(data, np.clip(clean, -0.5, 0.5))


def test_interference_is_a_tone_in_its_traces():
    """A sine of the stated frequency and amplitude, in the stated traces alone."""
    faults = Faults(interference={1: (100, 50, 0.25, 0.2)})
    data = recorded(SILENT, faults=faults)
    assert not data[:100].any()
    assert not data[150:].any()
    spectrum = np.abs(np.fft.rfft(data[100:150], axis=1)).mean(axis=0)
    assert np.fft.rfftfreq(160, 0.3)[np.argmax(spectrum)] == pytest.approx(0.25, abs=0.0105)  # half a frequency step
    assert data[100:150].std() == pytest.approx(0.2 / np.sqrt(2), rel=0.03)


def test_whole_number_formats_round_and_stop_at_full_scale():
    """Amplitude 1 at 60 000 counts does not fit 16 bits: it is cut, the rest rounded."""
    radar = Radar(counts=60000.0)
    data, exact = recorded(Noise(), radar=radar), recorded(Noise()) * 60000.0
    assert data.dtype == np.int16
    assert data.max() == 32767
    np.testing.assert_array_equal(data, np.clip(np.rint(exact), -32768, 32767))


def test_late_answers_do_not_wrap_to_the_start():
    """A scatterer that answers behind the window's end leaves the window empty."""
    deep = Scatterers(np.array([[5.0, 0.0, 2.1]]), np.array([1.0]))  # 48 ns + 6 ns, window 48 ns
    assert np.abs(recorded(SILENT, scatterers=deep)).max() < 1e-12


def test_same_stream_same_numbers():
    """The generator decides everything."""
    np.testing.assert_array_equal(recorded(Noise(), seed=9), recorded(Noise(), seed=9))
    assert np.any(recorded(Noise(), seed=9) != recorded(Noise(), seed=10))
