"""What a folder of line files says of itself, before anybody has written a survey down."""

from __future__ import annotations

import math
import statistics
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from planum.constants import SAMPLES_PER_PERIOD_LEAST
from planum.cube.geometry import OBLIQUE
from planum.errors import LineError, Problem, SurveyError
from planum.lines.interval import NO_INTERVAL
from planum.lines.reading import parts_in, read_line
from planum.lines.recording import IntervalUnit, ReadOptions, Recording
from planum.outputs.look import amplitude_spectrum, thinned
from planum.survey.safety import natural_key

__all__ = ["Found", "FoundLine", "line_files", "look_through"]

Progress = Callable[[str, int, int], None]
Point = tuple[float, float]

NOMINAL_MHZ = (25, 50, 100, 200, 250, 300, 400, 500, 600, 800, 900, 1000, 1200, 1500, 2000, 2500)
"""Round centre frequencies of antennas (common practice)."""
LOWERED = 0.9
"""Strongest over nominal frequency: the ground takes more from the high frequencies (common practice, roughly)."""
_SPECTRA = 5
_FAR_M = 10_000.0
"""Coordinates beyond this are map coordinates; the drafted local frame then starts near the first line."""
_STRAY = 0.2
"""Line spacings by which the traces of one line may wander from its straight line for it to count as straight."""


@dataclass(frozen=True)
class FoundLine:
    """One recording in the folder; ``start`` and ``end`` are header coordinates in m, walking order, if it has any."""

    file: Path
    part: int | None
    n_traces: int
    n_samples: int
    interval_ns: float
    start: Point | None = None
    end: Point | None = None
    stray_m: float = 0.0


@dataclass(frozen=True)
class Found:
    """All recordings in natural order of their names, and what can be read off them.

    Parameters
    ----------
    lines : tuple of FoundLine
        Recordings; several of one file where it holds several.
    problems : tuple of Problem
        Files left out, and what is worth telling.
    units : tuple of str
        Units of the interval field that give a believable window in every file; empty when the files say the interval
        themselves or a person gave it.
    given_interval_ns : float or None
        The interval a person gave.
    strongest_mhz : float
        Frequency of the largest mean amplitude, the mean trace removed.
    placed : tuple of (start, end) or None
        Every line straight and parallel to local x, m, from the header coordinates; None when they do not allow it.
    """

    lines: tuple[FoundLine, ...]
    problems: tuple[Problem, ...]
    units: tuple[str, ...]
    given_interval_ns: float | None
    strongest_mhz: float
    placed: tuple[tuple[Point, Point], ...] | None = None

    @property
    def interval_ns(self) -> float:
        """Median sample interval, ns."""
        return float(np.median([line.interval_ns for line in self.lines]))

    @property
    def window_ns(self) -> float:
        """Median recording window, ns."""
        return float(np.median([line.interval_ns * line.n_samples for line in self.lines]))

    @property
    def n_traces(self) -> int:
        """Median number of traces of a line; of two middle ones the larger, so that it is some line's own."""
        return statistics.median_high(line.n_traces for line in self.lines)

    @property
    def nominal_mhz(self) -> float:
        """The usual centre frequency that fits the strongest one, sampled at least four times a period."""
        most = 1e3 / (SAMPLES_PER_PERIOD_LEAST * self.interval_ns)
        fit: list[float] = [f for f in NOMINAL_MHZ if f <= most] or [max(10.0, math.floor(most))]
        return float(min(fit, key=lambda f: abs(math.log(LOWERED * f / max(self.strongest_mhz, 1.0)))))

    @property
    def several_per_file(self) -> bool:
        """Whether some file holds more than one recording."""
        return any(line.part is not None for line in self.lines)

    def spacing_m(self) -> float | None:
        """Median distance between neighbouring lines from header coordinates, m; None without them."""
        if self.placed is None:
            return None
        across = np.unique(np.round([start[1] for start, _ in self.placed], 2))
        return float(np.median(np.diff(across))) if across.size > 1 else None

    def length_m(self) -> float | None:
        """Median length of a line from header coordinates, m; None without them."""
        return None if self.placed is None else float(np.median([abs(b[0] - a[0]) for a, b in self.placed]))


