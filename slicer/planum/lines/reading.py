"""Picks the reader for a line file by entry point, reads it, and checks what came."""

from __future__ import annotations

import functools
import math
import warnings
from dataclasses import replace
from pathlib import Path
from typing import Any, Protocol, runtime_checkable

import numpy as np
import xarray as xr

from planum import plugins
from planum.errors import LineError, PlanumWarning, Problem, nearest, printable
from planum.lines.interval import check_interval
from planum.lines.recording import ReadOptions, Recording
from planum.records import FLAG_DEAD

__all__ = ["LineReader", "line_readers", "open_line", "parts_in", "read_line"]

GROUP = "planum.line_readers"
"""Entry-point group of line readers."""

_HEAD = 4096  # enough for the file headers and the first trace header of the formats read here


@runtime_checkable
class LineReader(Protocol):
    """A reader of line files. A reader of files that hold several lines also has ``parts(path, options) -> int``."""

    name: str
    suffixes: tuple[str, ...]

    def claims(self, path: Path, head: bytes) -> bool:
        """Tell whether this reader knows the file, given its first bytes."""
        ...

    def read(self, path: Path, options: ReadOptions) -> Recording:
        """Return the recording, or raise LineError."""
        ...


@functools.lru_cache(maxsize=1)
def line_readers() -> dict[str, LineReader]:
    """Return the installed readers by name; one that cannot be loaded warns (PlanumWarning) and is left out.

    The result is kept for the life of the process.
    """
    return plugins.load(GROUP, LineReader, "line reader")  # type: ignore[type-abstract]


def read_line(path: Path, options: ReadOptions = ReadOptions()) -> Recording:  # noqa: B008  (frozen)
    """Read one recorded line.

    Parameters
    ----------
    path : Path
        The file.
    options : ReadOptions
        What the survey says about it.

    Returns
    -------
    Recording
        Data (trace, sample) with the interval in ns; traces that are constant or not finite are flagged dead, the
        latter hold zeros.

    Raises
    ------
    LineError
        When the file cannot be read, no reader knows it, its interval or its unit is not known, the window is outside
        5 ns to 5 µs, or a period of the centre frequency has fewer than 4 samples.
    """
    path = Path(path)
    _check_options(options, path.name)
    name, reader = _pick(path, options)
    recording = _guarded(name, path, lambda: reader.read(path, options))
    recording = _without_infinities(recording, path.name)
    return replace(recording, problems=(*recording.problems, *check_interval(recording, options, path.name)))


def open_line(path: Path, **options: Any) -> xr.DataArray:
    """Read one line as ``amplitude`` (trace, sample); options are the fields of ReadOptions.

    Problems of the file come as PlanumWarning.

    Raises
    ------
    LineError
        As :func:`read_line`.
    """
    recording = read_line(Path(path), ReadOptions(**options))
    for problem in recording.problems:
        warnings.warn(PlanumWarning(problem), stacklevel=2)
    return recording.to_dataarray()


def parts_in(path: Path, options: ReadOptions = ReadOptions()) -> int:  # noqa: B008  (frozen)
    """Return how many lines a file holds; 1 for readers that know single lines only.

    Raises
    ------
    LineError
        When the file cannot be read or no reader knows it.
    """
    path = Path(path)
    name, reader = _pick(path, options)
    parts = getattr(reader, "parts", None)
    return 1 if parts is None else int(_guarded(name, path, lambda: parts(path, options)))


def _check_options(options: ReadOptions, file: str) -> None:
    """Refuse numbers that are no numbers; types are the survey's care."""
    for key, value in (
        ("sample_interval_ns", options.interval_ns),
        ("centre_frequency_mhz", options.centre_frequency_ghz),
    ):
        if value is not None and not (math.isfinite(value) and value > 0):
            raise LineError(Problem(came=f"{key} = {value}", allowed="a positive number", file=file, key=key))
    if options.interval_unit not in (None, "ps", "ns", "us"):
        raise LineError(
            Problem(
                came=f"interval_unit = {options.interval_unit!r}",
                allowed="ps, ns or us",
                file=file,
                key="interval_unit",
            )
        )


def _pick(path: Path, options: ReadOptions) -> tuple[str, LineReader]:
    """Return the reader: the one asked for, the raw one for a declared layout, by suffix, then by content."""
    readers = line_readers()
    try:
        if not path.is_file():
            raise LineError(Problem(came="no such file", file=path.name))
        with path.open("rb") as stream:
            head = stream.read(_HEAD)
    except LineError:
        raise
    except (OSError, ValueError) as error:  # ValueError: a NUL in the name
        raise LineError(Problem(came=f"cannot be opened: {_reason(error)}", file=path.name)) from error
    asked = options.reader or ("raw" if options.layout is not None else None)
    if asked is not None:
        if asked not in readers:
            raise LineError(
                Problem(came=f"no line reader {asked!r}", allowed=nearest(asked, readers), file=path.name, key="reader")
            )
        return asked, readers[asked]
    suffix = path.suffix.lower()
    by_suffix = [name for name, reader in readers.items() if suffix in reader.suffixes]
    for name in [*by_suffix, *(n for n in readers if n not in by_suffix)]:
        if _guarded(name, path, lambda name=name: readers[name].claims(path, head)):
            return name, readers[name]
    known = "; ".join(f"{n}: {' '.join(r.suffixes) or 'declared layout'}" for n, r in readers.items())
    raise LineError(
        Problem(
            came="no installed line reader knows this file",
            allowed=f"installed: {known}",
            do="declare its raw layout, install a reader for it, or export it as SEG-Y",
            file=path.name,
        )
    )


def _guarded(name: str, path: Path, call: Any) -> Any:
    """Call a reader; whatever it raises becomes a LineError, so that one bad file never ends a run."""
    try:
        return call()
    except LineError:
        raise
    except (OSError, MemoryError) as error:
        raise LineError(Problem(came=f"cannot be read: {_reason(error)}", file=path.name)) from error
    except Exception as error:
        raise LineError(
            Problem(
                came=f"the line reader {name!r} failed: {type(error).__name__}: {error}",
                do="report it with the file, or name another reader",
                file=path.name,
            )
        ) from error


def _reason(error: BaseException) -> str:
    """Say why without the machine's path."""
    return printable(getattr(error, "strerror", None) or str(error) or type(error).__name__)


def _without_infinities(recording: Recording, file: str) -> Recording:
    """Flag constant and non-finite traces dead; a Fourier transform would spread one NaN over its whole line."""
    data = recording.data
    with np.errstate(invalid="ignore"):
        low, high = data.min(axis=1), data.max(axis=1)
    broken = ~(np.isfinite(low) & np.isfinite(high))
    dead = broken | (low == high)
    flag = recording.flag | np.where(dead, FLAG_DEAD, 0).astype(np.uint8)
    if not broken.any():
        return replace(recording, flag=flag)
    problem = Problem(
        came=f"{int(broken.sum())} trace(s) hold values that are not finite, first in trace {int(np.argmax(broken))}",
        do="they are taken as dead",
        file=file,
        severity="warning",
    )
    data = np.where(broken[:, None], data.dtype.type(0), data)
    return replace(recording, data=data, flag=flag, problems=(*recording.problems, problem))
