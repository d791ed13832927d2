"""The cache: identities without rereading, whole files only, and nothing that must be kept."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest

from planum.pipeline.store import Store


def test_cache_says_it_is_one(tmp_path: Path) -> None:
    """The tag of the cache directory tagging specification, so that backups leave it out."""
    Store(tmp_path / "work")
    tag = (tmp_path / "work" / "CACHEDIR.TAG").read_text(encoding="ascii")
    assert tag.startswith("Signature: 8a477f597d28d172789f06886806bc55")


def test_identity_is_the_sha256_and_is_remembered(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """sha256 of "hello\\n" (published widely); a second store reads no byte unless size or time changed."""
    path = tmp_path / "a.sgy"
    path.write_bytes(b"hello\n")
    store = Store(tmp_path / "work")
    digest = "5891b5b522d5df086d0ff0b110fbd9d21bb4fc7163af34d08286a2e846f6be03"
    assert store.file_id(path, "a.sgy") == digest
    store.remember()
    real = Path.open
    monkeypatch.setattr(Path, "open", lambda p, *a, **k: pytest.fail("read again") if p == path else real(p, *a, **k))
    assert Store(tmp_path / "work").file_id(path, "a.sgy") == digest
    monkeypatch.setattr(Path, "open", real)
    os.utime(path, ns=(1, 1))
    path.write_bytes(b"hellO\n")
    assert Store(tmp_path / "work").file_id(path, "a.sgy") != digest


def test_damaged_entries_count_as_missing(tmp_path: Path) -> None:
    """A cache that was cut or scribbled on is made again, not believed."""
    store = Store(tmp_path / "work")
    store.save_json("census", "k", {"a": 1})
    store.save_array("rows", "k", np.arange(6.0))
    assert store.load_json("census", "k") == {"a": 1}
    assert store.load_array("rows", "k") is not None
    for path in (store.path("census", "k", ".json"), store.path("rows", "k", ".npy")):
        path.write_bytes(path.read_bytes()[:5])
    assert store.load_json("census", "k") is None
    assert store.load_array("rows", "k") is None
    assert store.load_json("census", "other") is None
