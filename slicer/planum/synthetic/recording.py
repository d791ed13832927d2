"""What the instrument and the field add: direct wave, ringing, noise, lines with faults.

Amplitudes are relative to the direct air wave's peak of 1; :attr:`Radar.counts` turns them into a file's numbers.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from scipy import fft as sp_fft
from scipy.ndimage import gaussian_filter1d

from planum.constants import SPEED_OF_LIGHT
from planum.synthetic.modelling import Aerial, Ground, impulses, shaped
from planum.synthetic.scene import Scatterers

__all__ = ["Faults", "Noise", "Pass", "Radar", "record_pass"]

_OVERSAMPLE = 8
_WHOLE = {1: 0, 2: 2**31 - 1, 3: 2**15 - 1, 5: 0, 6: 0, 8: 2**7 - 1}
"""Largest value of the SEG-Y sample formats written here; 0 for floats."""


@dataclass(frozen=True)
class Radar:
    """One antenna and its recording.

    Parameters
    ----------
    time_zero_ns : float
        Time of emission from sample 0; the direct wave through air peaks separation/c later.
    counts : float
        Number in the file for amplitude 1.
    sample_format : int
        SEG-Y format code: 1, 2, 3, 5, 6 or 8. Whole-number formats are rounded and clipped at their full scale.
    phase_deg : float
        Constant phase of the wavelet; the envelope does not change with it.
    """

    name: str = "400"
    centre_frequency_mhz: float = 400.0
    interval_ns: float = 0.3
    n_samples: int = 160
    time_zero_ns: float = 6.0
    counts: float = 20000.0
    sample_format: int = 3
    phase_deg: float = 0.0
    aerial: Aerial = field(default_factory=Aerial)

    @property
    def frequency_ghz(self) -> float:
        """Centre frequency, GHz."""
        return self.centre_frequency_mhz * 1e-3


@dataclass(frozen=True)
class Noise:
    """Everything in a trace that is not an answer of the ground; amplitudes relative to the direct air wave.

    Parameters
    ----------
    direct, ground_wave : float
        Peak of the direct wave through air (arrives separation/c after emission) and along the ground (separation/v).
    ringing : float
        First of the horizontal bands that follow every ``ringing_ns``; each next one is halved and turned over.
    coupling : float
        Standard deviation of a slow change (1 m) of direct wave and ringing along a line.
    white, coloured : float
        Standard deviation per sample; coloured noise falls as 1/(1 + (f/f0)²), f0 a quarter of
        the centre frequency.
    wow, wow_ns : float
        Height and decay time of the slow tail behind the direct wave.
    offset : float
        Constant level, normal about 0 from line to line.
    """

    direct: float = 1.0
    ground_wave: float = 0.1
    ringing: float = 0.02
    ringing_ns: float = 4.3
    coupling: float = 0.02
    white: float = 3e-4
    coloured: float = 3e-4
    wow: float = 0.05
    wow_ns: float = 12.0
    offset: float = 0.01

    @classmethod
    def none(cls, direct: float = 1.0) -> Noise:
        """Only the direct air wave."""
        return cls(direct, 0.0, 0.0, 4.3, 0.0, 0.0, 0.0, 0.0, 12.0, 0.0)


@dataclass(frozen=True)
class Faults:
    """What goes wrong between plan and file. Line numbers count from 1.

    Parameters
    ----------
    lag_m : float
        The antenna is this far ahead of the counted place on every line; walked to and fro, neighbours then differ by
        twice this (stagger).
    odometer_scale : float or mapping
        Metres walked per metre counted, for all or by line number.
    zero_drift_ns : float
        Change of time zero from the first line to the last, even within lines.
    zero_jumps_ns : mapping
        From this line on, time zero is later by so much.
    gain_db : float
        Standard deviation of the gain from line to line, dB.
    line_gain_db : mapping
        Gain of single lines, dB, added to it.
    missing : line numbers
        Never recorded, not in the register.
    pieces : mapping
        Line to the parts walked, (from, to) in m along the plan's direction; one pair makes a partial line.
    backwards : line numbers
        Walked against the pattern, and registered so.
    misregistered : line numbers
        Registered against the way they were walked.
    dead : mapping
        Line to (first trace, number of traces) that hold nothing; traces of the line's first piece.
    clipped : mapping
        Line to the level, relative to the direct air wave, at which the recording is cut.
    interference : mapping
        Line to (first trace, number of traces, frequency in GHz, amplitude) of a foreign transmitter.
    """

    lag_m: float = 0.0
    odometer_scale: float | Mapping[int, float] = 1.0
    zero_drift_ns: float = 0.0
    zero_jumps_ns: Mapping[int, float] = field(default_factory=dict)
    gain_db: float = 0.0
    line_gain_db: Mapping[int, float] = field(default_factory=dict)
    missing: tuple[int, ...] = ()
    pieces: Mapping[int, tuple[tuple[float, float], ...]] = field(default_factory=dict)
    backwards: tuple[int, ...] = ()
    misregistered: tuple[int, ...] = ()
    dead: Mapping[int, tuple[tuple[int, int], ...]] = field(default_factory=dict)
    clipped: Mapping[int, float] = field(default_factory=dict)
    interference: Mapping[int, tuple[int, int, float, float]] = field(default_factory=dict)

    def scale(self, line: int) -> float:
        """Metres walked per metre counted on one line."""
        return self.odometer_scale.get(line, 1.0) if isinstance(self.odometer_scale, Mapping) else self.odometer_scale

    def jump_ns(self, line: int) -> float:
        """Sum of the jumps of time zero up to and with this line."""
        return sum(ns for first, ns in self.zero_jumps_ns.items() if first <= line)


@dataclass(frozen=True, eq=False)
class Pass:
    """One walked piece: where the antenna truly was, and what the instrument did to it.

    ``positions`` (trace, 2) scene m in walking order; ``zero_ns`` (trace) emission from sample 0; ``gain`` linear.
    """

    line: int
    piece: int
    positions: np.ndarray
    zero_ns: np.ndarray
    gain: float


def record_pass(
    walked: Pass,
    scatterers: Scatterers,
    *,
    ground: Ground,
    radar: Radar,
    noise: Noise,
    faults: Faults,
    rng: np.random.Generator,
) -> np.ndarray:
    """Return the recorded samples (trace, sample) of one pass in the number type of the radar's format.

    The generator is the pass's own: the same pass gives the same samples whatever else is recorded.
    """
    n = len(walked.positions)
    period = 1.0 / radar.frequency_ghz
    margin = int(np.ceil(4.0 * period / radar.interval_ns))
    n_padded = sp_fft.next_fast_len(radar.n_samples + margin, real=True)
    fine = (radar.interval_ns / _OVERSAMPLE, n_padded * _OVERSAMPLE)
    answers = impulses(
        scatterers.points,
        scatterers.reflectivity,
        walked.positions,
        ground=ground,
        aerial=radar.aerial,
        zero=walked.zero_ns,
        time=fine,
    )
    coupling = 1.0 + noise.coupling * _along(n, walked.positions, rng)
    _add_direct(answers, coupling, walked.zero_ns, (ground, radar, noise), fine[0])
    answers[:, (radar.n_samples + margin // 2) * _OVERSAMPLE :] = 0.0  # nothing of the margin's end wraps round
    data = shaped(
        answers,
        peak_ghz=radar.frequency_ghz,
        interval_ns=radar.interval_ns,
        oversample=_OVERSAMPLE,
        phase_deg=radar.phase_deg,
    )[:, : radar.n_samples]
    data += _tail(walked.zero_ns, radar, noise, rng)
    data += _hiss(data.shape, radar, noise, rng)
    data *= walked.gain
    _spoil(data, walked, radar, faults, rng)
    return _counts(data, radar)


def _along(n: int, positions: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Return a smooth random curve along a line, unit variance, correlated over about 1 m; always n draws."""
    raw = rng.standard_normal(n)
    if n < 2:
        return np.zeros(n)
    step = float(np.hypot(*(positions[1] - positions[0]))) or 1.0
    sigma = 0.5 / step
    return gaussian_filter1d(raw, sigma, mode="nearest") * np.sqrt(max(2.0 * np.sqrt(np.pi) * sigma, 1.0))


