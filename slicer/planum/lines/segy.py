"""SEG-Y revisions 0 to 2.1: read in blocks, checked trace by trace, no memory map.

A memory map would die with the process when a file shrinks under it; blocks cost nothing measurable.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from planum.errors import LineError, Problem, nearest, printable
from planum.lines import samples, segy_format
from planum.lines.interval import resolve_interval
from planum.lines.recording import ReadOptions, Recording
from planum.lines.segy_format import FORMATS, HEAD, TRACE, TRACE_HEAD
from planum.lines.segy_layout import SegyLayout, byte_order, find_layout
from planum.lines.segy_positions import header_positions
from planum.records import FLAG_DEAD

__all__ = ["READER", "SPLITS", "SegyReader"]

SPLITS = ("fieldrecord", "trace_number", "point", "ensemble", "inline", "crossline", "counter")
"""What may tell the lines of one file apart: a trace-header field, or a trace counter (bytes 1 or 5) starting again."""

_BLOCK = 1 << 25  # bytes read at once
_DEAD = 2  # trace identification code of a dead trace


class SegyReader:
    """Reads SEG-Y."""

    name = "segy"
    suffixes = (".sgy", ".segy", ".seg")

    def claims(self, path: Path, head: bytes) -> bool:
        """Tell whether this is SEG-Y: by suffix, else by a file header that agrees with the first trace header."""
        if path.suffix.lower() in self.suffixes:
            return True
        if len(head) < HEAD + TRACE_HEAD or (order := byte_order(head)) is None:
            return False
        n = segy_format.FILE["samples"].get(head, order)
        return n > 0 and n == TRACE["samples"].get(head[HEAD:], order)

    def parts(self, path: Path, options: ReadOptions) -> int:
        """Return how many lines the file holds under ``options.split``."""
        layout = find_layout(path)
        heads = _concatenate(_blocks(path, layout, 0, layout.n_traces, data=False))[0]
        return len(_parts(heads, layout, _split(options, path.name)))

    def read(self, path: Path, options: ReadOptions) -> Recording:
        """Return the recording; see :func:`planum.lines.reading.read_line`."""
        layout = find_layout(path)
        interval, origin, more = resolve_interval(
            options,
            field=layout.interval_field,
            exact_us=layout.exact_us,
            n_samples=layout.n_samples,
            file=path.name,
            byte=layout.interval_byte,
        )
        problems = [*layout.problems, *more]
        heads, words, part_facts = _chosen(path, layout, options)
        if not part_facts and len(_parts(heads, layout, "counter")) > 1:
            problems.append(_several(path.name))
        data, offset = _values(words, layout)
        if offset and FORMATS[layout.format][0] == "i":
            problems.append(_shifted(path.name, layout, offset))
        x = y = None
        if options.header_positions:
            x, y, found = header_positions(heads, layout.order, feet=layout.feet, file=path.name)
            problems.extend(found)
        flag = np.where(TRACE["id"].column(heads, layout.order) == _DEAD, FLAG_DEAD, 0).astype(np.uint8)
        return Recording(
            data=data,
            interval_ns=interval,
            interval_origin=origin,
            x=x,
            y=y,
            flag=flag,
            header=_facts(layout, offset) | part_facts,
            problems=tuple(problems),
        )


READER = SegyReader()


def _chosen(path: Path, layout: SegyLayout, options: ReadOptions) -> tuple[np.ndarray, np.ndarray, dict[str, Any]]:
    """Headers and sample words of the asked part, and facts about the parts (none when the file is one line)."""
    if options.part is None and options.split is None:
        heads, words = _concatenate(_blocks(path, layout, 0, layout.n_traces))
        return heads, words, {}
    split = _split(options, path.name)
    heads = _concatenate(_blocks(path, layout, 0, layout.n_traces, data=False))[0]
    parts = _parts(heads, layout, split)
    part = 0 if options.part is None and len(parts) == 1 else options.part
    if part is None or not 0 <= part < len(parts):
        raise LineError(
            Problem(
                came=f"the file holds {len(parts)} line(s) by {split!r}, "
                + ("no part is named" if part is None else f"part {part} is asked for"),
                allowed=f"parts 0 to {len(parts) - 1}",
                do="name the part in the line register",
                file=path.name,
                key="part",
            )
        )
    rows = parts[part]
    first, last = int(rows[0]), int(rows[-1])
    heads, words = _concatenate(_blocks(path, layout, first, last + 1 - first))
    facts = {"parts": len(parts), "part": part, "split": split, "first_trace_in_file": first}
    if rows.size == last + 1 - first:
        return heads, words, facts
    return heads[rows - first], words[rows - first], facts


def _split(options: ReadOptions, file: str) -> str:
    split = options.split or "counter"
    if split not in SPLITS:
        raise LineError(
            Problem(
                came=f"lines split by {printable(split)!r}",
                allowed="allowed: " + ", ".join(SPLITS),
                do=nearest(split, SPLITS),
                file=file,
                key="split",
            )
        )
    return split


def _parts(heads: np.ndarray, layout: SegyLayout, split: str) -> list[np.ndarray]:
    """Trace indices of each line, in order of first appearance."""
    if split == "counter":
        drops = np.zeros(len(heads), bool)
        for name in ("seq_line", "seq_file"):
            drops[1:] |= np.diff(TRACE[name].column(heads, layout.order)) < 0
        return np.split(np.arange(len(heads)), np.flatnonzero(drops))
    values = TRACE[split].column(heads, layout.order)
    _, first, inverse = np.unique(values, return_index=True, return_inverse=True)
    return [np.flatnonzero(inverse == i) for i in np.argsort(first)]


def _blocks(
    path: Path, layout: SegyLayout, first: int, count: int, *, data: bool = True
) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    """Yield headers (trace, 240) uint8 and sample words (trace, sample) in native order, block by block."""
    kind = np.dtype(
        [
            ("head", "u1", (TRACE_HEAD,)),
            ("extra", "u1", (TRACE_HEAD * layout.extra_heads,)),
            ("words", layout.order + FORMATS[layout.format], (layout.n_samples,)),
        ]
    )
    native = np.dtype("=" + FORMATS[layout.format])
    most = max(1, _BLOCK // kind.itemsize)
    with path.open("rb") as stream:
        stream.seek(layout.first_trace + first * kind.itemsize)
        done = 0
        while done < count:
            want = min(most, count - done)
            block = np.fromfile(stream, kind, want)
            at = layout.first_trace + (first + done) * kind.itemsize
            if block.size < want:
                raise LineError(
                    Problem(
                        came="the file became shorter while it was read", file=path.name, byte=at, do="copy it first"
                    )
                )
            heads = block["head"].copy()
            _check_samples(heads, layout, path.name, at, kind.itemsize)
            yield heads, block["words"].astype(native) if data else np.empty((want, 0), native)
            done += want


def _concatenate(blocks: Iterator[tuple[np.ndarray, np.ndarray]]) -> tuple[np.ndarray, np.ndarray]:
    heads, words = zip(*blocks, strict=True)
    return (heads[0], words[0]) if len(heads) == 1 else (np.concatenate(heads), np.concatenate(words))


def _check_samples(heads: np.ndarray, layout: SegyLayout, file: str, at: int, size: int) -> None:
    """Refuse traces whose own sample count differs; 0 means not filled in."""
    if layout.n_samples > 0xFFFF:
        return  # the 16-bit field cannot hold it
    stated = TRACE["samples"].column(heads, layout.order)
    wrong = np.flatnonzero((stated != layout.n_samples) & (stated != 0))
    if wrong.size:
        i = int(wrong[0])
        raise LineError(
            Problem(
                came=f"a trace states {stated[i]} samples, the file {layout.n_samples}",
                allowed="all traces of a file have the same number of samples",
                do="the file is damaged there, or holds lines with different windows: export them one by one",
                file=file,
                byte=at + i * size + TRACE["samples"].byte,
            )
        )


def _values(words: np.ndarray, layout: SegyLayout) -> tuple[np.ndarray, int]:
    """Sample values and what was taken off unsigned ones."""
    if layout.format == 1:
        with np.errstate(over="ignore"):  # beyond float32: becomes infinite, and the trace is set aside as dead
            return samples.from_ibm(words).astype(np.float32), 0
    return samples.centred(words)


def _facts(layout: SegyLayout, offset: int) -> dict[str, Any]:
    return {
        "format": "SEG-Y",
        "revision": f"{layout.revision[0]}.{layout.revision[1]}",
        "revision_field": layout.revision_field,
        "sample_format": layout.format,
        "sample_format_name": segy_format.FORMAT_NAMES[layout.format],
        "byte_order": "big" if layout.order == ">" else "little",
        "n_traces_declared": layout.n_declared,
        "n_traces_found": layout.n_traces,
        "n_samples": layout.n_samples,
        "interval_field": layout.interval_field,
        "interval_revision_2_us": layout.exact_us,
        "first_trace_byte": layout.first_trace,
        "extra_trace_headers": layout.extra_heads,
        "centred_on": offset,
        "text_encoding": layout.text_encoding,
        "text": list(layout.text),
    }


def _shifted(file: str, layout: SegyLayout, offset: int) -> Problem:
    name = segy_format.FORMAT_NAMES[layout.format]
    return Problem(
        came=f"declared as {name}, but the samples are unsigned ones, centred on {offset} (taken off)",
        do="look at a raw section: it should show a steady direct wave and no torn bands",
        file=file,
        byte=segy_format.FILE["format"].byte,
        severity="warning",
    )


def _several(file: str) -> Problem:
    return Problem(
        came="the trace counter starts again inside the file: it may hold several lines",
        do="name the part in the line register, or first and last trace",
        file=file,
        key="part",
        severity="warning",
    )
