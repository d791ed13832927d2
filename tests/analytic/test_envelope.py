"""The envelope against closed forms and two general libraries."""

from __future__ import annotations

import numpy as np
import obspy.signal.filter
import pytest
import scipy.signal

from planum import schema
from planum.envelope import ENVELOPE, envelope, envelope_kernel
from planum.records import Step


def ricker(t, f=0.4):
    a = (np.pi * f * t) ** 2
    return (1 - 2 * a) * np.exp(-a)


@pytest.mark.parametrize("n", [1000, 999])
def test_an_amplitude_modulated_carrier_gives_its_modulation(n):
    """Closed form: (1 + 0.5 cos) times a carrier of whole cycles. Without padding the record is a whole period."""
    t = 2 * np.pi * np.arange(n) / n
    modulation = 1 + 0.5 * np.cos(3 * t)
    got = envelope_kernel((modulation * np.cos(60 * t + 0.3))[None], pad=0)[0]
    assert got == pytest.approx(modulation, abs=2e-7)  # float32 result of float64 sums


def test_a_phase_rotation_leaves_the_envelope():
    """cos(a) x + sin(a) H[x] has the envelope of x (H by scipy)."""
    rng = np.random.default_rng(0)
    x = np.convolve(rng.normal(size=1024), ricker(0.1 * np.arange(-40, 41)), mode="same")
    spectrum = np.fft.rfft(x)
    spectrum[[0, -1]] = 0.0  # zero frequency and Nyquist have no phase to rotate
    x = np.fft.irfft(spectrum)
    rotated = np.stack([np.real(scipy.signal.hilbert(x) * np.exp(1j * a)) for a in (0.0, 0.7, np.pi / 2, 3.0)])
    got = envelope_kernel(rotated, pad=0)
    assert np.abs(got - got[0]).max() < 1e-6 * got.max()


def test_it_agrees_with_two_general_libraries():
    """scipy.signal.hilbert and obspy.signal.filter.envelope, away from the ends, where they wrap and this does not."""
    rng = np.random.default_rng(1)
    x = np.convolve(rng.normal(size=2000), ricker(0.1 * np.arange(-40, 41)), mode="same").astype(np.float32)
    got = envelope_kernel(x[None])[0]
    inside = slice(500, 1500)
    for theirs in (np.abs(scipy.signal.hilbert(x.astype(float))), obspy.signal.filter.envelope(x.astype(float))):
        # What is left is the 1/t tail of the cut ends.
        assert np.abs(got - theirs)[inside].max() < 2e-3 * theirs.max()


def test_the_peak_of_a_ricker_pulse_is_one_and_in_place():
    t = 0.1 * (np.arange(801) - 400)
    got = envelope_kernel(ricker(t)[None])[0]
    assert np.argmax(got) == 400
    assert got[400] == pytest.approx(1.0, abs=1e-6)


def test_the_ends_do_not_wrap_round():
    """A pulse at the end of the record: scipy without padding shows it at the beginning too, this does not."""
    x = np.zeros(400)
    x[-30:] = ricker(0.1 * (np.arange(30) - 15))
    x[-30:] -= x[-30:].mean()
    wrapped = np.abs(scipy.signal.hilbert(x))[:5].max()
    got = envelope_kernel(x[None])[0]
    long = np.abs(scipy.signal.hilbert(np.concatenate([x, np.zeros(100_000)])))[:400]
    assert np.abs(got - long).max() < 2e-3  # of a pulse of height 1
    assert got[:5].max() < 0.1 * wrapped


def test_places_without_a_recording_stay_zero():
    assert not envelope_kernel(np.zeros((2, 100), np.float32)).any()


def test_the_step_turns_voltage_into_envelope_and_keeps_the_rest():
    data = np.random.default_rng(0).normal(size=(2, 3, 64)).astype(np.float32)
    cube = schema.cube(data, line=np.arange(2.0), along=np.arange(3.0), time=np.arange(64.0))
    before = data.copy()
    done = ENVELOPE(cube, **ENVELOPE.Params().model_dump())
    assert isinstance(ENVELOPE, Step)
    assert (ENVELOPE.takes, ENVELOPE.gives) == ("voltage", "envelope")
    assert done.identical(envelope(cube))
    assert (done.dims, done.dtype, done.attrs["quantity"]) == (cube.dims, np.float32, "envelope")
    assert done.coords.to_dataset().identical(cube.coords.to_dataset())
    assert (done.values >= 0).all()
    assert np.array_equal(data, before)
    assert cube.attrs["quantity"] == "voltage"
