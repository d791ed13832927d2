"""The ``work/`` folder: everything in it can be deleted at any time and is made again.

::

    work/CACHEDIR.TAG           the folder says of itself that it is a cache
    work/files.json             path, size, mtime_ns -> sha256, so that a rerun reads no raw file
    work/census/<key>.json      facts of one recorded line
    work/estimates/<key>.json   numbers learned from several lines
    work/rows/<key>.npy         slices along one line; work/flags/<key>.npy its flags
    work/sections/<key>.png     the picture of one line
    work/strips/<key>/          one set's rows, slice by slice (zarr)
    work/gridded/<key>/         the slice stack on the common raster (zarr)

Every file is written aside and renamed, so a killed run leaves whole files only.
"""

from __future__ import annotations

import hashlib
import json
import threading
from pathlib import Path
from typing import Any

import numpy as np

from planum.errors import MachineError, Problem
from planum.outputs.writing import aside

__all__ = ["Store"]

_TAG = "Signature: 8a477f597d28d172789f06886806bc55\n# Rebuildable files of planum. See https://bford.info/cachedir/\n"


class Store:
    """One site's ``work/`` folder.

    Raises
    ------
    MachineError
        When ``folder`` is a link or a file (a survey folder is not trusted to say where to write), or cannot be
        written.
    """

    def __init__(self, folder: Path) -> None:
        if folder.is_symlink() or (folder.exists() and not folder.is_dir()):
            raise MachineError(
                Problem(came="work is a link or a file", allowed="a folder", do="remove it", file=str(folder))
            )
        self.folder = folder
        self._write(folder / "CACHEDIR.TAG", _TAG)
        self._known: dict[str, list[Any]] = self._load(folder / "files.json") or {}
        self._lock = threading.Lock()

    def file_id(self, path: Path, name: str) -> str:
        """Return the sha256 of a file's bytes, remembered by path, size and modification time."""
        stat = path.stat()
        mark = [stat.st_size, stat.st_mtime_ns]
        known = self._known.get(name)
        if known and known[:2] == mark:
            return str(known[2])
        with path.open("rb") as file:
            digest = hashlib.file_digest(file, "sha256").hexdigest()
        with self._lock:
            self._known[name] = [*mark, digest]
        return digest

    def remember(self) -> None:
        """Write the file identities down."""
        self._write(self.folder / "files.json", json.dumps(self._known, sort_keys=True, indent=0))

    def path(self, kind: str, key: str, suffix: str) -> Path:
        """Return where something of this kind and key is kept."""
        return self.folder / kind / f"{key}{suffix}"

    def load_json(self, kind: str, key: str) -> Any | None:
        """Return a stored JSON value, or None when there is none that can be read."""
        return self._load(self.path(kind, key, ".json"))

    def save_json(self, kind: str, key: str, value: Any) -> None:
        """Keep a JSON value."""
        self._write(self.path(kind, key, ".json"), json.dumps(value, allow_nan=False))

    def load_array(self, kind: str, key: str) -> np.ndarray | None:
        """Return a stored array, mapped from disk, or None when there is none that can be read."""
        try:
            return np.load(self.path(kind, key, ".npy"), mmap_mode="r", allow_pickle=False)
        except (OSError, ValueError, EOFError):
            return None

    def save_array(self, kind: str, key: str, array: np.ndarray) -> None:
        """Keep a plain array."""
        with aside(self.path(kind, key, ".npy")) as part, part.open("wb") as file:
            np.save(file, array, allow_pickle=False)

    @staticmethod
    def _write(path: Path, text: str) -> None:
        with aside(path) as part:
            part.write_text(text, encoding="utf-8")

    @staticmethod
    def _load(path: Path) -> Any | None:
        try:
            return json.loads(path.read_text(encoding="utf-8"))
        except (OSError, ValueError):
            return None
