"""Exact sections to migrate: closed forms that share nothing with a frequency-wavenumber grid."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import hilbert
from scipy.special import hankel2

from planum import schema


def ricker(t, f):
    """Zero-phase Ricker wavelet, f in GHz for t in ns."""
    a = (np.pi * f * t) ** 2
    return (1 - 2 * a) * np.exp(-a)


class Models:
    """Zero-offset sections (along, time) in the exploding-reflector model: waves travel one way at v/2."""

    @staticmethod
    def line_diffractors(along, time, places, *, v=0.1, f=0.4):
        """Two-dimensional Green's function -i/4 H0(2)(omega r / (v/2)), places (x, z)."""
        n = 4 * time.size  # long enough that nothing wraps round in time
        dt = time[1] - time[0]
        freq = np.fft.rfftfreq(n, dt)
        spectrum = (freq / f) ** 2 * np.exp(1 - (freq / f) ** 2) * np.exp(2j * np.pi * freq * time[0])
        out = np.zeros((along.size, freq.size), complex)
        live = (freq > 0) & (freq < 3.5 * f)  # beyond, a Ricker spectrum is below 1e-4 of its peak
        for x, z in places:
            r = np.hypot(along - x, z)[:, None]
            out[:, live] += -0.25j * hankel2(0, 2 * np.pi * freq[live] * r / (v / 2))
        return np.fft.irfft(out * spectrum, n, axis=1)[:, : time.size]

    @staticmethod
    def plane(along, time, *, depth_at_0, dip_deg, v=0.1, f=0.4):
        """Plane reflector z = depth_at_0 + x tan(dip): the normal ray's two-way time 2 z cos(dip) / v."""
        dip = np.radians(dip_deg)
        normal = (depth_at_0 + along * np.tan(dip)) * np.cos(dip)
        return ricker(time[None, :] - 2.0 * normal[:, None] / v, f)

    @staticmethod
    def cube(section, along, time, flag=None):
        """One line (along, time), or several (line, along, time), as a cube."""
        section = section if section.ndim == 3 else section[None]
        return schema.cube(
            section.astype(np.float32), line=0.5 * np.arange(len(section)), along=along, time=time, flag=flag
        )

    @staticmethod
    def envelope(section):
        """Modulus of the analytic signal along time, by scipy."""
        return np.abs(hilbert(section, axis=-1))

    @staticmethod
    def top(curve):
        """Return place, in samples, and height of the greatest value, by a parabola through three points."""
        i = int(np.argmax(curve))
        a, b, c = curve[i - 1 : i + 2]
        shift = 0.5 * (a - c) / (a - 2 * b + c)
        return i + shift, b - 0.25 * (a - c) * shift


@pytest.fixture(scope="session")
def models():
    return Models
