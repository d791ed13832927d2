"""Where the traces of a SEG-Y file lie: byte order, revision, text headers, trace size, whole traces.

Every size is checked against the file's length here, before anyone asks for memory.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from planum.errors import LineError, Problem
from planum.lines import segy_format as fmt
from planum.lines.recording import CUT
from planum.lines.segy_format import FILE, FORMATS, HEAD, TEXT, TRACE, TRACE_HEAD

__all__ = ["SegyLayout", "byte_order", "find_layout"]

_LARGEST_TRACE = 2**31 - 1  # numpy's limit for one record


@dataclass(frozen=True)
class SegyLayout:
    """Layout of one file: all that is needed to read its traces."""

    order: str
    revision: tuple[int, int]
    revision_field: str
    format: int
    n_samples: int
    extra_heads: int
    first_trace: int
    n_traces: int
    n_declared: int | None
    interval_field: int
    interval_byte: int
    exact_us: float
    feet: bool
    text: tuple[str, ...]
    text_encoding: str
    problems: tuple[Problem, ...]


def byte_order(head: bytes) -> str | None:
    """Return ">" or "<" by the revision 2 constant, else by a known format code; None when neither fits.

    A code is below 256, so it can be valid in one order only.
    """
    for order in "><":
        if FILE["constant"].get(head, order) == fmt.BYTE_ORDER_CONSTANT:
            return order
    for order in "><":
        if FILE["format"].get(head, order) in fmt.FORMAT_NAMES:
            return order
    return None


def find_layout(path: Path) -> SegyLayout:
    """Return the layout of a file.

    Raises
    ------
    LineError
        With the byte, when the headers make no sense or do not fit the file's length.
    """
    with path.open("rb") as stream:
        return _Finder(stream, path.stat().st_size, path.name).layout()


class _Finder:
    """One look at one file's headers; collects warnings on the way."""

    def __init__(self, stream: BinaryIO, length: int, name: str) -> None:
        self.stream, self.length, self.name = stream, length, name
        self.problems: list[Problem] = []
        self.head = stream.read(HEAD)
        if len(self.head) < HEAD:
            raise self.error(
                f"{len(self.head)} bytes, shorter than the {HEAD} bytes of the file headers", len(self.head)
            )
        for way in "><":
            if FILE["constant"].get(self.head, way) == fmt.PAIRWISE_SWAPPED:
                raise self.error(
                    "bytes are swapped in pairs", FILE["constant"].byte, allowed="most or least significant byte first"
                )
        order = byte_order(self.head)
        if order is None:
            code = FILE["format"].get(self.head, ">")
            raise self.error(f"unknown sample format code {code}", FILE["format"].byte, allowed=_formats())
        self.order = order

    def error(self, came: str, byte: int, *, allowed: str = "", do: str = "") -> LineError:
        return LineError(Problem(came=came, allowed=allowed, do=do, file=self.name, byte=byte))

    def warn(self, came: str, byte: int, *, do: str = "", key: str = "") -> None:
        self.problems.append(Problem(came=came, do=do, file=self.name, byte=byte, key=key, severity="warning"))

    def get(self, name: str) -> int:
        return int(FILE[name].get(self.head, self.order))

    def at(self, offset: int, size: int) -> bytes:
        self.stream.seek(offset)
        return self.stream.read(size)

    def layout(self) -> SegyLayout:
        revision, revision_field = self.revision()
        code = self.get("format")
        if code not in FORMATS:
            name = fmt.FORMAT_NAMES.get(code, "unknown")
            raise self.error(f"sample format code {code} ({name})", FILE["format"].byte, allowed=_formats())
        n_samples = self.samples(revision)
        extra = self.extra_heads(revision)
        size = TRACE_HEAD * (1 + extra) + n_samples * int(FORMATS[code][1:])
        if size > min(self.length - HEAD, _LARGEST_TRACE):
            raise self.error(
                f"a trace of {n_samples} samples takes {size} bytes, {self.length - HEAD} follow the file headers",
                FILE["samples"].byte,
                do="the header is damaged or the file has lost its traces",
            )
        first = self.first_trace(revision, n_samples, size)
        n_traces, declared = self.count(revision, first, size)
        text, encoding = fmt.text_rows(self.head[:TEXT])
        interval, interval_byte = self.interval(first)
        return SegyLayout(
            order=self.order,
            revision=revision,
            revision_field=revision_field,
            format=code,
            n_samples=n_samples,
            extra_heads=extra,
            first_trace=first,
            n_traces=n_traces,
            n_declared=declared,
            interval_field=interval,
            interval_byte=interval_byte,
            exact_us=self.exact_us(revision),
            feet=self.get("units") == 2,
            text=tuple(text),
            text_encoding=encoding,
            problems=tuple(self.problems),
        )

    def revision(self) -> tuple[tuple[int, int], str]:
        """Revision; junk in its field counts as 0 and stays visible in the header facts."""
        major, minor = self.get("major"), self.get("minor")
        found = f"0x{major:02x}{minor:02x}"
        known = {(1, 0), (2, 0), (2, 1)}
        if self.order == "<" and (minor, major) in known and (major, minor) not in known:
            major, minor = minor, major  # written as one 16-bit number
        if self.get("constant") == fmt.BYTE_ORDER_CONSTANT and major < 2:
            major, minor = 2, 0
        return ((major, minor) if (major, minor) in known else (0, 0)), found

    def samples(self, revision: tuple[int, int]) -> int:
        n = self.get("samples")
        if revision >= (2, 0) and (ext := self.get("ext_samples")):
            if ext < 0:
                raise self.error(f"{ext} samples per trace", FILE["ext_samples"].byte)
            return ext
        if n == 0:
            raise self.error("0 samples per trace", FILE["samples"].byte, do="declare the file's raw layout instead")
        return n

    def extra_heads(self, revision: tuple[int, int]) -> int:
        if revision < (2, 0):
            return 0
        extra = self.get("extra_heads_2_1" if revision == (2, 1) else "extra_heads")
        if not 0 <= extra <= self.length // TRACE_HEAD:
            raise self.error(f"{extra} extra trace headers in a file of {self.length} bytes", FILE["extra_heads"].byte)
        return extra

    def first_trace(self, revision: tuple[int, int], n_samples: int, size: int) -> int:
        """Byte of the first trace: stated, or after the declared text headers, or where trace headers begin."""
        if revision >= (2, 0) and (stated := self.get("first_trace")):
            if not HEAD <= stated <= self.length - size:
                raise self.error(f"first trace stated at byte {stated} of {self.length}", FILE["first_trace"].byte)
            return stated
        texts = self.texts(revision)
        declared = HEAD + TEXT * max(0, texts)
        fits = declared + size <= self.length
        if n_samples > 0xFFFF and fits:
            return declared  # trace headers cannot state so many: nothing to compare
        # from the front: traces taken for text would be lost without a word where their size divides that of a text
        for offset in range(HEAD, self.length - size + 1, TEXT):
            if offset == declared and (self.blank(offset) or self.matches(offset, n_samples, size)):
                return declared
            if self.matches(offset, n_samples, size):
                found = (offset - HEAD) // TEXT
                self.warn(f"{found} extended text header(s) found, {texts} declared", FILE["texts"].byte)
                return offset
            if offset >= declared and not self.text_or_zero(offset):
                break
        if not fits:
            raise self.error(f"{texts} extended text headers declared; no trace fits after them", FILE["texts"].byte)
        return declared

    def texts(self, revision: tuple[int, int]) -> int:
        """Return the declared number of extended text headers; a variable one (-1) is counted up to its end stanza."""
        declared = self.get("texts") if revision >= (1, 0) else 0
        if declared != -1:
            return declared
        for i, offset in enumerate(range(HEAD, self.length - TEXT + 1, TEXT), start=1):
            block = self.at(offset, TEXT)
            both = (block.decode("cp037") + block.decode("latin-1")).upper().replace(" ", "")
            if fmt.END_TEXT.replace(" ", "") in both:
                return i
            if not fmt.is_text(block):
                break
        self.warn(
            "a variable number of extended text headers is declared, their end stanza is missing", FILE["texts"].byte
        )
        return 0

    def matches(self, offset: int, n_samples: int, size: int) -> bool:
        """Tell whether the trace here and, where the file goes on, the next one state the file's sample count."""
        here = self.at(offset, TRACE_HEAD)
        after = self.at(offset + size, TRACE_HEAD)
        field = TRACE["samples"]
        if len(here) < TRACE_HEAD or field.get(here, self.order) != n_samples:
            return False
        return len(after) < TRACE_HEAD or field.get(after, self.order) == n_samples

    def blank(self, offset: int) -> bool:
        """Tell whether the header here leaves its sample count at 0, as some writers do."""
        return TRACE["samples"].get(self.at(offset, TRACE_HEAD), self.order) == 0

    def text_or_zero(self, offset: int) -> bool:
        block = self.at(offset, TEXT)
        return not block.strip(b"\0") or fmt.is_text(block)

    def count(self, revision: tuple[int, int], first: int, size: int) -> tuple[int, int | None]:
        """Whole traces in the file and the declared number; a cut file gives a warning with what was lost."""
        declared = self.get("n_traces") if revision >= (2, 0) else 0
        trailers = self.get("trailers") if revision >= (2, 0) else 0
        room = self.length - first
        if trailers > 0 and trailers * TEXT < room:
            room -= trailers * TEXT
        while trailers < 0 and not declared and room > size and fmt.is_text(self.at(first + room - TEXT, TEXT)):
            room -= TEXT  # a variable number of trailers: text up to the file's end
        n, rest = divmod(room, size)
        if declared and trailers and declared <= n:
            return declared, declared
        if n == 0:
            raise self.error(f"no whole trace of {size} bytes after byte {first}", first)
        if declared > n or rest:
            lost = f"{declared - n} of {declared} traces are missing" if declared > n else "its last trace is cut"
            self.warn(f"file cut: {lost}; {n} whole traces kept, {rest} bytes left over", first + n * size, key=CUT)
        elif declared and declared < n:
            self.warn(f"{declared} traces declared, {n} found and kept", FILE["n_traces"].byte)
        return n, declared or None

    def interval(self, first: int) -> tuple[int, int]:
        """Interval field (unit not known) and its byte: the file header's, else the first trace's."""
        here = int(TRACE["interval"].get(self.at(first, TRACE_HEAD), self.order))
        field = self.get("interval")
        if not field:
            return here, first + TRACE["interval"].byte
        if here and here != field:
            self.warn(
                f"interval field {field} in the file header, {here} in the first trace; the file header's is used",
                first + TRACE["interval"].byte,
            )
        return field, FILE["interval"].byte

    def exact_us(self, revision: tuple[int, int]) -> float:
        """Revision 2 interval in µs, 0 when it is not set or cannot be one."""
        if revision < (2, 0):
            return 0.0
        value = float(FILE["ext_interval"].get(self.head, self.order))
        if math.isfinite(value) and value >= 0:
            return value
        self.warn(f"revision 2 interval of {value} µs ignored", FILE["ext_interval"].byte)
        return 0.0


def _formats() -> str:
    return "allowed: " + ", ".join(f"{code} ({fmt.FORMAT_NAMES[code]})" for code in FORMATS)
