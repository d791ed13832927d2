r"""Trust nothing that came on a stick: paths, sizes, text and names from a survey folder.

The rules: a path is relative, ``\`` is read as ``/``, and with all links followed it ends inside the folder or a
root the user named. A text file is read only when it is a regular file of believable size.
"""

from __future__ import annotations

import codecs
import re
import unicodedata
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path, PurePosixPath

from planum.errors import Problem, SurveyError

__all__ = ["inside", "is_device", "is_file", "natural_key", "posix", "read_text_capped"]

LONGEST_PATH = 1000
MOST_TOML_BYTES = 1_000_000
MOST_TABLE_BYTES = 16_000_000
"""About 200 000 register rows: ten times the largest surveys known to us."""

_UNSEEN = frozenset({"Cc", "Cf", "Cs", "Zl", "Zp"})
"""Unicode's control, format (reversing), surrogate and line-breaking characters."""
_RELATIVE = "a path relative to the survey folder, with the file inside it"
_DEVICES = frozenset({"con", "prn", "aux", "nul", "conin$", "conout$"}) | {
    f"{port}{n}" for port in ("com", "lpt") for n in "0123456789¹²³"
}


def is_device(name: str) -> bool:
    """Whether a file of this name would be a device on Windows, whatever its suffix and case (``com1.txt``)."""
    return name.split(".", maxsplit=1)[0].strip().lower() in _DEVICES


def natural_key(text: str) -> tuple[tuple[int, int, str], ...]:
    """Return a sort key that puts ``A_2`` before ``A_10`` and does not mind case."""
    parts = re.split(r"([0-9]+)", text.casefold())
    # compared as (length, digits): int() refuses the thousands of digits a hostile file may hold
    return tuple(
        (0, len(p.lstrip("0")), p.lstrip("0")) if i % 2 else (1, 0, p) for i, p in enumerate(parts) if p or i % 2
    )


def posix(text: str) -> str:
    r"""Return a path as typed with ``\`` read as ``/`` and without ``.`` and doubled slashes."""
    return str(PurePosixPath(text.strip().replace("\\", "/")))


def _refused(text: str, why: str, do: str = "") -> SurveyError:
    return SurveyError(Problem(f"the path {text!r} {why}", f"allowed is {_RELATIVE}", do))


def _check_words(text: str) -> str:
    """Refuse what is wrong with a path before the disk is asked."""
    if not text.strip():
        raise _refused(text, "is empty")
    if len(text) > LONGEST_PATH:
        raise _refused(text[:40] + "…", f"has {len(text)} characters, more than {LONGEST_PATH}")
    if any(unicodedata.category(c) in _UNSEEN for c in text):
        raise _refused(text, "holds control characters", "rename the file")
    plain = text.strip().replace("\\", "/")
    if plain.lower().startswith(("/vsi", "vsi:")):
        raise _refused(text, "is a virtual path")
    if re.match(r"[A-Za-z]:", plain) or plain.startswith("/"):
        raise _refused(text, "is absolute", "copy the file into the survey folder")
    if "://" in plain or re.match(r"(https?|ftps?|file|s3|gs|data):", plain, re.IGNORECASE):
        raise _refused(text, "is a URL", "download the file into the survey folder")
    if ":" in plain:
        raise _refused(text, "holds a colon", "rename the file")
    if plain.startswith("~"):
        raise _refused(text, "starts at a home directory")
    for part in PurePosixPath(plain).parts:
        if is_device(part):
            raise _refused(text, f"names the device {part!r}", "rename the file")
    return plain


def inside(folder: Path, text: str, *, roots: Sequence[Path] = ()) -> Path:
    r"""Return the resolved path of a file named in a survey, which need not exist.

    Parameters
    ----------
    folder
        The survey folder; ``text`` is relative to it.
    text
        As typed; ``\`` is read as ``/``.
    roots
        Further folders the *user* allows (never read from a file).

    Raises
    ------
    SurveyError
        When the path is absolute, a URL, a virtual or home path, a device, holds control characters, or leaves the
        folder and the roots once links are followed.
    """
    plain = _check_words(text)
    try:
        path = (folder / plain).resolve()
        allowed = [Path(root).resolve() for root in (folder, *roots)]
    except (OSError, RuntimeError, ValueError) as error:  # link loops, names the system cannot hold
        raise _refused(text, f"cannot be followed ({error})") from error
    if not any(path.is_relative_to(root) for root in allowed):
        raise _refused(text, "leaves the survey folder", "move the file into it, or name its folder as a further root")
    return path


def is_file(path: Path) -> bool:
    """Whether a regular file is there and can be asked for; never raises."""
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False


def read_text_capped(folder: Path, name: str, *, most_bytes: int, roots: Sequence[Path] = ()) -> str:
    """Return the text of a file of the survey: UTF-8, UTF-16 or Windows-1252, with or without byte-order mark.

    Raises
    ------
    SurveyError
        When the path is refused (see :func:`inside`), the file is missing, not a regular file, unreadable, holds
        more than ``most_bytes`` bytes, or is not text.
    """
    try:
        path = inside(folder, name, roots=roots)
    except SurveyError as error:
        raise SurveyError(replace(error.problems[0], file=name)) from error
    if not is_file(path):
        raise SurveyError(Problem(f"{name} is not there, or not a regular file", file=name))
    try:
        with path.open("rb") as stream:
            data = stream.read(most_bytes + 1)
    except OSError as error:
        raise SurveyError(Problem(f"{name} cannot be read ({error.strerror})", file=name)) from error
    if len(data) > most_bytes:
        raise SurveyError(Problem(f"{name} holds more than {most_bytes} bytes", "", "is it the right file?", file=name))
    return _decode(data, name)


def _decode(data: bytes, name: str) -> str:
    try:
        if data.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
            text = data.decode("utf-16")
        elif data[1:2] == b"\0" or data[:1] == b"\0":  # UTF-16 of plain letters without its mark
            text = data.decode("utf-16-le" if data[1:2] == b"\0" else "utf-16-be")
        else:
            text = data.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = data.decode("cp1252", errors="replace")
    if "\0" in text:
        raise SurveyError(Problem(f"{name} is not text", "UTF-8 text is expected", "save it as text", file=name))
    return text.replace("\r\n", "\n").replace("\r", "\n")
