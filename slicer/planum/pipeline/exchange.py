"""Publish a folder whole or not at all.

The new folder is built aside, then takes the old one's place in one system call where there is one; elsewhere by two
renames and a journal which the next command finishes. A killed run leaves the old folder or the new, never half.
"""

from __future__ import annotations

import contextlib
import ctypes
import errno
import json
import os
import shutil
import sys
from pathlib import Path

from planum.errors import MachineError, Problem

__all__ = ["MARK", "aside", "check_place", "finish", "publish"]

_LINUX_EXCHANGE, _AT_CWD = 2, -100
_DARWIN_SWAP = 2


def publish(new: Path, final: Path) -> None:
    """Put the finished folder ``new`` in the place of ``final``; whatever stood there is removed afterwards.

    Raises
    ------
    MachineError
        When the system refuses: a file in the old folder is held open, or the folder cannot be written. The old
        folder stays whole.
    """
    try:
        if not final.exists():
            new.rename(final)
        elif _swap(new, final):
            shutil.rmtree(new, ignore_errors=True)
        else:
            _two_renames(new, final)
    except OSError as fault:
        raise MachineError(
            Problem(
                came=f"the new result could not take the place of {final.name} ({fault.strerror})",
                do="close the programs that hold its files open and run again; the old result is whole",
                file=str(final),
            )
        ) from fault


def check_place(final: Path) -> None:
    """Refuse to replace a folder that is no run folder: it would be deleted.

    Raises
    ------
    MachineError
        When ``final`` is a file or a link, or a folder with something in it but no ``run.json``.
    """
    ours = final.is_dir() and not final.is_symlink() and ((final / "run.json").is_file() or not any(final.iterdir()))
    if final.exists() and not ours:
        raise MachineError(
            Problem(
                came="something else than a run stands here, and a run would replace it",
                allowed="a new folder, an empty one, or one with a run.json",
                do="choose another --out or --name",
                file=str(final),
            )
        )


def finish(final: Path) -> None:
    """Finish or undo a publication that was cut short; sweep folders a killed run left beside ``final``."""
    journal = _journal(final)
    if journal.is_file():
        with contextlib.suppress(ValueError, KeyError, TypeError):
            names = json.loads(journal.read_text(encoding="utf-8"))
            new, old = final.parent / Path(names["new"]).name, final.parent / Path(names["old"]).name
            if not final.exists() and new.exists():
                new.rename(final)
            elif not final.exists() and old.exists():
                old.rename(final)
            shutil.rmtree(old, ignore_errors=True)
        journal.unlink(missing_ok=True)
    for left in final.parent.glob(f".{final.name}-*"):
        if (left / MARK).is_file() or (left / "run.json").is_file():
            shutil.rmtree(left, ignore_errors=True)


MARK = ".being-built"
"""A file in every folder under construction: only folders that carry it are swept."""


def aside(final: Path, token: str) -> Path:
    """Return a new empty folder beside ``final`` in which a result is built."""
    folder = final.parent / f".{final.name}-{token}"
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    try:
        (folder / MARK).touch()
    except OSError:  # a folder without the mark would never be swept
        folder.rmdir()
        raise
    return folder


def _journal(final: Path) -> Path:
    return final.parent / f".{final.name}.journal"


def _two_renames(new: Path, final: Path) -> None:
    old = final.parent / f".{final.name}-old"
    shutil.rmtree(old, ignore_errors=True)
    journal = _journal(final)
    journal.write_text(json.dumps({"new": new.name, "old": old.name}), encoding="utf-8")
    try:
        final.rename(old)
    except OSError:
        journal.unlink(missing_ok=True)
        raise
    new.rename(final)
    shutil.rmtree(old, ignore_errors=True)
    journal.unlink(missing_ok=True)


def _swap(a: Path, b: Path) -> bool:
    """Exchange two folders in one call; False where the system or file system cannot."""
    try:
        libc = ctypes.CDLL(None, use_errno=True)
        if sys.platform == "darwin":
            done = libc.renamex_np(os.fsencode(a), os.fsencode(b), _DARWIN_SWAP)
        elif sys.platform.startswith("linux"):
            done = libc.renameat2(_AT_CWD, os.fsencode(a), _AT_CWD, os.fsencode(b), _LINUX_EXCHANGE)
        else:
            return False
    except (OSError, AttributeError, TypeError):
        return False
    if done == 0:
        return True
    code = ctypes.get_errno()
    if code in {errno.ENOSYS, errno.EINVAL, errno.ENOTSUP, errno.EOPNOTSUPP}:
        return False
    raise OSError(code, os.strerror(code))
