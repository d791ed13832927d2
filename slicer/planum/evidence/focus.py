"""Velocity from focus: migrate the site's own lines at many velocities and see where diffractions shrink to points.

A diffraction migrated too slow stays a hyperbola, too fast turns into a smile; at the right velocity the energy of a
patch sits in few samples and its kurtosis is greatest (R. A. Wiggins, Minimum entropy deconvolution, Geoexploration 16,
1978, for kurtosis as a measure of simplicity; as a focus measure in velocity scans common practice; from memory).

One vote a patch. A patch votes where its log kurtosis has its most prominent peak, when that peak is worth a factor of
two and the patch is then no fainter than half its brightest neighbour. So one bright pipe does not outvote the ground,
ground without diffractions does not vote, nor do patches that the tail of a neighbour's hyperbola sweeps through. The
mean log kurtosis of the patches behind the winning velocity then gives the value to a fraction of a step.

Targets count as points. A round top reads too fast, because its hyperbola is flatter than a point's: measured on models
with targets 0.35 to 1.6 m deep at 0.1 m/ns, +1 % for a radius of 2 cm, +2 % for 5 cm, +4 % for 10 cm. Antennas 0.16 m
apart add 0.2 to 0.3 %.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from scipy import fft
from scipy.ndimage import maximum_filter
from scipy.signal import find_peaks

from planum.constants import VELOCITY_RANGE
from planum.errors import EvidenceError, Problem
from planum.migration.stolt import edge_weights, stolt_analytic, stolt_table
from planum.records import FLAG_DEAD, FLAG_NONE, Estimate
from planum.schema import check_cube, regular_step

__all__ = ["FocusCurve", "focus_scan"]

PROMINENCE = math.log(2.0)
"""A patch votes when its kurtosis at the peak is at least twice that on both sides ..."""
BRIGHT = 0.5
"""... and its mean fourth power at the peak at least this share of the greatest among the patches it touches."""
LEAST_VOTES = 12
"""Patches overlap by half both ways, so one diffraction votes some four times: three diffractions at least. In models,
forty lines of band noise and layers cast two to four votes in all."""
NEAR = 0.04
"""Log velocity: votes this near to a velocity support it."""
LEAST_OVER_CHANCE = 3.0
"""Votes near the winner, over those expected there when all votes fall anywhere in the range alike."""
ZERO_SLOPE_PER_NS, DIRECT_PERIODS, EDGE_M, MAX_DIP_DEG, DRAWS = 0.018, 2.5, 0.3, 60.0, 200


@dataclass(frozen=True, eq=False)
class FocusCurve:
    """The scan for a picture: ``velocity_m_per_ns``, ``votes`` near each of them, ``score`` (mean log kurtosis)."""

    velocity_m_per_ns: np.ndarray
    votes: np.ndarray
    score: np.ndarray


@dataclass(frozen=True, eq=False)
class _Line:
    """One line's voting patches: where each votes (log velocity) and its curve (velocity)."""

    votes: np.ndarray
    curves: np.ndarray


def focus_scan(
    sections: Sequence[xr.DataArray],
    *,
    low: float = 0.05,
    high: float = 0.16,
    step: float = 0.02,
    patch_m: float = 1.0,
    patch_ns: float = 6.0,
    allowance: tuple[float, float] = (0.5, 0.005),
) -> tuple[Estimate, FocusCurve]:
    """Estimate one velocity for several lines from how well their diffractions focus.

    Parameters
    ----------
    sections : sequence of DataArray
        Conditioned, unmigrated cubes with dims (line, along, time): background removed, gained, band-passed.
    low, high : float
        Velocities scanned, m/ns.
    step : float
        Ratio of one velocity to the next, less one; 0.02 at most.
    patch_m, patch_ns : float
        Size of a patch; patches overlap by half. The direct wave's zone, two and a half periods of the mean frequency
        from time zero, empty patches and patches over gaps or dead traces are left out.
    allowance : (float, float)
        1-sigma error of time zero, ns, and of the odometer, as a ratio.

    Returns
    -------
    estimate : Estimate
        m/ns; ``n`` counts the patches behind it. The 1-sigma error joins four parts as squares: drawing the lines
        anew (bootstrap; the patches when there are fewer than four lines), the velocity step as a uniform error,
        time zero (taken 1 ns early, which makes every time 1 ns too long, it lowers the velocity by about 1.8 % for
        targets down to 1.6 m) and the odometer (1 % too long reads 1 % too fast).
    curve : FocusCurve
        For a picture.

    Raises
    ------
    EvidenceError
        When too few patches vote, or they do not agree, or they agree on an end of the range.
    ValueError
        When a section is no cube, or the range or the step is impossible.
    """
    velocities = _velocities(low, high, step)
    lines: list[_Line] = []
    for section in sections:
        check_cube(section)
        lines += _scan(section, velocities, patch=(patch_m, patch_ns))
    votes = np.concatenate([n.votes for n in lines]) if lines else np.zeros(0)
    if votes.size < LEAST_VOTES:
        raise _evidence(f"{votes.size} patches of {len(lines)} lines show a focus")
    curves = np.concatenate([n.curves for n in lines])
    grid = np.log(velocities)
    at, support = _winner(votes, curves, grid)
    near = _near(votes, grid)
    chance = votes.size * min(1.0, 2.0 * NEAR / (grid[-1] - grid[0]))
    if support < LEAST_VOTES or support < LEAST_OVER_CHANCE * chance:
        raise _evidence(f"of {votes.size} patches that show a focus only {support} agree near {math.exp(at):.3f} m/ns")
    if not grid[1] < at < grid[-2]:
        raise _evidence(f"the focus is best at an end of the range, {math.exp(at):.3f} m/ns")
    spread = _bootstrap(lines, grid, at)
    parts = (spread, math.log1p(step) / math.sqrt(12.0), ZERO_SLOPE_PER_NS * allowance[0], allowance[1])
    value = math.exp(at)
    estimate = Estimate(
        value=value,
        error=value * math.hypot(*parts),
        unit="m/ns",
        origin="measured",
        method="focus of migrated diffractions",
        n=support,
        evidence=f"{support} of {votes.size} voting patches on {len(lines)} lines agree within {100 * NEAR:.0f} %;"
        f" error from lines {100 * spread:.1f} %, step {100 * parts[1]:.1f} %, time zero {100 * parts[2]:.1f} %,"
        f" odometer {100 * parts[3]:.1f} %",
    )
    score = curves[np.abs(votes - at) <= NEAR].mean(axis=0)
    return estimate, FocusCurve(velocities, near, score)


