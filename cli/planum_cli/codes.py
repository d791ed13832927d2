"""Exit codes, fixed from the first release, and which error leads to which."""

from __future__ import annotations

import errno
import os

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


def _of_system(error: OSError) -> Problem:
    name = os.fspath(error.filename) if isinstance(error.filename, str | os.PathLike) else ""
    if error.errno in _DISK_FULL:
        do = "free some space (planum tidy SITE empties the work folder), or write elsewhere with --out"
        return Problem("the disk is full", do=do, file=name)
    if error.errno in _FORBIDDEN:
        return Problem("no permission", do="choose a folder you may write to, or close the program using it", file=name)
    return Problem(error.strerror or printable(error) or "the system refused", do="look at the path", file=name)
