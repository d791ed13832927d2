"""Free a site's ``work/`` folder, and nothing else."""

from __future__ import annotations

import os
import shutil
import stat
from pathlib import Path

from planum.errors import MachineError, Problem, SurveyError

__all__ = ["tidy"]

TAG = "CACHEDIR.TAG"
SIGNATURE = b"Signature: 8a477f597d28d172789f06886806bc55"
"""First bytes of the tag (Cache Directory Tagging Specification, bford.info/cachedir)."""


def tidy(site: Path) -> int:
    """Remove ``work/`` of a survey folder; everything in it is made again when it is needed.

    The tag goes last, so that a tidying that was cut short can be taken up again. Links inside ``work/`` are removed,
    what they point at stays.

    Parameters
    ----------
    site
        The survey folder.

    Returns
    -------
    int
        Bytes freed; 0 when there was no ``work/``.

    Raises
    ------
    SurveyError
        When ``work`` is a link or no folder, or does not carry the tag this program puts there: then it is not ours.
        When there is neither ``work`` nor ``survey.toml``: then it is another folder that is meant.
    MachineError
        When the system refuses to remove something.
    """
    work = Path(site) / "work"
    try:
        kind = work.lstat().st_mode
    except FileNotFoundError:
        if not (Path(site) / "survey.toml").is_file():
            do = "name the folder that holds survey.toml"
            raise SurveyError(Problem("is no survey folder", "nothing was removed", do, file=str(site))) from None
        return 0
    _check(work, kind)
    freed = _bytes_in(work)
    try:
        for entry in os.scandir(work):
            if entry.name == TAG:
                continue
            if entry.is_dir(follow_symlinks=False) and not _is_junction(entry.path):
                shutil.rmtree(entry.path)
            else:
                Path(entry.path).unlink()
        (work / TAG).unlink()
        work.rmdir()
    except OSError as error:
        raise MachineError(
            Problem(
                f"cannot be removed ({error.strerror})",
                do="close the programs that use the work folder, then run planum tidy again",
                file=str(error.filename or work),
            )
        ) from error
    return freed


def _check(work: Path, kind: int) -> None:
    """Raise SurveyError unless the folder is one this program made."""
    if stat.S_ISLNK(kind) or _is_junction(str(work)):
        raise _refused(work, "is a link to somewhere else", "remove the link yourself if it is not wanted")
    if not stat.S_ISDIR(kind):
        raise _refused(work, "is not a folder", "rename it: planum map wants to put its work folder there")
    tag = work / TAG
    try:
        ours = stat.S_ISREG(tag.lstat().st_mode) and tag.read_bytes()[: len(SIGNATURE)] == SIGNATURE
    except FileNotFoundError:
        ours = False
    if not ours:
        raise _refused(
            work,
            f"does not carry the {TAG} that planum puts into its work folders",
            "look what is in it; if it may go, remove it yourself",
        )


def _refused(work: Path, came: str, do: str) -> SurveyError:
    return SurveyError(Problem(came, "nothing was removed", do, file=str(work)))


def _is_junction(path: str) -> bool:
    """Tell whether a folder on Windows is a mount point made by a user: it is left by its own name only."""
    return bool(getattr(os.lstat(path), "st_reparse_tag", 0) == getattr(stat, "IO_REPARSE_TAG_MOUNT_POINT", -1))


def _bytes_in(work: Path) -> int:
    """Bytes that become free: regular files that have no second name elsewhere."""
    total = 0
    for parent, _, names in os.walk(work):
        for name in names:
            facts = os.lstat(os.path.join(parent, name))
            if stat.S_ISREG(facts.st_mode) and facts.st_nlink <= 1:
                total += facts.st_size
    return total
