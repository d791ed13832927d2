"""A set of lines as one regular array: traces to their true places, time from time zero.

Positions follow the register: the first and the last trace of a piece lie ON its start and end, in walking order, with
equal spacing between. ``along_scale`` stretches a piece about its start, ``along_shift_m`` moves it towards growing
coordinates, ``reverse`` exchanges start and end. ``dropped`` traces (first, last, both counted, file numbering) keep
their place in the count but count as dead.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import xarray as xr
from scipy.ndimage import median_filter

from planum import schema
from planum.cube import resample
from planum.errors import LineError, Problem
from planum.records import (
    FLAG_CLIPPED,
    FLAG_DEAD,
    FLAG_FILLED,
    FLAG_NONE,
    CubeGeometry,
    LineEntry,
)

__all__ = ["Piece", "Row", "assemble", "assemble_row", "dead_traces", "trace_flags", "trace_positions", "wild_traces"]

FILL_TRACES = 3
"""A run of at most this many dead traces is filled from its two neighbours (it is shorter than the footprint)."""

_FLAT = 3
"""Equal samples in a row at a record's largest value that make a trace clipped."""

_WILD, _BEYOND = 100.0, 1e6
"""40 dB above the usual trace and above what lies around it: a broken sample, not a reflector, which many traces see.
120 dB above the usual trace is beyond any receiver, however many traces hold it."""
_AROUND = 11
"""Traces whose median tells what lies around one: a broken run under half as long does not hide itself."""


class Piece(NamedTuple):
    """One recorded piece of a row; a plain (data, interval_ns, entry) tuple does as well.

    ``data`` (trace, sample) is the whole recording as read: ``entry.first_trace`` to ``entry.last_trace`` are cut out
    of it here. ``x``, ``y`` (trace) in local m replace the register's even spacing; ``flag`` (trace) are the reader's.
    """

    data: np.ndarray
    interval_ns: float
    entry: LineEntry
    x: np.ndarray | None = None
    y: np.ndarray | None = None
    flag: np.ndarray | None = None


@dataclass(frozen=True, eq=False)
class Row:
    """One row of a cube: ``amplitude`` (along, time) f4; ``flag`` u1 and true places ``x``, ``y`` (m) (along)."""

    amplitude: np.ndarray
    flag: np.ndarray
    x: np.ndarray
    y: np.ndarray


def trace_positions(entry: LineEntry) -> tuple[np.ndarray, np.ndarray]:
    """Return local x, y (m) of the traces ``first_trace`` to ``last_trace``, all corrections applied."""
    n = entry.last_trace - entry.first_trace + 1
    start, end = np.array(entry.start, float), np.array(entry.end, float)
    if entry.reverse:
        start, end = end, start
    share = np.linspace(0.0, 1.0, n) if n > 1 else np.array([0.5])
    place = start + (share * entry.along_scale)[:, None] * (end - start)
    axis = int(abs(end[1] - start[1]) > abs(end[0] - start[0]))
    place[:, axis] += entry.along_shift_m
    return place[:, 0], place[:, 1]


def wild_traces(data: np.ndarray) -> np.ndarray:
    """Return which traces (trace, sample) swing so far beyond the others that they hold broken samples, (trace) bool.

    The swing is a trace's largest less its smallest sample, so an offset does not matter. The usual swing is the
    recording's upper quartile: up to a quarter of the traces may be wild, up to three quarters nearly silent. Constant
    and non-finite traces are not called wild, nor is a recording's only trace.
    """
    wild = np.zeros(data.shape[0], bool)
    if data.shape[1] == 0:
        return wild
    with np.errstate(invalid="ignore", over="ignore"):
        high, low = data.max(axis=1).astype(np.float64), data.min(axis=1).astype(np.float64)
        swing = high / 2.0 - low / 2.0  # half of it: the whole might overflow
    live = np.isfinite(swing) & (swing > 0)
    if not live.any():
        return wild
    mine = swing[live]
    usual = float(np.quantile(mine, 0.75, method="lower"))
    around = median_filter(mine, _AROUND, mode="mirror") if mine.size >= _AROUND else usual
    wild[live] = (
        (mine / _WILD > np.maximum(usual, around))
        | (mine / _BEYOND > usual)
        | (mine > np.finfo(np.float32).max)  # what the cube cannot hold
    )
    return wild


def dead_traces(data: np.ndarray) -> np.ndarray:
    """Return which traces (trace, sample) are constant, not finite or wild, (trace) bool."""
    if data.shape[1] == 0:
        return np.ones(data.shape[0], bool)
    with np.errstate(invalid="ignore"):
        high, low = data.max(axis=1), data.min(axis=1)
    return ~(np.isfinite(high) & np.isfinite(low)) | (high == low) | wild_traces(data)


