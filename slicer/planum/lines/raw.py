"""Raw binary files in a layout their user declares, with a preview to find it."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from planum.errors import LineError, Problem, nearest
from planum.lines import samples
from planum.lines.interval import resolve_interval
from planum.lines.recording import CUT, RawLayout, ReadOptions, Recording

__all__ = ["READER", "RawPreview", "RawReader", "preview"]

_LARGEST_TRACE = 2**31 - 1  # numpy's limit for one record
_BLOCK = 1 << 25


@dataclass(frozen=True, eq=False)
class RawPreview:
    """What a declared layout makes of a file: first values (trace, sample), whole traces, bytes left over."""

    values: np.ndarray
    n_traces: int
    left_over: int


class RawReader:
    """Reads raw binary; never claims a file by itself."""

    name = "raw"
    suffixes: tuple[str, ...] = ()

    def claims(self, path: Path, head: bytes) -> bool:  # noqa: ARG002  (the protocol's)
        """Return False: a layout has to be declared."""
        return False

    def read(self, path: Path, options: ReadOptions) -> Recording:
        """Return the recording; see :func:`planum.lines.reading.read_line`."""
        layout = options.layout
        if layout is None:
            raise LineError(
                Problem(
                    came="a raw file without a declared layout",
                    do="declare samples per trace, header bytes, bytes before each trace, sample type and byte order",
                    file=path.name,
                    key="layout",
                )
            )
        kind, n_traces, left = _measure(path, layout)
        interval, origin, problems = resolve_interval(options, field=0.0, n_samples=layout.n_samples, file=path.name)
        raw = _read(path, layout, kind, n_traces)
        data, offset = samples.centred(raw)
        if left:
            problems = (*problems, _left_over(path.name, layout, kind, n_traces, left))
        if offset and raw.dtype.kind == "i":
            problems = (*problems, _shifted(path.name, layout, offset))
        return Recording(
            data=data,
            interval_ns=interval,
            interval_origin=origin,
            x=None,
            y=None,
            flag=np.zeros(n_traces, np.uint8),
            header={
                "format": "raw, declared",
                "sample_format_name": layout.sample_type,
                "byte_order": "big" if layout.byte_order == ">" else "little",
                "n_traces_found": n_traces,
                "n_samples": layout.n_samples,
                "centred_on": offset,
            },
            problems=problems,
        )


READER = RawReader()


def preview(path: Path, layout: RawLayout, *, n_traces: int = 4, n_samples: int = 12) -> RawPreview:
    """Return the first values (trace, sample) as they lie in the file, the number of traces and the bytes left over.

    A right layout shows similar first samples in every trace and leaves no bytes over.

    Raises
    ------
    LineError
        When the layout is impossible or the file cannot be read.
    """
    path = Path(path)
    try:
        kind, whole, left = _measure(path, layout)
        values = _read(path, layout, kind, min(whole, n_traces))
    except LineError:
        raise
    except OSError as error:
        raise LineError(Problem(came=f"cannot be read: {error.strerror}", file=path.name)) from error
    return RawPreview(values[:, :n_samples], whole, left)


def _measure(path: Path, layout: RawLayout) -> tuple[np.dtype, int, int]:
    """Return the record type of one trace, the whole traces and the bytes left over; checked against the length."""

    def error(came: str, allowed: str, key: str) -> LineError:
        return LineError(Problem(came=came, allowed=allowed, file=path.name, key=key))

    if layout.sample_type not in samples.SAMPLE_TYPES:
        raise error(
            f"sample type {layout.sample_type!r}", nearest(layout.sample_type, samples.SAMPLE_TYPES), "sample_type"
        )
    if layout.byte_order not in ("<", ">"):
        raise error(f"byte order {layout.byte_order!r}", "'<' or '>'", "byte_order")
    if layout.n_samples < 1 or layout.header_bytes < 0 or layout.bytes_before_trace < 0:
        raise error(f"{layout}", "at least 1 sample, no negative bytes", "layout")
    code = samples.SAMPLE_TYPES[layout.sample_type]
    size = layout.bytes_before_trace + layout.n_samples * int(code[1:])
    length = path.stat().st_size
    if size > min(length - layout.header_bytes, _LARGEST_TRACE):
        raise error(
            f"one trace takes {size} bytes, the file has {length - layout.header_bytes} after its header",
            "a layout that fits the file",
            "n_samples",
        )
    kind = np.dtype(
        [("before", "u1", (layout.bytes_before_trace,)), ("words", layout.byte_order + code, (layout.n_samples,))]
    )
    n_traces, left = divmod(length - layout.header_bytes, size)
    return kind, n_traces, left


def _read(path: Path, layout: RawLayout, kind: np.dtype, n_traces: int) -> np.ndarray:
    native = np.dtype("=" + samples.SAMPLE_TYPES[layout.sample_type])
    data = np.empty((n_traces, layout.n_samples), native)
    most = max(1, _BLOCK // kind.itemsize)
    with path.open("rb") as stream:
        stream.seek(layout.header_bytes)
        for first in range(0, n_traces, most):
            block = np.fromfile(stream, kind, min(most, n_traces - first))
            if block.size < min(most, n_traces - first):
                raise LineError(
                    Problem(
                        came="the file became shorter while it was read",
                        do="copy it first",
                        file=path.name,
                        byte=layout.header_bytes + first * kind.itemsize,
                    )
                )
            data[first : first + block.size] = block["words"]
    return data


def _left_over(file: str, layout: RawLayout, kind: np.dtype, n_traces: int, left: int) -> Problem:
    return Problem(
        came=f"{n_traces} whole traces read, {left} bytes left over",
        do="the file is cut, or the declared layout does not fit: look at a preview",
        file=file,
        byte=layout.header_bytes + n_traces * kind.itemsize,
        key=CUT,
        severity="warning",
    )


def _shifted(file: str, layout: RawLayout, offset: int) -> Problem:
    return Problem(
        came=f"declared as {layout.sample_type}, but the samples are unsigned ones, centred on {offset} (taken off)",
        do=f'declare sample_type = "u{layout.sample_type}"',
        file=file,
        key="sample_type",
        severity="warning",
    )
