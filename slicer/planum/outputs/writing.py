"""Whole files or none: everything is written under another name beside its place and then moved there."""

from __future__ import annotations

import json
import os
import struct
import zlib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path

from PIL import Image
from PIL.PngImagePlugin import PngInfo

from planum.errors import MachineError, Problem
from planum.records import Statement

__all__ = ["PNG_KEY", "aside", "copy_png", "joined", "save_png", "statement_text"]

PNG_KEY = "planum-statement"
"""Keyword of the PNG text chunk, and name of the HTML meta element, that hold the statement as JSON."""


@contextmanager
def aside(path: Path) -> Iterator[Path]:
    """Give a name to write to; move the file to ``path`` when the block ends well, remove it when it does not.

    A process killed half-way leaves ``path`` as it was.

    Raises
    ------
    MachineError
        When the disk refuses.
    """
    part = path.with_name(f".part-{path.name}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        part.unlink(missing_ok=True)
        yield part
        os.replace(part, path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise MachineError(
            Problem(
                f"cannot write: {error}", do="check the free space, the permissions and open programs", file=str(path)
            )
        ) from error
    except BaseException:
        part.unlink(missing_ok=True)
        raise


def statement_text(statement: Statement | Mapping[str, str]) -> str:
    """Return the statement's tags as one line of ASCII JSON."""
    tags = statement.tags() if isinstance(statement, Statement) else dict(statement)
    return json.dumps(tags, sort_keys=True, ensure_ascii=True)


def joined(rows: Sequence[Mapping[str, str]]) -> dict[str, str]:
    """Return what several statements say: one text where all agree, all texts joined by ``" | "`` where they differ."""
    result: dict[str, list[str]] = {}
    for row in rows:
        for name, value in row.items():
            result.setdefault(name, []).append(value)
    return {k: v[0] if len(set(v)) == 1 else " | ".join(v) for k, v in result.items()}


def save_png(
    path: Path, picture: Image.Image, *, title: str, sentence: str = "", statement: str = "", dpi: float = 120.0
) -> None:
    """Write a picture with its statement in text chunks; the same picture gives the same bytes.

    Parameters
    ----------
    title, sentence
        Go to the standard keywords ``Title`` and ``Description`` (PNG specification, section 11.3.3.2).
    statement
        JSON from :func:`statement_text`.
    """
    chunks = PngInfo()
    chunks.add_itxt("Title", title)
    if sentence:
        chunks.add_itxt("Description", sentence)
    if statement:
        chunks.add_itxt(PNG_KEY, statement)
    with aside(path) as part:
        picture.save(part, format="PNG", pnginfo=chunks, dpi=(dpi, dpi), compress_level=4)


def copy_png(source: Path, path: Path, *, statement: str) -> None:
    """Copy a picture with a statement put in as a text chunk, its pixels untouched.

    The chunk is an uncompressed ``iTXt`` after the header (PNG specification, sections 5.3 and 11.3.3.4).
    """
    content = source.read_bytes()
    after = 8 + 25  # signature; IHDR is always first, with 13 bytes of data
    if content[:8] != b"\x89PNG\r\n\x1a\n" or content[12:16] != b"IHDR":
        raise MachineError(Problem("is no PNG", do="remove the survey's work folder and map again", file=str(source)))
    body = b"iTXt" + PNG_KEY.encode("ascii") + b"\0\0\0\0\0" + statement.encode("utf-8")
    chunk = struct.pack(">I", len(body) - 4) + body + struct.pack(">I", zlib.crc32(body))
    with aside(path) as part:
        part.write_bytes(content[:after] + chunk + content[after:])
