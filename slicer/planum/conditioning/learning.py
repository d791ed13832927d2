"""What the conditioning steps learn from a set's facts: plain arrays in, plain numbers out."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

__all__ = [
    "ABSORPTION_MOST",
    "BLOCK_LINES",
    "LINES_TO_TELL",
    "Corners",
    "absorption",
    "band_corners",
    "fade_out",
    "gain_span",
    "noise_is_seen",
    "typical_blocks",
]

ABSORPTION_MOST = 1.0
"""dB per ns of two-way time. Wet clay takes some 30 dB/m at 400 MHz and 0.06 m/ns, which is 0.9 (common practice)."""

BLOCK_LINES = 21
"""Lines in a sliding block: a wall under 3 of them is a seventh, which a median does not follow."""

LINES_TO_TELL = 15
"""With fewer lines a wall along them, and its flanks on the lines beside, is too large a share for a median to ignore:
3 of 15 are a fifth."""

_LATE, _LATE_PERIODS = 0.125, 2.0
_FLAT, _FLAT_DB = 0.15, 0.7
"""The last eighth of a record, two periods at least, is flat when its level falls by less than 15 % of what the fall
before would make of it, or by less than 0.7 dB: then it is noise. Spreading alone, without any loss, makes 1.1 dB
(20 log10 of 8/7). Still falling, it is ground in noise or ground alone, and the level of noise was not recorded."""

_ONE_BLOCK = 30
_BOUNDS = (0.25, 2.5)
"""Shares of the nominal frequency the band may reach: a cross-check, not an estimate."""

_NOMINAL = (0.25, 0.4, 1.75, 2.5)
"""Corners as shares of the nominal frequency, used when the spectrum tells nothing: two octaves, as pulses have."""

_PASS, _STOP = 0.25, 0.1
"""Share of the spectral peak where the pass band ends (-12 dB) and where the stop band begins (-20 dB)."""


class Corners(NamedTuple):
    """Four corner frequencies in GHz, and why they are not the measured ones ('' when they are)."""

    low_stop: float
    low_pass: float
    high_pass: float
    high_stop: float
    note: str = ""

    @classmethod
    def of(cls, corners: tuple[float, float, float, float], note: str = "") -> Corners:
        """Return corners rounded to a kilohertz, with a note."""
        a, b, c, d = (round(float(c), 6) for c in corners)
        return cls(a, b, c, d, note)


_RESOLVED = 0.02
"""Share of the power that must be left after noise is taken off: below it the difference is mostly error."""


def gain_span(envelope: np.ndarray, noise: float, time_ns: np.ndarray, *, start_ns: float, period_ns: float) -> float:
    """Return the time in ns where the median envelope meets twice the noise and stays there for two periods.

    The envelope is smoothed by a running median of one period, so that one dip does not end the record. The end of the
    axis when it never meets, ``start_ns`` when it is there from the start.
    """
    step = float(time_ns[1] - time_ns[0])
    smooth = _median(np.asarray(envelope, float), max(round(period_ns / step) | 1, 3))
    below = (smooth <= 2.0 * noise) & (time_ns >= start_ns)
    need = max(round(2.0 * period_ns / step), 1)
    run = 0
    for i in range(below.size):
        run = run + 1 if below[i] else 0
        if run == need or (run and i == below.size - 1):
            return float(max(time_ns[i - run + 1], start_ns))
    return float(time_ns[-1])


def noise_is_seen(envelope: np.ndarray, time_ns: np.ndarray, *, start_ns: float, period_ns: float) -> bool:
    """Tell whether the end of the record is noise: its level has stopped falling.

    The slope, in dB/ns, of the last eighth after ``start_ns`` is compared with that from the envelope's maximum up to
    there; both are medians of all pairwise slopes. Noise is there when the last eighth moves by less than 15 % of
    what the fall before would make of it. False when there is too little of either to tell.
    """
    time = np.asarray(time_ns, float)
    smooth = _median(np.asarray(envelope, float), max(round(period_ns / (time[1] - time[0])) | 1, 3))
    border = time[-1] - max(_LATE * (time[-1] - start_ns), _LATE_PERIODS * period_ns)
    use = (time >= start_ns) & (smooth > 0)
    t, level = time[use], 20.0 * np.log10(smooth[use])
    late = t > border
    before = ~late
    if before.sum() < 5 or late.sum() < 5:
        return False
    top = int(np.argmax(level[before]))
    if before.sum() - top >= 5:
        before[:top] = False
    length = float(t[-1] - border)
    fall = -length * _slope(t[late], level[late])
    expected = -length * _slope(t[before], level[before])
    return bool(abs(fall) < max(_FLAT * expected, _FLAT_DB))


def decay(
    envelope: np.ndarray,
    late: float,
    time_ns: np.ndarray,
    *,
    power: float,
    start_ns: float,
    period_ns: float,
) -> tuple[float, float] | None:
    """Return absorption in dB/ns and noise, fitted together where the record's end is not plainly noise.

    Noise is sought between 0 and the ``late`` level in 25 steps; for each the absorption is the median of all pairwise
    slopes of what is left, and the pair wins whose sum comes closest to the envelope in dB (mean of absolute
    differences over points half a period apart). None with fewer than 5 points.
    """
    step = float(time_ns[1] - time_ns[0])
    every = max(round(period_ns / 2.0 / step), 1)
    smooth = _median(np.asarray(envelope, float), max(every | 1, 3))
    pick = np.flatnonzero((time_ns >= start_ns) & (smooth > 0))[::every]
    t, level = time_ns[pick], smooth[pick]
    best: tuple[float, float, float] | None = None
    for noise in late * np.linspace(0.0, 1.0, 26):
        signal = level**2 - noise**2
        use = signal > _RESOLVED * level**2
        if use.sum() < 5:
            continue
        left = 10.0 * np.log10(signal[use]) + 20.0 * power * np.log10(t[use])
        slope = _slope(t[use], left)
        middle = float(np.median(left - slope * t[use]))
        model = 10.0 ** ((middle + slope * t - 20.0 * power * np.log10(t)) / 10.0) + noise**2
        miss = float(np.mean(np.abs(10.0 * np.log10(model) - 20.0 * np.log10(level))))
        if best is None or miss < best[0]:
            best = miss, -slope, float(noise)
    return None if best is None else (max(best[1], 0.0), best[2])


def absorption(
    envelope: np.ndarray,
    noise: float,
    time_ns: np.ndarray,
    *,
    power: float,
    span_ns: tuple[float, float],
    period_ns: float,
    most: float = ABSORPTION_MOST,
) -> float | None:
    """Return the absorption in dB/ns from the decay of the median envelope, spreading removed.

    Noise power is subtracted; the slope is the median of all pairwise slopes (Theil 1950, Sen 1968, from memory) of
    points half a period apart, bounded to 0..``most``. None with fewer than 5 points: nothing is measured.
    """
    step = float(time_ns[1] - time_ns[0])
    every = max(round(period_ns / 2.0 / step), 1)
    smooth = _median(np.asarray(envelope, float), max(every | 1, 3))
    pick = np.flatnonzero((time_ns >= span_ns[0]) & (time_ns <= span_ns[1]))[::every]
    signal = smooth[pick] ** 2 - noise**2
    pick, signal = pick[signal > 0], signal[signal > 0]
    if pick.size < 5:
        return None
    t = time_ns[pick]
    level = 10.0 * np.log10(signal) + 20.0 * power * np.log10(t)
    return float(np.clip(-_slope(t, level), 0.0, most))


def fade_out(time_ns: np.ndarray, start_ns: float, stop_ns: float) -> np.ndarray:
    """Return 1 up to ``start_ns``, 0 from ``stop_ns`` on, half a cosine between."""
    share = (np.asarray(time_ns, float) - start_ns) / (stop_ns - start_ns)
    return 0.5 + 0.5 * np.cos(np.pi * np.clip(share, 0.0, 1.0))


def band_corners(spectrum: np.ndarray, step_ghz: float, *, nominal_ghz: float, nyquist_ghz: float) -> Corners:
    """Return the four corners of the band of the ground, in GHz.

    From the peak of the measured amplitude spectrum outwards: pass corners where it has fallen to a quarter, stop
    corners where it has fallen to a tenth; all bounded to 0.25..2.5 of the nominal frequency and below Nyquist.
    The nominal band is used, with a note, when there is no peak inside those bounds.
    """
    low, high = _BOUNDS[0] * nominal_ghz, min(_BOUNDS[1] * nominal_ghz, nyquist_ghz)
    fallback = (low, _NOMINAL[1] * nominal_ghz, min(_NOMINAL[2] * nominal_ghz, 0.85 * high), high)
    f = np.arange(np.size(spectrum)) * step_ghz
    inside = np.flatnonzero((f >= low) & (f <= high))
    if inside.size < 5:
        return Corners.of(fallback, "the spectrum has too few frequencies near the nominal one")
    smooth = np.convolve(np.asarray(spectrum, float), [0.25, 0.5, 0.25], mode="same")
    peak = int(inside[np.argmax(smooth[inside])])
    if not smooth[peak] > 0 or peak in (inside[0], inside[-1]):
        return Corners.of(fallback, f"the spectrum has no peak between {low:.3g} and {high:.3g} GHz")
    level = smooth / smooth[peak]
    low_pass, high_pass = _falls(level, f, peak, _PASS, -1), _falls(level, f, peak, _PASS, 1)
    low_stop, high_stop = _falls(level, f, peak, _STOP, -1), _falls(level, f, peak, _STOP, 1)
    # Edges at least a fifth of the corner wide, or the response would ring for many periods.
    low_pass = max(low_pass, 1.25 * low)
    high_pass = min(high_pass, high / 1.2)
    low_stop = min(max(low_stop, low), 0.8 * low_pass)
    high_stop = max(min(high_stop, high), 1.2 * high_pass)
    if not low_stop < low_pass < high_pass < high_stop:
        return Corners.of(fallback, "the measured band is too narrow")
    return Corners.of((low_stop, low_pass, high_pass, high_stop))


def typical_blocks(typical: np.ndarray, line_m: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return robust typical traces (block, time) and the positions (block,) they hold for.

    The median over sliding blocks of 21 lines, half overlapping; all lines in one block when there are fewer than 30.

    Parameters
    ----------
    typical : (line, time)
        One typical trace of every recorded line.
    line_m : (line,)
        Their positions across, m.
    """
    order = np.argsort(line_m, kind="stable")
    rows, at = np.asarray(typical, float)[order], np.asarray(line_m, float)[order]
    n = at.size
    if n < _ONE_BLOCK:
        return np.median(rows, axis=0, keepdims=True), np.array([at.mean()])
    count = max(2, round((n - BLOCK_LINES) / (BLOCK_LINES // 2)) + 1)
    starts = np.unique(np.round(np.linspace(0, n - BLOCK_LINES, count)).astype(int))
    blocks = [slice(s, s + BLOCK_LINES) for s in starts]
    return np.array([np.median(rows[b], axis=0) for b in blocks]), np.array([at[b].mean() for b in blocks])


def _falls(level: np.ndarray, f: np.ndarray, peak: int, share: float, way: int) -> float:
    """Frequency where the level first falls to ``share`` going from the peak, linear between bins."""
    i = peak
    while 0 < i < level.size - 1 and level[i] > share:
        i += way
    if level[i] > share:
        return float(f[i])
    back = i - way
    return float(f[i] + (f[back] - f[i]) * (share - level[i]) / max(level[back] - level[i], 1e-30))


def _slope(t: np.ndarray, level: np.ndarray) -> float:
    """Return the median of all pairwise slopes, of at most some 200 points."""
    every = -(-t.size // 200)
    t, level = t[::every], level[::every]
    i, j = np.triu_indices(t.size, 1)
    return float(np.median((level[j] - level[i]) / (t[j] - t[i])))


def _median(values: np.ndarray, window: int) -> np.ndarray:
    half = window // 2
    padded = np.pad(values, half, mode="edge")
    return np.median(np.lib.stride_tricks.sliding_window_view(padded, window), axis=-1)