def _velocities(low: float, high: float, step: float) -> np.ndarray:
    if not (VELOCITY_RANGE[0] <= low < high <= VELOCITY_RANGE[1]):
        raise ValueError(f"velocities {low:g} to {high:g} m/ns; allowed: ascending within {VELOCITY_RANGE}")
    if not 0.001 <= step <= 0.02:
        raise ValueError(f"step {step:g}; allowed: 0.001 to 0.02 (coarser steps miss the peak)")
    n = math.ceil(math.log(high / low) / math.log1p(step)) + 1
    if n < 8:
        raise ValueError(f"velocities {low:g} to {high:g} m/ns in {n} steps; a peak needs at least 8")
    return np.geomspace(low, high, n)


def _scan(section: xr.DataArray, velocities: np.ndarray, *, patch: tuple[float, float]) -> Iterator[_Line]:
    """Yield the votes of every line of one cube that holds data."""
    along, time = section["along"].values, section["time"].values
    dx, dt = regular_step(along, name="along"), regular_step(time, name="time")
    half = (max(round(patch[0] / dx / 2.0), 1), max(round(patch[1] / dt / 2.0), 1))
    data = np.asarray(section.values, np.float32)
    flags = section.coords["flag"].values if "flag" in section.coords else np.zeros(data.shape[:2], np.uint8)
    gaps = (flags & (FLAG_NONE | FLAG_DEAD)) != 0
    kept = [i for i in range(len(data)) if np.any(data[i]) and not gaps[i].all()]
    if not kept:
        return
    mean_ghz, highest_ghz = _band(data[kept], dt)
    start = int(np.searchsorted(time, DIRECT_PERIODS / mean_ghz))
    tapered = [data[i] * edge_weights(flags[i], taper=EDGE_M / dx)[:, None] for i in kept]
    whole = [_patches((~gaps[i])[:, None].repeat(time.size - start, 1), half) == 1.0 for i in kept]
    if not whole[0].size:
        return
    curves = np.empty((len(kept), velocities.size, *whole[0].shape), np.float32)
    energy = np.zeros((len(kept), *whole[0].shape))
    bright = np.empty(curves.shape, bool)
    shape = (along.size, time.size, dx, dt, float(time[0]))
    for k, velocity in enumerate(velocities):
        table = stolt_table(
            shape,
            velocity_m_per_ns=float(velocity),
            max_dip_deg=MAX_DIP_DEG,
            dip_taper_deg=15.0,
            highest_ghz=highest_ghz,
        )
        for i, line in enumerate(tapered):
            image = stolt_analytic(line, table)[:, start:]
            curves[i, k], second, fourth = _log_kurtosis(image.real**2 + image.imag**2, half)
            energy[i] += second
            bright[i, k] = fourth >= BRIGHT * maximum_filter(fourth, size=3)
    for i in range(len(kept)):
        used = whole[i] & (energy[i] > 1e-4 * energy[i].max())  # the rest is empty: 40 dB below the brightest patch
        yield _votes(curves[i][:, used].T, bright[i][:, used].T, np.log(velocities))


