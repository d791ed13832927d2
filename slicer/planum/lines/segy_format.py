"""SEG-Y byte positions, sample formats, text and header fields.

Positions are the standard's own, counted from 1 (SEG-Y revisions 0, 1, 2.0 and 2.1, SEG Technical Standards
Committee); trace-header positions count from the trace header's first byte. Errors name bytes counted from 0.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np

__all__ = [
    "BYTE_ORDER_CONSTANT",
    "END_TEXT",
    "FILE",
    "FORMATS",
    "FORMAT_NAMES",
    "HEAD",
    "PAIRWISE_SWAPPED",
    "TEXT",
    "TRACE",
    "TRACE_HEAD",
    "Field",
    "is_text",
    "text_rows",
]

TEXT = 3200
"""Bytes of one text header."""
HEAD = 3600
"""Bytes before the first extended text header or trace."""
TRACE_HEAD = 240
BYTE_ORDER_CONSTANT = 16909060
"""0x01020304, at 3297 in revision 2."""
PAIRWISE_SWAPPED = 0x02010403
END_TEXT = "((SEG: ENDTEXT))"
"""Last stanza when the number of extended text headers is not given (-1)."""


@dataclass(frozen=True)
class Field:
    """A header field: the standard's first byte (from 1) and its struct code."""

    at: int
    code: str

    @property
    def byte(self) -> int:
        """0-based byte."""
        return self.at - 1

    def get(self, head: bytes, order: str) -> int | float:
        """Return the field of one header given as bytes."""
        value: int | float = struct.unpack_from(order + self.code, head, self.at - 1)[0]
        return value

    def put(self, head: bytearray, order: str, value: float) -> None:
        """Write the field into one header."""
        struct.pack_into(order + self.code, head, self.at - 1, value)

    def column(self, heads: np.ndarray, order: str) -> np.ndarray:
        """Return the field of many trace headers (trace, 240) uint8 as int64 (trace)."""
        size = struct.calcsize(self.code)
        kind = {"h": "i2", "H": "u2", "i": "i4"}[self.code]
        part = np.ascontiguousarray(heads[:, self.at - 1 : self.at - 1 + size])
        return part.view(order + kind)[:, 0].astype(np.int64)


FILE = {
    "traces": Field(3213, "H"),
    "interval": Field(3217, "H"),
    "interval_original": Field(3219, "H"),
    "samples": Field(3221, "H"),
    "samples_original": Field(3223, "H"),
    "format": Field(3225, "h"),
    "fold": Field(3227, "h"),
    "sorting": Field(3229, "h"),
    "units": Field(3255, "h"),
    "ext_traces": Field(3261, "i"),
    "ext_samples": Field(3269, "i"),
    "ext_interval": Field(3273, "d"),
    "ext_interval_original": Field(3281, "d"),
    "constant": Field(3297, "i"),
    "major": Field(3501, "B"),
    "minor": Field(3502, "B"),
    "fixed": Field(3503, "h"),
    "texts": Field(3505, "h"),
    "extra_heads": Field(3507, "i"),  # int16 in 2.1
    "extra_heads_2_1": Field(3507, "h"),
    "n_traces": Field(3513, "Q"),
    "first_trace": Field(3521, "Q"),
    "trailers": Field(3529, "i"),
}
"""Fields of the file header, counted from the start of the file."""

TRACE = {
    "seq_line": Field(1, "i"),
    "seq_file": Field(5, "i"),
    "fieldrecord": Field(9, "i"),
    "trace_number": Field(13, "i"),
    "point": Field(17, "i"),
    "ensemble": Field(21, "i"),
    "id": Field(29, "h"),
    "offset": Field(37, "i"),
    "scalar": Field(71, "h"),
    "source_x": Field(73, "i"),
    "source_y": Field(77, "i"),
    "group_x": Field(81, "i"),
    "group_y": Field(85, "i"),
    "unit": Field(89, "h"),
    "samples": Field(115, "H"),
    "interval": Field(117, "H"),
    "ensemble_x": Field(181, "i"),
    "ensemble_y": Field(185, "i"),
    "inline": Field(189, "i"),
    "crossline": Field(193, "i"),
}
"""Fields of the trace header."""

FORMATS = {1: "u4", 2: "i4", 3: "i2", 5: "f4", 6: "f8", 8: "i1", 10: "u4", 11: "u2", 16: "u1"}
"""Sample formats that are read and written, as they lie in the file (1 holds hexadecimal floats)."""

FORMAT_NAMES = {
    1: "4-byte hexadecimal float",
    2: "4-byte signed integer",
    3: "2-byte signed integer",
    4: "4-byte fixed point with gain",
    5: "4-byte IEEE float",
    6: "8-byte IEEE float",
    7: "3-byte signed integer",
    8: "1-byte signed integer",
    9: "8-byte signed integer",
    10: "4-byte unsigned integer",
    11: "2-byte unsigned integer",
    12: "8-byte unsigned integer",
    15: "3-byte unsigned integer",
    16: "1-byte unsigned integer",
}


_COMMON = " .,:;()-+/=*'\"#_"
_USUAL = {
    name: np.array([c in _COMMON or (c.isascii() and c.isalnum()) for c in bytes(range(256)).decode(code)])
    for name, code in (("ebcdic", "cp037"), ("ascii", "latin-1"))
}
"""For each byte: whether it stands for a letter, digit, blank or common sign."""

_BLANK = {i: " " for i in range(256) if not chr(i).isprintable()}
"""Control characters become blanks: the rows are shown to people."""


def text_rows(block: bytes) -> tuple[list[str], str]:
    """Return the rows of a text header without trailing blanks and empty last rows, and "ebcdic" or "ascii"."""
    # blanks are the commonest character in either encoding, and neither blank is usual in the other
    name = max(("ebcdic", "ascii"), key=lambda k: _share(block, k))
    text = block.decode("cp037" if name == "ebcdic" else "latin-1").translate(_BLANK)
    rows = [text[i : i + 80].rstrip() for i in range(0, len(text), 80)]
    while rows and not rows[-1]:
        rows.pop()
    return rows, name


def is_text(block: bytes) -> bool:
    """Tell whether a block reads as text in EBCDIC or ASCII."""
    return max(_share(block, name) for name in _USUAL) > 0.9


def _share(block: bytes, name: str) -> float:
    """Share of usual characters; 0 for nothing."""
    return float(_USUAL[name][np.frombuffer(block, np.uint8)].mean()) if block else 0.0
