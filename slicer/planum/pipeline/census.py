"""Pass 1: read every recorded line once and keep only facts.

Facts are curves and counts of one recording; nothing here knows the other lines. They are kept in ``work/`` under the
file's hash, so a second run reads no raw file.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import Executor, Future
from dataclasses import replace
from itertools import islice
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from pydantic import ValidationError
from scipy.fft import next_fast_len, rfft
from scipy.ndimage import uniform_filter1d
from scipy.signal import hilbert

from planum.cube.assemble import dead_traces, wild_traces
from planum.errors import LineError, Problem
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions, Recording
from planum.pipeline.store import Store
from planum.records import FLAG_DEAD, Facts, key

__all__ = ["CENSUS_VERSION", "Source", "census", "facts_of", "in_order"]

CENSUS_VERSION = 3
"""Raised when the numbers change, so that kept facts are made again."""

MOST_TRACES = 600
"""Curves are medians over at most this many traces, evenly spread: their error is far below what they are used for."""

Progress = Callable[[str, int, int], None]
T = TypeVar("T")
R = TypeVar("R")


class Source:
    """One recorded line on disk: its path, its name in messages and how the survey says it is read."""

    def __init__(self, path: Path, name: str, options: ReadOptions) -> None:
        self.path, self.name, self.options = path, name, options

    def read(self) -> Recording:
        """Read the traces.

        Raises
        ------
        LineError
            When the file cannot be used; its problems name the file as the survey does.
        """
        try:
            return read_line(self.path, self.options)
        except LineError as fault:
            raise LineError([replace(p, file=self.name) for p in fault.problems]) from fault
        except OSError as fault:
            problem = Problem(came=f"cannot be read ({fault.strerror or fault})", do="copy it again", file=self.name)
            raise LineError(problem) from fault

    def facts_key(self, file_id: str) -> str:
        """Return what the facts depend on, hashed."""
        options = {k: v for k, v in vars(self.options).items() if k != "layout"}
        return key([CENSUS_VERSION, file_id, options, repr(self.options.layout)])


def census(
    sources: Sequence[Source], store: Store, *, executor: Executor, progress: Progress | None = None
) -> list[Facts | Problem]:
    """Return the facts of every source, or what is wrong with it, in order."""

    def one(source: Source) -> Facts | Problem:
        try:
            file_id = store.file_id(source.path, source.name)
            kept = _kept(store.load_json("census", source.facts_key(file_id)))
            if kept is not None:
                return kept
            facts = facts_of(source.read(), file_id=file_id, centre_ghz=source.options.centre_frequency_ghz or 0.4)
        except LineError as fault:
            return replace(fault.problems[0], file=source.name, severity="warning")
        except OSError as fault:
            return Problem(
                came=f"cannot be read ({fault.strerror or fault})",
                do="copy it again",
                file=source.name,
                severity="warning",
            )
        store.save_json("census", source.facts_key(file_id), facts.model_dump(mode="json"))
        return facts

    found: list[Facts | Problem] = []
    for answer in in_order(executor, one, sources):
        found.append(answer)
        if progress:
            progress("reading lines", len(found), len(sources))
    store.remember()
    return found


def _kept(stored: Any | None) -> Facts | None:
    """Facts from the cache; what is no record of facts counts as missing."""
    try:
        return None if stored is None else Facts.model_validate(stored)
    except ValidationError:
        return None


def in_order(executor: Executor, work: Callable[[T], R], items: Iterable[T], *, ahead: int = 6) -> Iterator[R]:
    """Yield ``work(item)`` in the items' order, with at most ``ahead`` under way: memory stays flat."""
    source = iter(items)
    waiting: list[Future[R]] = [executor.submit(work, item) for item in islice(source, ahead)]
    try:
        while waiting:
            result = waiting.pop(0).result()
            waiting += [executor.submit(work, item) for item in islice(source, 1)]
            yield result
    finally:
        for future in waiting:
            future.cancel()