def _add_direct(
    answers: np.ndarray,
    coupling: np.ndarray,
    zero_ns: np.ndarray,
    kit: tuple[Ground, Radar, Noise],
    step: float,
) -> None:
    """Add direct air wave, ground wave and ringing bands to the impulses (changed in place)."""
    ground, radar, noise = kit
    air = radar.aerial.separation_m / SPEED_OF_LIGHT
    waves = [(air, noise.direct), (radar.aerial.separation_m / ground.velocity_m_per_ns, noise.ground_wave)]
    waves += [(air + k * noise.ringing_ns, noise.ringing * (-0.5) ** (k - 1)) for k in range(1, 9)]
    row = np.arange(len(zero_ns))
    for delay, size in waves:
        if size == 0.0:
            continue
        place = (zero_ns + delay) / step
        whole = np.floor(place).astype(int)
        for index, share in ((whole, whole + 1 - place), (whole + 1, place - whole)):
            good = (index >= 0) & (index < answers.shape[1])
            answers[row[good], index[good]] += (size * coupling * share)[good]


def _tail(zero_ns: np.ndarray, radar: Radar, noise: Noise, rng: np.random.Generator) -> np.ndarray:
    """Slow tail behind the direct wave, a little different on every trace, and the line's constant level."""
    level = noise.offset * rng.standard_normal()
    size = noise.wow * (1.0 + 0.1 * rng.standard_normal(len(zero_ns)))
    since = np.arange(radar.n_samples) * radar.interval_ns - zero_ns[:, None]
    late = np.clip(since, 0.0, None) / noise.wow_ns
    return level + size[:, None] * np.where(since > 0.0, late * np.exp(1.0 - late), 0.0)


