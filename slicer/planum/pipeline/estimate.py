"""Numbers learned from all lines of a set together: time zero, balance, typical curves, velocity.

Times in ns, lengths in m, frequencies in GHz. Each number comes with its error and where it is from.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from planum import schema
from planum.constants import SPEED_OF_LIGHT
from planum.cube.assemble import assemble_row
from planum.errors import EvidenceError, Problem
from planum.evidence.focus import focus_scan
from planum.pipeline.census import Source
from planum.records import CubeGeometry, Estimate, Facts, LineEntry, SetFacts, Velocity
from planum.survey.config import Radar
from planum.survey.folder import RegisterRow

__all__ = [
    "Line",
    "TimeZero",
    "balance",
    "given_velocity",
    "scanned_velocity",
    "set_facts",
    "time_zero",
    "typical_traces",
]

FLOOR_ZERO_NS = 0.1
"""A line's own time zero is used when it differs by more than this and by three of its errors: clean lines keep one."""
LOUDEST_BALANCE = 10 ** (3.0 / 20.0)
"""Line balance stays within 3 dB."""
FLOOR_BALANCE = 10 ** (0.1 / 20.0)
BOOK_VELOCITY = (0.10, 0.03)
"""m/ns, 1 sigma: dry sand 0.15 to saturated ground 0.06 (common practice), used with a warning when nothing else is
known."""
GIVEN_ERROR = 0.05
"""Relative 1-sigma error assumed for a typed velocity that states none."""
ALONG_ERROR = 0.005
"""Relative 1-sigma error of distances along a line: a well-kept odometer or tape (common practice)."""
SCAN_LINES = 12


@dataclass(frozen=True)
class Line:
    """One register row, where its traces are, and the facts of its file.

    ``header`` says that the row's start and end were taken from the file's own positions.
    """

    row: RegisterRow
    source: Source
    facts: Facts
    header: bool = False


@dataclass(frozen=True)
class TimeZero:
    """Time zero of every line, ns from sample 0, the set's with its error, and what was noticed."""

    zeros: tuple[float, ...]
    estimate: Estimate
    problems: tuple[Problem, ...] = ()

    def only(self, keep: Sequence[int]) -> TimeZero:
        """Return it for some of the lines."""
        return replace(self, zeros=tuple(self.zeros[i] for i in keep))


def time_zero(lines: Sequence[Line], radar: Radar) -> TimeZero:
    """Return each line's time zero and the set's, with the error of the convention.

    Time zero is the envelope maximum of the direct wave less the air path, separation over the speed of light: pulse
    delay then cancels in envelope slices. The direct wave is the sum of an air and a ground wave, so the maximum lies
    somewhere between the two arrivals; a quarter of their distance at 0.1 m/ns is the 1-sigma error. A direct wave that
    is clipped adds a quarter period, one that cannot be told from the start of the record or from noise half a period,
    and the scatter between lines is added too. A line more than half a period from the others keeps the set's time
    zero and is told: that is another wave, not a drift.
    """
    air = radar.antenna_separation_m / SPEED_OF_LIGHT
    error = 0.25 * (radar.antenna_separation_m / 0.1 - air)
    if radar.time_zero_ns is not None:
        given = radar.time_zero_ns
        estimate = Estimate(value=given, error=error, unit="ns", origin="given", method="typed in the survey")
        return TimeZero((given,) * len(lines), estimate)
    picks = np.array([line.facts.zero_pick_ns - air for line in lines])
    common, period = float(np.median(picks)), 1e3 / radar.centre_frequency_mhz
    problems, own = [], []
    for pick, line in zip(picks, lines, strict=True):
        off = abs(pick - common)
        spread = line.facts.zero_spread_ns / math.sqrt(max(1.0, line.facts.n_traces / 20.0))
        if off > 0.5 * period:
            problems.append(_late(line, float(pick), common))
        own.append(pick if 0.5 * period >= off > max(FLOOR_ZERO_NS, 3.0 * spread) else common)
    near = np.abs(picks - common) <= 0.5 * period
    scatter = float(np.std(picks[near])) if near.sum() > 1 else 0.0
    clipped = sum(line.facts.zero_clipped for line in lines)
    unsure = sum(_unsure(line.facts, period) for line in lines)
    if unsure * 2 >= len(lines):
        problems.append(_no_direct_wave(unsure, len(lines), radar))
    widened = [0.25 * period] * (clipped * 2 >= len(lines)) + [0.5 * period] * (unsure * 2 >= len(lines))
    estimate = Estimate(
        value=round(common, 4),
        error=round(math.hypot(error, scatter / math.sqrt(len(lines)), *widened), 4),
        unit="ns",
        origin="measured",
        method="envelope maximum of the direct wave less separation / c",
        n=len(lines),
        evidence=f"direct wave clipped on {clipped} of {len(lines)} lines" if clipped else "",
    )
    return TimeZero(tuple(round(float(z), 4) for z in own), estimate, tuple(problems))