def trace_flags(data: np.ndarray) -> np.ndarray:
    """Return FLAG_DEAD for constant, non-finite or wild traces, FLAG_CLIPPED for those with a flat top.

    A flat top is three or more equal samples in a row at the recording's largest or smallest value: a wave does not
    rest there. Recordings that never leave ±16 counts are too coarsely quantised to tell.
    """
    flag = np.zeros(data.shape[0], np.uint8)
    if data.shape[1] == 0:
        return flag | np.uint8(FLAG_DEAD)
    dead = dead_traces(data)
    live = ~dead
    high, low = data.max(axis=1), data.min(axis=1)
    flag[dead] |= FLAG_DEAD
    if live.any():
        for level in (high[live].max(), low[live].min()):
            if data.dtype.kind in "iu" and abs(int(level)) <= 16:
                continue
            at = data == level
            run = at[:, : -(_FLAT - 1)].copy()
            for k in range(1, _FLAT):
                run &= at[:, k : at.shape[1] - (_FLAT - 1) + k]
            flag[live & run.any(axis=1)] |= FLAG_CLIPPED
    return flag


def assemble_row(
    pieces: Sequence[Piece | tuple[np.ndarray, float, LineEntry]], geometry: CubeGeometry, *, row: int | None = None
) -> Row:
    """Put the pieces of one row on the cube's axes.

    Time zero (its knots interpolated between traces) becomes time 0 by a sub-sample shift; amplitudes keep their
    offset; beyond the record the end value fades to 0. Along the line a windowed sinc, which is a low-pass where the
    axis is coarser than the traces. Runs of at most 3 dead traces are filled linearly and flagged; longer ones are
    flagged dead and hold 0. A place farther than 0.75 trace spacing (0.75 along step when that is coarser) from a
    trace is flagged as not recorded and holds 0. Where pieces overlap the first one that recorded a place is kept,
    unless its trace there is dead.

    Parameters
    ----------
    pieces
        Recordings with their entries, see :class:`Piece`.
    geometry
        Axes of the set.
    row
        Index on the line axis; None takes the first entry's.

    Returns
    -------
    Row

    Raises
    ------
    LineError
        When a recording has fewer traces than its entry says, or no samples.
    """
    own = [Piece(*p) for p in pieces]
    here = row if row is not None else (own[0].entry.row if own else 0)
    along = geometry.along()
    out = np.zeros((geometry.n_along, geometry.n_time), np.float32)
    flag = np.full(geometry.n_along, FLAG_NONE, np.uint8)
    across = np.full(geometry.n_along, geometry.line0_m + here * geometry.line_step_m)
    for piece in own:
        values, marks, side = _one_piece(piece, geometry)
        better = ((marks & FLAG_NONE) == 0) & (
            ((flag & FLAG_NONE) != 0) | (((flag & FLAG_DEAD) != 0) & ((marks & FLAG_DEAD) == 0))
        )
        out[better], flag[better], across[better] = values[better], marks[better], side[better]
    x, y = (along, across) if geometry.direction == "x" else (across, along)
    return Row(out, flag, x.copy(), y.copy())


def assemble(
    rows: Mapping[int, Sequence[Piece | tuple[np.ndarray, float, LineEntry]]], geometry: CubeGeometry
) -> xr.DataArray:
    """Return the cube of a set (schema.cube); rows without pieces are flagged and hold 0.

    Parameters
    ----------
    rows
        Pieces by index on the line axis.
    geometry
        Axes of the set.

    Raises
    ------
    LineError
        From :func:`assemble_row`.
    ValueError
        For a row outside the geometry.
    """
    outside = [r for r in rows if not 0 <= r < geometry.n_lines]
    if outside:
        raise ValueError(f"rows {sorted(outside)} are outside 0..{geometry.n_lines - 1}")
    shape = (geometry.n_lines, geometry.n_along)
    amplitude = np.zeros((*shape, geometry.n_time), np.float32)
    flag = np.full(shape, FLAG_NONE, np.uint8)
    x, y = np.empty(shape), np.empty(shape)
    for r in range(geometry.n_lines):
        done = assemble_row(rows.get(r, ()), geometry, row=r)
        amplitude[r], flag[r], x[r], y[r] = done.amplitude, done.flag, done.x, done.y
    return schema.cube(
        amplitude, line=geometry.lines(), along=geometry.along(), time=geometry.times(), flag=flag, x=x, y=y
    )