def _hiss(shape: tuple[int, int], radar: Radar, noise: Noise, rng: np.random.Generator) -> np.ndarray:
    """White and coloured noise (trace, sample)."""
    white = noise.white * rng.standard_normal(shape)
    raw = rng.standard_normal(shape)
    if noise.coloured == 0.0:
        return white
    f = sp_fft.rfftfreq(shape[1], radar.interval_ns)
    fall = 1.0 / (1.0 + (f / (0.25 * radar.frequency_ghz)) ** 2)
    power = (fall[0] ** 2 + 2.0 * np.sum(fall[1:] ** 2)) / shape[1]
    return white + noise.coloured * sp_fft.irfft(sp_fft.rfft(raw, axis=1) * fall, n=shape[1], axis=1) / np.sqrt(power)


def _spoil(data: np.ndarray, walked: Pass, radar: Radar, faults: Faults, rng: np.random.Generator) -> None:
    """Apply interference, clipping and dead traces (changed in place)."""
    if walked.line in faults.interference:
        first, number, frequency, size = faults.interference[walked.line]
        phase = 2.0 * np.pi * rng.random((data.shape[0], 1))
        wave = size * np.cos(2.0 * np.pi * frequency * radar.interval_ns * np.arange(data.shape[1]) + phase)
        data[first : first + number] += wave[first : first + number]
    if walked.line in faults.clipped:
        level = faults.clipped[walked.line]
        np.clip(data, -level, level, out=data)
    if walked.piece == 0:
        for first, number in faults.dead.get(walked.line, ()):
            data[first : first + number] = 0.0


def _counts(data: np.ndarray, radar: Radar) -> np.ndarray:
    """Amplitudes as the file's numbers: rounded and cut at full scale, or floats as they are."""
    scaled = data * radar.counts
    most = _WHOLE[radar.sample_format]
    if not most:
        return scaled.astype(np.float64 if radar.sample_format == 6 else np.float32)
    kinds: dict[int, type[np.signedinteger]] = {2: np.int32, 3: np.int16, 8: np.int8}
    return np.clip(np.rint(scaled), -most - 1, most).astype(kinds[radar.sample_format])