def line_files(folder: Path) -> tuple[list[Path], list[Problem]]:
    """Return the files that may be lines, in natural order, and notes on those left out.

    Hidden files and folders are passed over; of several suffixes the commonest wins, so that a field sheet beside the
    lines is not taken for one.

    Raises
    ------
    SurveyError
        When the folder holds no files.
    """
    files = [p for p in folder.iterdir() if p.is_file() and not p.name.startswith(".")]
    mine = {"survey.toml", "lines.csv", "control.csv"}
    files = sorted((p for p in files if p.name.lower() not in mine), key=lambda p: natural_key(p.name))
    if not files:
        raise SurveyError(
            Problem("holds no files", "line files: SEG-Y, NetCDF, delimited text", "name their folder", str(folder))
        )
    counts = Counter(p.suffix.lower() for p in files)
    best = max(counts, key=lambda s: (counts[s], s in {".sgy", ".segy"}))
    left = [p for p in files if p.suffix.lower() != best]
    notes = [Problem(f"left out: most line files here end in {best!r}", file=p.name, severity="note") for p in left]
    return [p for p in files if p.suffix.lower() == best], notes


def look_through(folder: Path, *, interval_ns: float | None = None, progress: Progress | None = None) -> Found:
    """Read every line file of a folder once and return what they say.

    Parameters
    ----------
    folder : Path
        The folder of line files.
    interval_ns : float, optional
        Sample interval, ns, where a person knows it; beats the files.
    progress : callable, optional
        Called with stage, done, total.

    Raises
    ------
    SurveyError
        When no file can be read, or the files need different units of their interval field.
    """
    files, problems = line_files(folder)
    lines: list[FoundLine] = []
    units: set[str] | None = None
    spectra: list[tuple[np.ndarray, np.ndarray]] = []
    for done, file in enumerate(files, 1):
        try:
            fit, found, recording = _read(file, interval_ns)
        except LineError as error:
            problems += [replace(p, severity="warning", came=f"left out: {p.came}") for p in error.problems]
            continue
        finally:
            if progress:
                progress("reading lines", done, len(files))
        if units is not None and units != fit and not (units := units & fit):
            raise SurveyError(
                Problem(
                    "this file's sample interval has another unit than those before it",
                    "one unit per radar",
                    "put lines of different instruments into folders of their own",
                    file.name,
                )
            )
        units = fit if units is None else units
        lines += found
        if len(spectra) < _SPECTRA:
            spectra.append(_spectrum(recording))
    if not lines:
        raise _nothing(folder, len(files), problems)
    placed, why = _placed(lines)
    if why:
        problems.append(Problem(why, do="places are drafted from spacing and length instead", severity="note"))
    strongest = float(np.median([f[np.argmax(a)] for f, a in spectra])) * 1e3
    return Found(tuple(lines), tuple(problems), tuple(sorted(units or ())), interval_ns, strongest, placed)


def _nothing(folder: Path, count: int, problems: Sequence[Problem]) -> SurveyError:
    """Return why no file can be used; an interval that all or some of them lack is told once, first."""
    silent = [p for p in problems if p.came == f"left out: {NO_INTERVAL}"]
    if not silent:
        return SurveyError([Problem("no line file here can be read", file=str(folder)), *problems])
    of = "" if len(silent) == count else f" of {count}"
    first = Problem(
        f"the time between samples is missing: the interval field of {len(silent)}{of} line file(s) is empty",
        do="give it with --interval-ns, in ns: the recording window over the number of samples",
        file=str(folder),
        key="sample_interval_ns",
    )
    return SurveyError([first, *(p for p in problems if p not in silent)])


