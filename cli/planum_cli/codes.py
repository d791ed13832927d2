"""Exit codes, fixed from the first release, and which error leads to which."""

from __future__ import annotations

import errno
import os
import re
from pathlib import Path

from planum.errors import MachineError, PlanumError, Problem, printable

__all__ = ["DONE", "INTERRUPTED", "MACHINE", "SET_ASIDE", "SURVEY", "USAGE", "code_of", "problems_of"]

DONE = 0
SET_ASIDE = 1
USAGE = 2
SURVEY = 3
MACHINE = 4
INTERRUPTED = 130

MEANING = {
    DONE: "done",
    SET_ASIDE: "done, with lines set aside",
    USAGE: "the command was typed wrongly",
    SURVEY: "the survey needs a correction",
    MACHINE: "the machine could not do it",
    INTERRUPTED: "stopped by you",
}

_DISK_FULL = {errno.ENOSPC, getattr(errno, "EDQUOT", errno.ENOSPC)}
_SAYS_FULL = "No space left on device"
"""In the text of libraries that hand the system's number on in words only."""
_FORBIDDEN = {errno.EACCES, errno.EPERM, errno.EROFS}


def code_of(error: BaseException) -> int:
    """Return the exit code of an error: what people can correct in the survey is 3, everything else 4."""
    if isinstance(error, MachineError):
        return MACHINE
    if isinstance(error, PlanumError):
        return SURVEY
    return MACHINE


def problems_of(error: BaseException) -> tuple[Problem, ...]:
    """Return what an error says, as problems that name the next step.

    A `PlanumError` brings its own; a system error and anything unforeseen get one sentence with a way out.
    """
    if (full := _full_disk(error)) is not None:
        return (full,)
    if isinstance(error, PlanumError):
        return error.problems or (Problem(f"{type(error).__name__} without a word", do="run again with --debug"),)
    if isinstance(error, MemoryError):
        return (Problem("the memory is full", do="run again with --workers 1, or close other programs"),)
    if isinstance(error, OSError):
        return (_of_system(error),)
    what = f"{type(error).__name__}: {printable(error)}" if str(error) else type(error).__name__
    return (
        Problem(
            f"something unforeseen happened ({what})",
            do="your line files are untouched; run the same command again with --debug and report what it prints",
        ),
    )


def _full_disk(error: BaseException) -> Problem | None:
    """Return the full disk behind an error, by the folder that was written to; None when that is not the matter."""
    if isinstance(error, PlanumError) and not isinstance(error, MachineError):
        return None
    chain: list[BaseException] = []
    at: BaseException | None = error
    while at is not None and at not in chain:
        chain.append(at)
        at = at.__cause__ or at.__context__
    if not any(isinstance(e, OSError) and (e.errno in _DISK_FULL or _SAYS_FULL in str(e)) for e in chain):
        return None
    folder = _results_folder(Path(_written(chain) or "."))
    work = next((p for p in (folder, *folder.parents) if p.name == "work" and (p / "CACHEDIR.TAG").is_file()), None)
    if work is not None:
        do = "free some space there, or move the survey folder to a larger disk; what planum tidy frees is made again"
        return Problem("the disk of this work folder is full", do=do, file=str(work))
    do = "free some space there, or choose a folder on another disk (map: --out DIR)"
    return Problem("the disk of this folder is full", do=do, file=str(folder))


def _written(chain: list[BaseException]) -> str:
    """Return the path that could not be written: a copy names its source first, so its second name counts."""
    systems = [e for e in chain if isinstance(e, OSError)]
    told = [e.filename2 for e in systems if e.filename2]
    told += [p.file for e in chain if isinstance(e, MachineError) for p in e.problems if p.file]
    told += [e.filename for e in systems if e.filename]
    return next((os.fspath(name) for name in told if isinstance(name, str | os.PathLike)), "")


def _results_folder(path: Path) -> Path:
    """Return the folder of a file; of one being built under a hidden name, the folder it is to become."""
    for part in (path, *path.parents):
        if (building := re.fullmatch(r"\.(.+)-(?:[0-9a-f]{16}|part)", part.name)) is not None and part != path:
            return part.with_name(building[1])
    return path if path.is_dir() else path.parent


def _of_system(error: OSError) -> Problem:
    name = os.fspath(error.filename) if isinstance(error.filename, str | os.PathLike) else ""
    if error.errno in _FORBIDDEN:
        return Problem("no permission", do="choose a folder you may write to, or close the program using it", file=name)
    if error.errno == errno.ENOENT and name and not (folder := Path(name).parent).exists():
        return Problem("the folder does not exist", do="make it, or name another", file=str(folder))
    return Problem(error.strerror or printable(error) or "the system refused", do="look at the path", file=name)