def _unsure(facts: Facts, period: float) -> bool:
    """Whether the pick may be no direct wave: at the very start of the record, or hardly above the noise."""
    return facts.zero_pick_ns < 0.5 * period or facts.direct < 4.0 * facts.noise


def _late(line: Line, pick: float, common: float) -> Problem:
    return Problem(
        came=f"the first strong wave comes at {pick:.2f} ns, on the other lines at {common:.2f} ns",
        allowed="half a period of difference",
        do="look at the line: its recording may have started late; the set's time zero was used",
        file=line.row.file,
        line=line.row.line,
        severity="warning",
    )


def _no_direct_wave(unsure: int, n: int, radar: Radar) -> Problem:
    return Problem(
        came=f"no direct wave can be told from the start of the record or from noise on {unsure} of {n} lines",
        allowed="a direct wave to count time from",
        do="give time_zero_ns; until then every depth may be off by a quarter of a wavelength or more",
        file="survey.toml",
        key=f"radar[{radar.name}].time_zero_ns",
        severity="warning",
    )


def balance(lines: Sequence[Line]) -> list[float]:
    """Return one gain per line that brings its direct wave to the set's median, within 3 dB.

    A clipped direct wave says nothing about gain: such lines are compared by their late noise.
    """
    by_noise = any(line.facts.zero_clipped for line in lines)
    level = np.array([line.facts.noise if by_noise else line.facts.direct for line in lines])
    usable = level > 0
    if usable.sum() < 3:
        return [1.0] * len(lines)
    factor = np.where(usable, np.median(level[usable]) / np.where(usable, level, 1.0), 1.0)
    factor = np.clip(factor, 1.0 / LOUDEST_BALANCE, LOUDEST_BALANCE)
    quiet = (factor < FLOOR_BALANCE) & (factor > 1.0 / FLOOR_BALANCE)
    return [round(float(f), 6) for f in np.where(quiet, 1.0, factor)]


def typical_traces(entries: Sequence[LineEntry], facts: Sequence[Facts], geometry: CubeGeometry) -> xr.DataArray:
    """Return the lines' typical traces on the cube's time axis: dims (line, along=1, time).

    They go through the same placing and shifting as traces do, so that subtracting them later leaves nothing over.
    """
    one = geometry.model_copy(update={"along0_m": 0.0, "n_along": 2})
    end = (one.along_step_m, 0.0) if one.direction == "x" else (0.0, one.along_step_m)
    rows = []
    for entry, fact in zip(entries, facts, strict=True):
        zero = float(np.median([ns for _, ns in entry.zero_ns]))
        alone = entry.model_copy(
            update={"first_trace": 0, "last_trace": 1, "start": (0.0, 0.0), "end": end, "zero_ns": ((0, zero),),
                    "dropped": (), "along_shift_m": 0.0, "along_scale": 1.0, "header_positions": False}
        )  # fmt: skip
        trace = np.asarray(fact.typical, np.float32)
        rows.append(assemble_row([(np.stack([trace, trace]), fact.interval_ns, alone)], one).amplitude[0])
    across = np.array([_across(e, geometry) for e in entries])
    order = np.argsort(across, kind="stable")
    at = across[order] + 1e-6 * np.arange(len(order))  # pieces of one row stand apart by less than anything surveyed
    return schema.cube(np.stack(rows)[order][:, None], line=at, along=np.zeros(1), time=geometry.times())