def _log_kurtosis(power: np.ndarray, half: tuple[int, int]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return log of (mean of envelope⁴) / (mean of envelope²)², and both means, for each patch."""
    second = _patches(power, half)
    fourth = _patches(power * power, half)
    tiny = np.finfo(np.float32).tiny
    return np.log(np.maximum(fourth, tiny) / np.maximum(second * second, tiny)), second, fourth


def _patches(values: np.ndarray, half: tuple[int, int]) -> np.ndarray:
    """Return means over patches of two by two half patches, overlapping by half."""
    n, m = values.shape[0] // half[0], values.shape[1] // half[1]
    cells = values[: n * half[0], : m * half[1]].reshape(n, half[0], m, half[1]).mean(axis=(1, 3), dtype=np.float64)
    return (cells[1:, 1:] + cells[:-1, 1:] + cells[1:, :-1] + cells[:-1, :-1]) / 4.0


def _band(data: np.ndarray, dt: float) -> tuple[float, float]:
    """Return mean frequency and the one below which 99.9 % of the power lies, GHz."""
    power = (np.abs(fft.rfft(data, axis=-1)) ** 2).sum(axis=(0, 1), dtype=np.float64)
    frequency = fft.rfftfreq(data.shape[-1], dt)
    share = np.cumsum(power) / power.sum()
    highest = frequency[min(int(np.searchsorted(share, 0.999)), frequency.size - 1)]
    return float(np.average(frequency, weights=power)), float(max(highest, frequency[1]) / 0.875)


def _votes(curves: np.ndarray, bright: np.ndarray, grid: np.ndarray) -> _Line:
    """Return who votes and where; ``curves`` and ``bright`` have dims (patch, velocity)."""
    votes, rows = [], []
    for row, curve in enumerate(curves):
        peaks, found = find_peaks(curve, prominence=PROMINENCE)
        if not peaks.size:
            continue
        peak = int(peaks[np.argmax(found["prominences"])])
        if bright[row, peak]:
            votes.append(_vertex(curve, peak, grid))
            rows.append(row)
    return _Line(np.asarray(votes, float), curves[rows])


def _vertex(curve: np.ndarray, i: int, grid: np.ndarray) -> float:
    """Return where the parabola through three points has its top."""
    if not 0 < i < curve.size - 1:
        return float(grid[i])
    a, b, c = (float(v) for v in curve[i - 1 : i + 2])
    bend = a - 2.0 * b + c
    shift = 0.5 * (a - c) / bend if bend < 0 else 0.0
    return float(grid[i] + np.clip(shift, -0.5, 0.5) * (grid[1] - grid[0]))


def _near(votes: np.ndarray, grid: np.ndarray) -> np.ndarray:
    """Return the votes near each velocity, falling off as a cosine so that the count has one top."""
    apart = np.abs(votes[:, None] - grid) / (2.0 * NEAR)
    return np.where(apart < 1.0, 0.5 + 0.5 * np.cos(np.pi * np.minimum(apart, 1.0)), 0.0).sum(axis=0)


def _winner(votes: np.ndarray, curves: np.ndarray, grid: np.ndarray) -> tuple[float, int]:
    """Return the log velocity with most votes, refined on the voters' mean curve, and how many support it."""
    first = grid[int(np.argmax(_near(votes, grid)))]
    behind = np.abs(votes - first) <= NEAR
    if not behind.any():
        return float(first), 0
    mean = curves[behind].mean(axis=0)
    window = np.flatnonzero(np.abs(grid - first) <= 2.0 * NEAR)
    at = _vertex(mean, int(window[np.argmax(mean[window])]), grid)
    return at, int(np.sum(np.abs(votes - at) <= NEAR))


def _bootstrap(lines: Sequence[_Line], grid: np.ndarray, at: float) -> float:
    """Return the standard deviation of the log velocity when lines (or, for few lines, patches) are drawn anew."""
    rng = np.random.default_rng(20)  # fixed: the same lines give the same error
    lines = [n for n in lines if n.votes.size]
    votes, curves = np.concatenate([n.votes for n in lines]), np.concatenate([n.curves for n in lines])
    place = np.split(np.arange(votes.size), np.cumsum([n.votes.size for n in lines])[:-1])
    if len(lines) < 4:
        place = list(np.arange(votes.size)[:, None])
    found = []
    for _ in range(DRAWS):
        rows = np.concatenate([place[i] for i in rng.integers(0, len(place), len(place))])
        found.append(_winner(votes[rows], curves[rows], grid)[0])
    return float(np.sqrt(np.mean((np.asarray(found) - at) ** 2)))


def _evidence(came: str) -> EvidenceError:
    return EvidenceError(
        Problem(
            came=f"no velocity from focus: {came}",
            allowed=f"at least {LEAST_VOTES} patches that agree, which three clear diffractions give",
            do="use more or longer lines, closer traces, known depths, or give velocity_m_per_ns under [ground]",
            key="ground.velocity_m_per_ns",
        )
    )