def _one_piece(piece: Piece, geometry: CubeGeometry) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Amplitude (along, time), flag and across position (along) of one piece."""
    entry = piece.entry
    first, last = entry.first_trace, entry.last_trace
    if piece.data.ndim != 2 or piece.data.shape[1] < 2 or not 0 <= first <= last < piece.data.shape[0]:
        raise LineError(
            Problem(
                f"line {entry.line} has {piece.data.shape} traces and samples, its row wants traces {first} to {last}",
                allowed="traces that are in the file, two samples or more",
                do="correct first_trace and last_trace in the register",
                file=entry.file,
                line=entry.line,
            )
        )
    chosen = slice(first, last + 1)
    raw = piece.data[chosen]
    marks = trace_flags(raw)
    if piece.flag is not None:
        marks |= piece.flag[chosen].astype(np.uint8)
    for a, b in entry.dropped:
        marks[max(a - first, 0) : max(b - first + 1, 0)] |= FLAG_DEAD
    use = (marks & (FLAG_DEAD | FLAG_NONE)) == 0
    data = np.where(use[:, None], raw, 0).astype(np.float32)
    if entry.gain != 1.0:
        data *= np.float32(entry.gain)
    zero = entry.zero_at(raw.shape[0]) / piece.interval_ns
    position, side, keep = _ordered(piece, chosen, geometry)
    timed = _to_time(data[keep], zero[keep], piece.interval_ns, geometry)
    return _to_along(timed, marks[keep], position, side, geometry)


def _ordered(piece: Piece, chosen: slice, geometry: CubeGeometry) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Along and across positions in ascending order, and the trace indices that have them."""
    x, y = trace_positions(piece.entry)
    if piece.x is not None and piece.y is not None:
        x, y = np.asarray(piece.x[chosen], float), np.asarray(piece.y[chosen], float)
    along, across = (x, y) if geometry.direction == "x" else (y, x)
    keep = np.arange(along.size)
    if along[-1] < along[0]:
        keep = keep[::-1]
    p = along[keep]
    # A standing antenna records the same place again and again, and satellites step back: only traces that move on
    # by a hundredth of the mean spacing count.
    least = abs(p[-1] - p[0]) / max(p.size - 1, 1) * 0.01
    ahead = np.concatenate([[True], p[1:] > np.maximum.accumulate(p)[:-1] + least])
    keep = keep[ahead]
    return along[keep], across[keep], keep


def _to_time(data: np.ndarray, zero: np.ndarray, interval: float, geometry: CubeGeometry) -> np.ndarray:
    """Traces on the geometry's time axis; ``zero`` in samples."""
    ratio = geometry.time_step_ns / interval
    begin = geometry.time0_ns / interval
    if abs(ratio - 1.0) < 1e-9:
        return resample.shift_time(data, zero + begin, 0, geometry.n_time)
    # First to time zero on the record's own step, then one matrix for all traces to the new step.
    margin = 2
    start = int(np.floor(begin)) - margin
    need = int(np.ceil(begin + ratio * (geometry.n_time - 1))) + margin - start + 1
    own = resample.shift_time(data, zero, start, need)
    return np.ascontiguousarray(
        (resample.time_grid(need, begin - start, ratio, geometry.n_time).T @ own.T).T, np.float32
    )


def _to_along(
    data: np.ndarray, marks: np.ndarray, position: np.ndarray, side: np.ndarray, geometry: CubeGeometry
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Traces on the geometry's along axis, with flags and across positions."""
    along = geometry.along()
    data, marks = _fill_short(data, marks, position)
    spacing = float(np.median(np.diff(position))) if position.size > 1 else geometry.along_step_m
    # A hair more than the rule, so that a place exactly on the limit does not hang on the last bit.
    reach = 0.75 * max(spacing, geometry.along_step_m) * (1.0 + 1e-6)
    use = (marks & (FLAG_DEAD | FLAG_NONE)) == 0
    weights, nearest = resample.along_weights(position, use, along, reach=reach)
    out = np.asarray(weights.astype(np.float32) @ data, np.float32)
    flag = np.where(nearest < 0, FLAG_NONE, marks[np.maximum(nearest, 0)]).astype(np.uint8)
    return out, flag, np.interp(along, position, side)


def _fill_short(data: np.ndarray, marks: np.ndarray, position: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Fill runs of at most FILL_TRACES dead traces linearly between their two live neighbours."""
    dead = (marks & FLAG_DEAD) != 0
    if not dead.any():
        return data, marks
    data, marks = data.copy(), marks.copy()
    starts = np.flatnonzero(dead & ~np.concatenate([[False], dead[:-1]]))
    ends = np.flatnonzero(dead & ~np.concatenate([dead[1:], [False]]))
    for a, b in zip(starts, ends, strict=True):
        if a == 0 or b == dead.size - 1 or b - a + 1 > FILL_TRACES:
            continue
        left, right = a - 1, b + 1
        share = ((position[a : b + 1] - position[left]) / (position[right] - position[left]))[:, None]
        data[a : b + 1] = (1.0 - share) * data[left] + share * data[right]
        marks[a : b + 1] = FLAG_FILLED
    return data, marks