def _across(entry: LineEntry, geometry: CubeGeometry) -> float:
    side = 1 if geometry.direction == "x" else 0
    return (entry.start[side] + entry.end[side]) / 2.0


def set_facts(
    entries: Sequence[LineEntry],
    facts: Sequence[Facts],
    geometry: CubeGeometry,
    radar: Radar,
    velocity: Velocity,
    *,
    pool: Sequence[tuple[LineEntry, Facts]] = (),
) -> SetFacts:
    """Return what the recipe's steps may learn from.

    Envelope, noise and spectrum come from ``pool``, all lines of the site recorded with this radar, so that one gain
    and one band serve all its sets; typical traces from the set's own lines.
    """
    times = geometry.times()
    every = pool or tuple(zip(entries, facts, strict=True))
    curves, noises = [], []
    for entry, fact in every:
        at = fact.interval_ns * np.arange(fact.n_samples)
        zero = float(np.median([ns for _, ns in entry.zero_ns]))
        curves.append(entry.gain * np.interp(times + zero, at, fact.envelope))
        noises.append(entry.gain * fact.noise)
    step = float(np.median([f.spectrum_step_ghz for _, f in every]))
    axis = step * np.arange(min(len(f.spectrum) for _, f in every))
    spectra = [np.interp(axis, f.spectrum_step_ghz * np.arange(len(f.spectrum)), f.spectrum) for _, f in every]
    return SetFacts(
        geometry=geometry,
        centre_frequency_ghz=radar.centre_frequency_mhz / 1e3,
        separation_m=radar.antenna_separation_m,
        velocity=velocity,
        typical=typical_traces(entries, facts, geometry),
        envelope=np.median(curves, axis=0),
        noise=float(np.median(noises)),
        spectrum=np.median(spectra, axis=0),
        spectrum_step_ghz=step,
    )


def given_velocity(value: float, error: float | None) -> Velocity:
    """Return the velocity typed in the survey, with its typed error or five per cent."""
    method = "typed in the survey" if error is not None else "typed in the survey; 5 % error assumed, none was stated"
    return Velocity.constant(value, GIVEN_ERROR * value if error is None else error, origin="given", method=method)


def scanned_velocity(
    sections: Sequence[xr.DataArray], *, zero_error_ns: float
) -> tuple[Velocity, dict[str, list[float]], Problem | None]:
    """Return the velocity at which migrated sections are sharpest, its curve, and a warning when there is none.

    Parameters
    ----------
    sections : sequence of DataArray
        Conditioned, unmigrated cubes of one row each.
    """
    try:
        found, curve = focus_scan(sections, allowance=(zero_error_ns, ALONG_ERROR))
    except EvidenceError as fault:
        value, error = BOOK_VELOCITY
        problem = Problem(
            came=f"the data do not tell the velocity ({fault.problems[0].came}); {value} ± {error} m/ns is a guess",
            allowed="a velocity measured on the site",
            do="give [ground] velocity_m_per_ns from a known depth; until then depths may be a third off",
            key="ground.velocity_m_per_ns",
            severity="warning",
        )
        return Velocity.constant(value, error, origin="book", method="range of common ground"), {}, problem
    velocity = Velocity.constant(found.value, found.error, origin="measured", method=found.method)
    return velocity, {name: [float(v) for v in values] for name, values in vars(curve).items()}, None
