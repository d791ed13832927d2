"""Pass 2, one row at a time: read the row's pieces and run them through the set's chain."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from planum.cube.assemble import Piece
from planum.engine.linepass import run_row
from planum.errors import LineError, Problem
from planum.lines.recording import RawLayout, ReadOptions
from planum.pipeline.census import Source
from planum.records import LineEntry, SetPlan, Strip, key
from planum.survey.safety import inside

__all__ = ["read_pieces", "row_key", "set_key", "strip_of"]

KERNEL_VERSION = 2
"""Raised when placing, windows or flags change their numbers."""


def set_key(plan: SetPlan) -> str:
    """Return what all rows of a set depend on, hashed: axes, chain, windows and the way of reading."""
    chain = [s.model_dump(mode="json") for s in plan.chain]
    return key([KERNEL_VERSION, plan.geometry, chain, plan.windows_ns, plan.reader])


def row_key(plan: SetPlan, row: int, *, common: str | None = None) -> str:
    """Return what one row's strip depends on, hashed: bytes and corrections, and what is ``common`` to its set."""
    entries = [e.model_dump(mode="json", exclude={"because", "key"}) for e in plan.entries if e.row == row]
    return key([row, entries, set_key(plan) if common is None else common])


def read_pieces(folder: Path, plan: SetPlan, row: int, *, roots: Sequence[Path] = ()) -> list[Piece]:
    """Read the recorded pieces of one row.

    Raises
    ------
    LineError
        When a file cannot be used.
    """
    pieces = []
    for entry in plan.entries:
        if entry.row == row:
            source = Source(inside(folder, entry.file, roots=roots), entry.file, _options(plan, entry))
            recording = source.read()
            x, y = recording.x, recording.y
            if entry.header_positions and x is not None and y is not None:
                x, y = plan.frame.inverse(x, y)
            else:
                x = y = None
            pieces.append(Piece(recording.data, recording.interval_ns, entry, x, y, recording.flag))
    return pieces


def strip_of(
    folder: Path, plan: SetPlan, row: int, *, section: bool = False, roots: Sequence[Path] = ()
) -> Strip | Problem:
    """Return the strip of one row, or what is wrong with it."""
    try:
        return run_row(read_pieces(folder, plan, row, roots=roots), plan, row, section=section)
    except LineError as fault:
        return fault.problems[0]


def _options(plan: SetPlan, entry: LineEntry) -> ReadOptions:
    layout = plan.reader.get("layout")
    return ReadOptions(
        interval_ns=entry.interval_ns,
        centre_frequency_ghz=plan.centre_frequency_ghz,
        part=entry.part,
        split=plan.reader.get("split"),
        header_positions=entry.header_positions,
        layout=None if layout is None else RawLayout(**layout),
        reader=plan.reader.get("reader"),
    )