def _read(file: Path, interval_ns: float | None) -> tuple[set[str], list[FoundLine], Recording]:
    """Units of the interval field that fit, the recordings of a file, and the first of them as read."""
    options = ReadOptions(interval_ns=interval_ns, header_positions=True)
    count = parts_in(file, options)
    if count > 1:
        options = replace(options, part=0, split="counter")
    fit: set[str] = set()
    try:
        first = read_line(file, options)
    except LineError as silent:
        if interval_ns is not None:
            raise
        tried = {unit: _attempt(file, replace(options, interval_unit=unit)) for unit in _UNITS}
        fitting: dict[IntervalUnit, Recording] = {unit: r for unit, r in tried.items() if r is not None}
        if not fitting:
            raise silent from None
        unit = next(iter(fitting))
        first, fit = fitting[unit], set(fitting)
        options = replace(options, interval_unit=unit)
    found = [_line(file, first, 0 if count > 1 else None)]
    found += [_line(file, read_line(file, replace(options, part=part)), part) for part in range(1, count)]
    return fit, found, first


_UNITS: tuple[IntervalUnit, ...] = ("ps", "ns", "us")


def _attempt(file: Path, options: ReadOptions) -> Recording | None:
    """Read under one unit; None when the window it gives cannot be believed."""
    try:
        return read_line(file, options)
    except LineError:
        return None


def _line(file: Path, recording: Recording, part: int | None) -> FoundLine:
    n_traces, n_samples = recording.data.shape
    plain = FoundLine(file, part, n_traces, n_samples, recording.interval_ns)
    x, y = recording.x, recording.y
    if x is None or y is None or n_traces < 2 or not (np.isfinite(x).all() and np.isfinite(y).all()):
        return plain
    start, end = (float(x[0]), float(y[0])), (float(x[-1]), float(y[-1]))
    length = math.dist(start, end)
    if length == 0:
        return plain
    off = np.abs((x - x[0]) * (end[1] - start[1]) - (y - y[0]) * (end[0] - start[0])) / length
    return replace(plain, start=start, end=end, stray_m=float(off.max()))


def _spectrum(recording: Recording) -> tuple[np.ndarray, np.ndarray]:
    """Mean amplitude spectrum with the mean trace removed: the direct wave is no measure of the ground."""
    data = thinned(recording.data, 500).astype(float)
    rest = data - data.mean(axis=0)
    frequency, spectrum = amplitude_spectrum(rest if rest.any() else data, recording.interval_ns)
    return frequency, np.convolve(spectrum, np.full(5, 0.2), mode="same")


def _placed(lines: Sequence[FoundLine]) -> tuple[tuple[tuple[Point, Point], ...] | None, str]:
    """Return starts and ends in a local frame with x along the lines, or why there is none ("" without coordinates)."""
    if any(line.start is None or line.end is None for line in lines):
        some = any(line.start is not None for line in lines)
        return None, "only some of the files carry coordinates" if some else ""
    start = np.array([line.start for line in lines], float)
    end = np.array([line.end for line in lines], float)
    way = end - start
    # twice the angle: a line walked back counts as the same direction
    angle = np.arctan2(way[:, 1], way[:, 0])
    mean = 0.5 * math.atan2(np.sin(2 * angle).sum(), np.cos(2 * angle).sum())
    if np.abs(np.sin(angle - mean)).max() > OBLIQUE:
        return None, "the files carry coordinates, but the lines are not parallel"
    if abs(math.sin(2 * mean)) < 2 * OBLIQUE / 10 and abs(math.cos(mean)) > 0.5:
        mean = 0.0  # already along x: the coordinates stay as they are
    far = max(np.abs(start).max(), np.abs(end).max()) > _FAR_M
    origin = start[0] if far or mean else np.zeros(2)
    turn = np.array([[math.cos(mean), math.sin(mean)], [-math.sin(mean), math.cos(mean)]])
    a, b = (start - origin) @ turn.T, (end - origin) @ turn.T
    across = (a[:, 1] + b[:, 1]) / 2
    steps = np.diff(np.unique(np.round(across, 2)))
    if steps.size and max(line.stray_m for line in lines) > _STRAY * float(np.median(steps)):
        return None, "the files carry coordinates, but lines wander by more than a fifth of their spacing"
    if steps.size < len(lines) - 1:
        return None, "the files carry coordinates, but some lines lie on each other"
    return tuple(
        ((round(float(p[0]), 3), round(float(c), 3)), (round(float(q[0]), 3), round(float(c), 3)))
        for p, q, c in zip(a, b, across, strict=True)
    ), ""
