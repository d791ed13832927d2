"""Delimited text: one row per trace (or per sample, when a comment says so).

Separators are comma, semicolon, tab or blanks; with the latter three a comma is the decimal sign. Lines that start
with ``#`` are comments, and two of them may declare what numbers alone cannot say::

    # rows: samples
    # sample_interval_ns: 0.15
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from planum.errors import LineError, Problem, printable
from planum.lines.interval import resolve_interval
from planum.lines.recording import ReadOptions, Recording

__all__ = ["READER", "DelimitedReader"]

_LARGEST = 1 << 28  # bytes; text this long is a mistake, a line has some ten megabytes
_DECLARED = re.compile(r"#\s*(rows|sample_interval_ns)\s*[:=]\s*(\S+)\s*$", re.IGNORECASE)


class DelimitedReader:
    """Reads delimited text."""

    name = "delimited"
    suffixes = (".csv", ".txt", ".tsv", ".asc")

    def claims(self, path: Path, head: bytes) -> bool:
        """Tell whether this is text with one of the suffixes; a NUL byte is no text."""
        return path.suffix.lower() in self.suffixes and b"\0" not in head

    def read(self, path: Path, options: ReadOptions) -> Recording:
        """Return the recording as float32; see :func:`planum.lines.reading.read_line`."""
        lines = _lines(path)
        comments = [text for _, text in lines if text.startswith("#")]
        declared = {m[1].lower(): m[2].lower() for c in comments if (m := _DECLARED.match(c))}
        rows = declared.get("rows", "traces")
        if rows not in ("traces", "samples"):
            raise _error(path, f"rows: {printable(rows)}", allowed="traces or samples", key="rows")
        numbered = [(i, text) for i, text in lines if text and not text.startswith("#")]
        if not numbered:
            raise _error(path, "no numbers in the file")
        separator = _separator(numbered[0][1])
        values = _values(path, numbered, separator)
        data = np.ascontiguousarray(values.T) if rows == "samples" else values
        interval, origin, problems = self._interval(path, options, declared, data.shape[1])
        return Recording(
            data=data,
            interval_ns=interval,
            interval_origin=origin,
            x=None,
            y=None,
            flag=np.zeros(len(data), np.uint8),
            header={
                "format": "delimited text",
                "rows": rows,
                "separator": {None: "blank", "\t": "tab"}.get(separator, separator),
                "n_traces_found": data.shape[0],
                "n_samples": data.shape[1],
                "text": [printable(c) for c in comments[:40]],
            },
            problems=problems,
        )

    @staticmethod
    def _interval(
        path: Path, options: ReadOptions, declared: dict[str, str], n_samples: int
    ) -> tuple[float, str, tuple[Problem, ...]]:
        text = declared.get("sample_interval_ns")
        if options.interval_ns is not None or text is None:
            return resolve_interval(options, field=0.0, n_samples=n_samples, file=path.name)
        try:
            interval = float(text)
        except ValueError:
            interval = float("nan")
        if not 0 < interval < np.inf:
            raise _error(
                path, f"sample_interval_ns: {printable(text)}", allowed="a positive number", key="sample_interval_ns"
            )
        return interval, "comment in the file", ()


READER = DelimitedReader()


def _error(
    path: Path, came: str, *, allowed: str = "", do: str = "", line: int | None = None, key: str = ""
) -> LineError:
    where = "" if line is None else str(line)
    return LineError(Problem(came=came, allowed=allowed, do=do, file=path.name, line=where, key=key))


def _lines(path: Path) -> list[tuple[int, str]]:
    """Return stripped lines with their numbers from 1; UTF-8 or, where it is not, Latin-1."""
    if path.stat().st_size > _LARGEST:
        raise _error(path, f"{path.stat().st_size} bytes of text", allowed=f"up to {_LARGEST}", do="export it as SEG-Y")
    content = path.read_bytes()
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = content.decode("latin-1")
    # only line ends count: str.splitlines would also cut at form feeds and the like
    return [(i, row.strip(" \r")) for i, row in enumerate(re.split(r"\r\n|\n|\r", text), start=1)]


def _separator(row: str) -> str | None:
    """Separator of a row of numbers; None is any run of blanks."""
    for sign in ";\t":
        if sign in row:
            return sign
    words = row.split()
    # "1,5 2,5" has decimal commas; in "1, 5" the comma hangs on a blank
    hanging = any(w.startswith(",") or w.endswith(",") for w in words)
    if "," in row and (len(words) == 1 or hanging):
        return ","
    return None


def _values(path: Path, rows: Sequence[tuple[int, str]], separator: str | None) -> np.ndarray:
    """Values (row, column) as float32."""
    width = len(_cells(rows[0][1], separator))
    values = np.empty((len(rows), width), np.float32)
    for out, (line, text) in zip(values, rows, strict=True):
        cells = _cells(text, separator)
        if len(cells) != width:
            raise _error(path, f"{len(cells)} values", allowed=f"{width}, as in line {rows[0][0]}", line=line)
        try:
            with np.errstate(over="ignore"):  # beyond float32: infinite, and the trace is set aside as dead
                out[:] = [float(cell) for cell in cells]
        except ValueError as error:
            bad = next(cell for cell in cells if not _is_number(cell))
            raise _error(
                path, f"{printable(bad, longest=40)!r} is no number", do="put # before rows of words", line=line
            ) from error
    return values


def _cells(text: str, separator: str | None) -> list[str]:
    cells = text.split(separator)
    if len(cells) > 1 and not cells[-1].strip():
        cells.pop()  # many programs end every row with a separator
    return [c.replace(",", ".") for c in cells] if separator != "," else cells


def _is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True
