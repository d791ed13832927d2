"""Traces over point scatterers: exact two-way times, spreading, loss, antenna pattern, one wavelet.

A scatterer at r seen from a transmitter and a receiver on the surface answers at

    t = (|r - tx| + |r - rx|) / v

with amplitude

    q · (1 m)² / (|r - tx| |r - rx|) · 10^(-loss (|r - tx| + |r - rx|) / 20) · (cos θ_tx cos θ_rx)^p

(q its reflectivity, loss in dB/m of path, θ measured from the vertical): single scattering in a uniform ground, as in
any diffraction summation (Yilmaz, Seismic Data Analysis, ch. 4, from memory). Multiples, surface relief and
dispersion in the ground are left out.

Times count from emission. The wavelet is symmetric about its arrival, so its envelope peaks there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft as sp_fft

__all__ = ["Aerial", "Ground", "impulses", "ricker", "ricker_spectrum", "shaped", "travel_time"]

_TRACES_AT_ONCE = 16


@dataclass(frozen=True)
class Ground:
    """A uniform soil.

    Parameters
    ----------
    velocity_m_per_ns : float
        Wave velocity, m/ns.
    loss_db_per_m : float
        Loss of amplitude along the path, dB per metre of path (a target 1 m down loses twice this).
    """

    velocity_m_per_ns: float = 0.0875
    loss_db_per_m: float = 8.0


@dataclass(frozen=True)
class Aerial:
    """The antenna pair: both on the ground, one behind the other in walking direction.

    Parameters
    ----------
    separation_m : float
        Transmitter to receiver, m.
    pattern : float
        Exponent p of (cos θ)^p for each antenna; 0 radiates the same to all sides.
    aperture_m : float
        Scatterers farther than this in plan are left out; the last quarter is tapered by a raised cosine.
    """

    separation_m: float = 0.16
    pattern: float = 1.0
    aperture_m: float = 2.0


def travel_time(points: np.ndarray, tx: np.ndarray, rx: np.ndarray, velocity_m_per_ns: float) -> np.ndarray:
    """Two-way time in ns from ``tx`` to ``points`` and on to ``rx``; all (..., 3) in m, straight rays."""
    down = np.linalg.norm(np.asarray(points, float) - tx, axis=-1)
    up = np.linalg.norm(np.asarray(points, float) - rx, axis=-1)
    return (down + up) / velocity_m_per_ns


def ricker(time_ns: np.ndarray, frequency_ghz: float) -> np.ndarray:
    """Ricker wavelet (1 - 2a) exp(-a), a = (π f t)²; peak 1 at time 0, spectrum peaks at ``frequency_ghz``."""
    a = (np.pi * frequency_ghz * np.asarray(time_ns, float)) ** 2
    return (1.0 - 2.0 * a) * np.exp(-a)


def ricker_spectrum(frequency_ghz: np.ndarray, peak_ghz: float) -> np.ndarray:
    """Fourier transform of :func:`ricker`, ns: 2/√π · f²/f_p³ · exp(-f²/f_p²), real by symmetry."""
    f = np.asarray(frequency_ghz, float) / peak_ghz
    return 2.0 / np.sqrt(np.pi) * f**2 * np.exp(-(f**2)) / peak_ghz


def impulses(
    points: np.ndarray,
    reflectivity: np.ndarray,
    positions: np.ndarray,
    *,
    ground: Ground,
    aerial: Aerial,
    zero: np.ndarray,
    time: tuple[float, int],
) -> np.ndarray:
    """Return the sum of all scatterers' answers as weighted impulses on a fine time axis.

    Parameters
    ----------
    points : (n, 3) array
        x, y and depth of the scatterers, m.
    reflectivity : (n,) array
        Amplitude at 1 m from both antennas, without loss.
    positions : (trace, 2) array
        Antenna midpoints along one straight line, m, in walking order.
    ground, aerial : Ground, Aerial
    zero : (trace,) array
        Time of emission, ns from sample 0.
    time : (step_ns, n)
        The fine axis; it starts at sample 0.

    Returns
    -------
    (trace, n) array, float64. Each impulse is split linearly between its two nearest fine samples.
    """
    step, n = time
    origin, heading = positions[0], _heading(positions)
    offset = points[:, :2] - origin
    u, w = offset @ heading, offset @ np.array([-heading[1], heading[0]])
    near = np.flatnonzero(np.abs(w) <= aerial.aperture_m)
    near = near[np.argsort(u[near], kind="stable")]
    u, w, z, q = u[near], w[near], points[near, 2], reflectivity[near]
    a = (positions - origin) @ heading
    out = np.zeros((len(a), n))
    for first in range(0, len(a), _TRACES_AT_ONCE):
        block = slice(first, first + _TRACES_AT_ONCE)
        at = a[block]
        low, high = np.searchsorted(u, [at.min() - aerial.aperture_m, at.max() + aerial.aperture_m])
        seen = slice(int(low), int(high))
        weight, arrival = _answers(at[:, None] - u[None, seen], w[seen], z[seen], ground, aerial)
        _scatter(out[block], weight * q[None, seen], (arrival + zero[block, None]) / step)
    return out


def shaped(
    impulse: np.ndarray, *, peak_ghz: float, interval_ns: float, oversample: int, phase_deg: float
) -> np.ndarray:
    """Convolve impulses on a fine axis with the Ricker wavelet and return every ``oversample``-th sample.

    Done in the frequency domain: the wavelet's closed-form spectrum, divided by the linear split's sinc², cut at the
    recording's Nyquist frequency. ``phase_deg`` turns the wavelet's phase; its envelope stays.

    Parameters
    ----------
    impulse : (trace, n · oversample) array
        The last samples must be a margin of at least three periods: the convolution is circular.

    Returns
    -------
    (trace, n) array
    """
    n_fine = impulse.shape[-1]
    n = n_fine // oversample
    fine = interval_ns / oversample
    f = np.arange(n // 2 + 1) / (n * interval_ns)
    shape = ricker_spectrum(f, peak_ghz) / interval_ns / np.sinc(f * fine) ** 2
    turned = shape * np.exp(1j * np.deg2rad(phase_deg))
    spectrum = sp_fft.rfft(impulse, axis=-1)[..., : n // 2 + 1] * turned
    return sp_fft.irfft(spectrum, n=n, axis=-1)


def _heading(positions: np.ndarray) -> np.ndarray:
    way = positions[-1] - positions[0]
    length = float(np.hypot(*way))
    return way / length if length > 0 else np.array([1.0, 0.0])


def _answers(
    du: np.ndarray, w: np.ndarray, z: np.ndarray, ground: Ground, aerial: Aerial
) -> tuple[np.ndarray, np.ndarray]:
    """Weights for unit reflectivity and arrival times, both (trace, scatterer)."""
    half = aerial.separation_m / 2.0
    across = (w**2 + z**2)[None, :]
    down, up = np.sqrt((du - half) ** 2 + across), np.sqrt((du + half) ** 2 + across)
    path = down + up
    both = down * up
    weight = np.exp(-np.log(10.0) / 20.0 * ground.loss_db_per_m * path) / both
    if aerial.pattern:
        weight *= (z[None, :] ** 2 / both) ** aerial.pattern
    edge = np.hypot(du, w[None, :]) / aerial.aperture_m
    taper = 0.5 + 0.5 * np.cos(np.pi * np.clip((edge - 0.75) / 0.25, 0.0, 1.0))
    return weight * taper, path / ground.velocity_m_per_ns


def _scatter(out: np.ndarray, weight: np.ndarray, place: np.ndarray) -> None:
    """Add ``weight`` at fractional sample ``place`` of each row of ``out`` (changed in place)."""
    rows, n = out.shape
    whole = np.floor(place).astype(np.int64)
    part = place - whole
    inside = (whole >= 0) & (whole < n - 1) & (weight != 0.0)
    index = (whole + n * np.arange(rows)[:, None])[inside]
    weight, part = weight[inside], part[inside]
    total = np.bincount(index, weight * (1.0 - part), rows * n)
    total += np.bincount(index + 1, weight * part, rows * n)
    out += total.reshape(rows, n)