def facts_of(recording: Recording, *, file_id: str, centre_ghz: float) -> Facts:
    """Return what the census keeps of one recording.

    Parameters
    ----------
    recording : Recording
        Traces (trace, sample) as recorded.
    file_id : str
        sha256 of the file.
    centre_ghz : float
        Nominal centre frequency: sets the width of the smoothing windows only.

    Raises
    ------
    LineError
        When no trace is alive.
    """
    raw, dt = recording.data, recording.interval_ns
    live = ~dead_traces(raw) & ((recording.flag & FLAG_DEAD) == 0)
    if not live.any():
        raise LineError(Problem(came="every trace is constant", do="record the line again or leave it out"))
    full = float(np.iinfo(raw.dtype).max) if np.issubdtype(raw.dtype, np.integer) else 0.0
    clipped = np.zeros(len(raw), bool)
    if full:
        clipped = (np.abs(raw.astype(np.float32)) >= full - 0.5).sum(axis=1) >= 2
    chosen = np.flatnonzero(live)
    chosen = chosen[:: max(1, -(-len(chosen) // MOST_TRACES))]
    traces = np.asarray(raw[chosen], np.float32)
    typical = _midmean(traces)
    pick, direct = _direct_wave(typical, dt, centre_ghz)
    spread = _pick_spread(traces, dt, centre_ghz, pick)
    period = max(3, round(1.0 / centre_ghz / dt))
    rest = traces - typical
    rest -= uniform_filter1d(rest, 2 * period + 1, axis=1, mode="nearest")
    envelope = np.median(_modulus(rest), axis=0)
    at = round(pick / dt)
    ground = slice(min(at + 2 * period, raw.shape[1] - 8), max(at + 3 * period, int(0.75 * raw.shape[1])))
    spectrum, step = _spectrum(rest[:, ground], dt)
    around = slice(max(0, at - period), at + period + 1)
    return Facts(
        file_id=file_id,
        n_traces=len(raw),
        n_samples=raw.shape[1],
        interval_ns=dt,
        interval_origin=recording.interval_origin,
        dtype=str(raw.dtype),
        full_scale=full,
        largest=float(np.abs(traces).max()),
        zero_pick_ns=pick,
        zero_spread_ns=spread,
        zero_clipped=bool(full and np.abs(typical[around]).max(initial=0.0) >= 0.98 * full),
        dead=tuple(np.flatnonzero(~live).tolist()),
        clipped=tuple(np.flatnonzero(clipped).tolist()),
        typical=_rounded(typical),
        envelope=_rounded(envelope),
        spectrum=_rounded(spectrum),
        spectrum_step_ghz=step,
        noise=float(np.median(envelope[-max(4, len(envelope) // 10) :])),
        direct=direct,
        first_xy=_place(recording, 0),
        last_xy=_place(recording, -1),
        bend_m=_bend(recording),
        header=_plain(recording.header),
        problems=tuple(p.to_dict() for p in (*recording.problems, *_wild(raw))),
    )


def _wild(raw: np.ndarray) -> tuple[Problem, ...]:
    """Say which traces were left out because their samples cannot be true."""
    wild = np.flatnonzero(wild_traces(raw))
    if not wild.size:
        return ()
    return (
        Problem(
            came=f"{wild.size} trace(s) hold samples over a hundred times beyond all others, first in trace {wild[0]}",
            allowed="they are taken as dead",
            do="copy the file again; if it stays so, ask the recorder's service",
            severity="warning",
        ),
    )


def _midmean(traces: np.ndarray) -> np.ndarray:
    """Mean of the middle half at every sample: as robust as a median here, and free of the file's rounding steps."""
    n = len(traces)
    if n < 4:
        return np.asarray(np.median(traces, axis=0), float)
    part = np.partition(traces, (n // 4, n - n // 4 - 1), axis=0)
    return np.asarray(part[n // 4 : n - n // 4].mean(axis=0, dtype=float))


def _modulus(traces: np.ndarray) -> np.ndarray:
    n = traces.shape[-1]
    return np.abs(hilbert(traces, N=next_fast_len(2 * n), axis=-1)[..., :n])


def _direct_wave(trace: np.ndarray, dt: float, centre_ghz: float) -> tuple[float, float]:
    """Return time (ns from sample 0) and height of the direct wave's envelope maximum.

    The direct wave is the first envelope maximum that reaches half of the largest one in the first half of the record;
    the time is refined by a parabola through three samples.
    """
    smooth = trace - uniform_filter1d(trace, 2 * max(3, round(1.0 / centre_ghz / dt)) + 1, mode="nearest")
    envelope = _modulus(smooth)
    early = envelope[: max(8, len(envelope) // 2)]
    peaks = np.flatnonzero((early[1:-1] >= early[:-2]) & (early[1:-1] > early[2:])) + 1
    strong = peaks[early[peaks] >= 0.5 * early.max()] if peaks.size else peaks
    at = int(strong[0]) if strong.size else int(np.argmax(early))
    return (at + _parabola(envelope, at)) * dt, float(envelope[at])


def _parabola(curve: np.ndarray, at: int) -> float:
    """Offset of the vertex of the parabola through three samples, in samples."""
    if not 0 < at < len(curve) - 1:
        return 0.0
    left, mid, right = curve[at - 1 : at + 2]
    bend = left - 2.0 * mid + right
    return float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend else 0.0


def _pick_spread(traces: np.ndarray, dt: float, centre_ghz: float, pick: float) -> float:
    """Robust standard deviation of the pick along the line, from means of 20 traces."""
    blocks = [traces[i : i + 20].mean(axis=0, dtype=float) for i in range(0, len(traces) - 9, 20)]
    if len(blocks) < 2:
        return 0.0
    half = 1.0 / centre_ghz
    picks = np.array([_direct_wave(b, dt, centre_ghz)[0] for b in blocks])
    picks = picks[np.abs(picks - pick) < half]
    return 0.0 if picks.size < 2 else float(1.4826 * np.median(np.abs(picks - np.median(picks))))


def _spectrum(traces: np.ndarray, dt: float) -> tuple[np.ndarray, float]:
    """Median amplitude spectrum of tapered traces, and its frequency step in GHz: no single trace moves it."""
    n = next_fast_len(max(256, traces.shape[1]), real=True)
    taper = np.hanning(traces.shape[1] + 2)[1:-1].astype(np.float32)
    return np.median(np.abs(rfft(traces * taper, n=n, axis=1)), axis=0), 1.0 / (n * dt)


def _rounded(curve: np.ndarray) -> tuple[float, ...]:
    """Seven digits: what float32 holds, and short JSON."""
    return tuple(float(f"{v:.7g}") for v in curve)


def _place(recording: Recording, trace: int) -> tuple[float, float] | None:
    if recording.x is None or recording.y is None:
        return None
    return float(recording.x[trace]), float(recording.y[trace])


def _bend(recording: Recording) -> float:
    """Largest distance of a header position from the straight line between the first and the last, m."""
    if recording.x is None or recording.y is None or len(recording.x) < 3:
        return 0.0
    place = np.asarray(recording.x, float) + 1j * np.asarray(recording.y, float)
    way = place[-1] - place[0]
    return float(np.max(np.abs(((place - place[0]) * np.conj(way)).imag)) / abs(way)) if way else 0.0


def _plain(header: dict[str, Any]) -> dict[str, Any]:
    """Header facts that fit a record: plain, finite, without the textual header."""
    plain = {k: v for k, v in header.items() if isinstance(v, (str, int, float, bool)) and k != "text"}
    return {k: v for k, v in plain.items() if not isinstance(v, float) or np.isfinite(v)}
