"""Writes SEG-Y revisions 0, 1 and 2.0; beside the target first, then renamed."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from planum.errors import LineError, Problem
from planum.lines import samples
from planum.lines.interval import NS_PER
from planum.lines.recording import IntervalUnit
from planum.lines.segy_format import BYTE_ORDER_CONSTANT, FILE, FORMAT_NAMES, FORMATS, HEAD, TEXT, TRACE, TRACE_HEAD

__all__ = ["write_segy"]

_BY_REVISION = {0: (1, 2, 3), 1: (1, 2, 3, 5, 8), 2: tuple(FORMATS)}
_BLOCK = 1 << 25
_ROWS = 37  # rows 38 to 40 are the writer's


def write_segy(  # noqa: PLR0913  (all but the data are named, with defaults)
    path: Path,
    data: Any,
    *,
    interval_ns: float,
    interval_unit: IntervalUnit = "ps",
    sample_format: int = 3,
    revision: int = 1,
    text: Sequence[str] = (),
    x: np.ndarray | None = None,
    y: np.ndarray | None = None,
    coordinate_scalar: int = -100,
    field_record: int = 1,
    byte_order: str = ">",
) -> None:
    """Write one line; the caller's arrays stay as they were, and the file appears whole or not at all.

    Parameters
    ----------
    path : Path
        The file; one that is there is replaced.
    data : array_like
        Samples (trace, sample). Integer formats take whole numbers in their range only: nothing is rounded silently.
    interval_ns : float
        Sample interval, ns.
    interval_unit : {"ps", "ns", "us"}
        Unit of the 16-bit interval fields, which hold whole numbers. The standard's unit is µs, too coarse for radar;
        row 38 of the text header states unit and interval.
    sample_format : int
        1, 2, 3 in revision 0; also 5, 8 in revision 1; also 6, 10, 11, 16 in revision 2.
    revision : {0, 1, 2}
        Revision 2 also writes the exact interval in µs as a 64-bit float.
    text : sequence of str
        Up to 37 rows of at most 76 characters.
    x, y : numpy.ndarray, optional
        Positions (trace), m, written as source, group and ensemble coordinates.
    coordinate_scalar : int
        ±1, 10, 100, 1000 or 10000; -100 keeps centimetres, and map coordinates inside 32 bits.
    field_record : int
        Number of the line in the trace headers (bytes 9 to 12).
    byte_order : {">", "<"}
        Most or least significant byte first; the standard knows the latter from revision 2 on.

    Raises
    ------
    LineError
        When the values, the interval or the positions cannot be held.
    OSError
        When the system cannot write; a file that was there is left as it was.
    """
    path = Path(path)
    array = np.asarray(data)
    _check(path.name, array, sample_format, revision, byte_order, field_record)
    field = _interval_field(path.name, interval_ns, interval_unit, revision)
    n_traces, n_samples = array.shape
    rows = _text(
        path.name, text, f"SAMPLE INTERVAL {interval_ns:.9g} NS, INTERVAL FIELDS IN {interval_unit.upper()}", revision
    )
    head = bytearray(HEAD)
    head[:TEXT] = rows
    values = {
        "traces": 1,
        "interval": field,
        "samples": n_samples if n_samples <= 0xFFFF else 0,
        "format": sample_format,
        "units": 1,
    }
    if revision:
        values |= {"major": revision, "fixed": 1}
    if revision == 2:
        values |= {"ext_samples": n_samples, "constant": BYTE_ORDER_CONSTANT}
        values |= {"n_traces": n_traces, "first_trace": HEAD}
        FILE["ext_interval"].put(head, byte_order, interval_ns * 1e-3)
    for name, value in values.items():
        FILE[name].put(head, byte_order, value)
    kind = np.dtype([("head", "u1", (TRACE_HEAD,)), ("words", byte_order + FORMATS[sample_format], (n_samples,))])
    most = max(1, _BLOCK // kind.itemsize)
    places = _places(path.name, n_traces, x, y, coordinate_scalar)
    constants = {"fieldrecord": field_record, "id": 1, "samples": values["samples"], "interval": field}
    aside = path.with_name(path.name + ".part")
    try:
        with aside.open("wb") as stream:
            stream.write(head)
            for first in range(0, n_traces, most):
                block = np.zeros(min(most, n_traces - first), kind)
                part = slice(first, first + block.size)
                _fill_heads(block["head"], byte_order, first, constants, {k: v[part] for k, v in places.items()})
                block["words"] = _words(path.name, array[part], sample_format)
                stream.write(block.tobytes())
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(aside, path)
    finally:
        aside.unlink(missing_ok=True)


def _error(file: str, came: str, *, allowed: str = "", do: str = "", key: str = "") -> LineError:
    return LineError(Problem(came=came, allowed=allowed, do=do, file=file, key=key))


def _check(file: str, array: np.ndarray, sample_format: int, revision: int, byte_order: str, field_record: int) -> None:
    if revision not in _BY_REVISION:
        raise _error(file, f"revision {revision}", allowed="0, 1 or 2", key="revision")
    if sample_format not in _BY_REVISION[revision]:
        known = FORMAT_NAMES.get(sample_format, "unknown")
        allowed = f"revision {revision} has {', '.join(map(str, _BY_REVISION[revision]))}"
        raise _error(file, f"sample format {sample_format} ({known})", allowed=allowed, key="sample_format")
    if byte_order not in ("<", ">"):
        raise _error(file, f"byte order {byte_order!r}", allowed="'>' or '<'", key="byte_order")
    if array.ndim != 2 or 0 in array.shape or array.dtype.kind not in "iuf":
        raise _error(
            file, f"data of shape {array.shape} and type {array.dtype}", allowed="real numbers (trace, sample)"
        )
    if not -(2**31) <= field_record < 2**31:
        raise _error(file, f"field record {field_record}", allowed="32 bits", key="field_record")
    if revision < 2 and array.shape[1] > 0x7FFF:
        raise _error(
            file, f"{array.shape[1]} samples per trace", allowed="32767 before revision 2", do="use revision=2"
        )


def _interval_field(file: str, interval_ns: float, unit: IntervalUnit, revision: int) -> int:
    if unit not in NS_PER:
        raise _error(file, f"interval unit {unit!r}", allowed="ps, ns or us", key="interval_unit")
    exact = interval_ns / NS_PER[unit]
    most = 0xFFFF if revision == 2 else 0x7FFF
    whole = np.rint(exact)
    # a millionth of a unit is the rounding of decimal fractions, not another interval
    if 1 <= whole <= most and abs(exact - whole) < 1e-6 * exact:
        return int(whole)
    if revision == 2 and 0 < exact < np.inf:
        return int(min(whole, most))  # the 64-bit field has the exact one
    raise _error(
        file,
        f"{interval_ns} ns is {exact:.9g} {unit}",
        allowed=f"the interval field holds whole numbers from 1 to {most}",
        do="use revision=2, which adds a 64-bit field, or another interval_unit",
        key="interval_ns",
    )


def _text(file: str, text: Sequence[str], interval: str, revision: int) -> bytes:
    if len(text) > _ROWS or any(len(row) > 76 for row in text):
        raise _error(file, f"{len(text)} text rows", allowed=f"{_ROWS} rows of at most 76 characters", key="text")
    rows = [*text, *[""] * (_ROWS - len(text)), interval]
    rows += [f"SEG Y REV{revision}", "END TEXTUAL HEADER"] if revision else ["", "END EBCDIC"]
    joined = "".join(f"C{i:2d} {row}".ljust(80) for i, row in enumerate(rows, start=1))
    return joined.encode("cp037", errors="replace")


def _places(file: str, n_traces: int, x: np.ndarray | None, y: np.ndarray | None, scalar: int) -> dict[str, np.ndarray]:
    """Trace-header columns of the positions, int64."""
    if x is None and y is None:
        return {}
    if abs(scalar) not in (1, 10, 100, 1000, 10000):
        raise _error(file, f"coordinate scalar {scalar}", allowed="±1, 10, 100, 1000 or 10000", key="coordinate_scalar")
    columns = {"scalar": np.full(n_traces, scalar), "unit": np.ones(n_traces, np.int64)}
    for axis, values in (("x", x), ("y", y)):
        metres = np.asarray(np.nan if values is None else values, float)
        if metres.shape != (n_traces,) or not np.isfinite(metres).all():
            raise _error(
                file, f"{axis} of shape {metres.shape}", allowed=f"{n_traces} finite numbers, x and y both", key=axis
            )
        scaled = np.rint(metres * -scalar if scalar < 0 else metres / scalar)
        if np.abs(scaled).max() > 2**31 - 1:
            raise _error(
                file,
                f"{axis} up to {np.abs(metres).max():.0f} m does not fit 32 bits with coordinate scalar {scalar}",
                do="use coordinate_scalar=-100 (cm) or -10",
                key="coordinate_scalar",
            )
        for place in ("source", "group", "ensemble"):
            columns[f"{place}_{axis}"] = scaled.astype(np.int64)
    return columns


def _fill_heads(
    heads: np.ndarray, order: str, first: int, constants: dict[str, int], columns: dict[str, np.ndarray]
) -> None:
    number = np.arange(first + 1, first + 1 + len(heads))
    every = {name: np.full(len(heads), value) for name, value in constants.items()}
    for name, values in {"seq_line": number, "seq_file": number, "trace_number": number, **every, **columns}.items():
        at, code = TRACE[name].byte, TRACE[name].code
        kind = order + {"h": "i2", "H": "u2", "i": "i4"}[code]
        words = values.astype(kind)
        heads[:, at : at + words.dtype.itemsize] = words.view(np.uint8).reshape(len(heads), -1)


def _words(file: str, values: np.ndarray, sample_format: int) -> np.ndarray:
    """Sample words of one block in native order."""
    if sample_format == 1:
        try:
            return samples.to_ibm(values)
        except ValueError as error:
            raise _error(file, str(error), key="data") from error
    kind = np.dtype(FORMATS[sample_format])
    if kind.kind == "f":
        if not np.isfinite(values).all():
            raise _error(file, "values that are not finite numbers", key="data")
        with np.errstate(over="ignore"):
            cast = values.astype(kind)
        if not np.isfinite(cast).all():
            raise _error(file, "values beyond the largest 4-byte float", do="use sample_format=6", key="data")
        return cast
    limits = np.iinfo(kind)
    low, high = values.min(), values.max()
    whole = values.dtype.kind != "f" or bool((values == np.rint(values)).all())
    if not (whole and low >= limits.min and high <= limits.max):
        raise _error(
            file,
            f"values from {low} to {high}" + ("" if whole else " with fractions"),
            allowed=f"whole numbers from {limits.min} to {limits.max} in sample format {sample_format}",
            do="scale and round them first, or use sample_format=5 (1 in revision 0)",
            key="data",
        )
    return values.astype(kind)
