"""Publishing a folder: whole-old or whole-new, whatever the system offers and wherever it is cut short."""

from __future__ import annotations

from pathlib import Path

import pytest

from planum.errors import MachineError
from planum.pipeline import exchange
from planum.pipeline.store import Store


def folder(path: Path, text: str) -> Path:
    """Make a finished run folder that holds one text."""
    path.mkdir(parents=True)
    (path / "run.json").write_text(text, encoding="utf-8")
    return path


def text(path: Path) -> str:
    return (path / "run.json").read_text(encoding="utf-8")


@pytest.mark.parametrize("swaps", [True, False])
def test_new_takes_the_place_of_old(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, swaps: bool) -> None:
    """With the one-call exchange and without it, nothing but the new folder remains."""
    if not swaps:
        monkeypatch.setattr(exchange, "_swap", lambda *_: False)
    final = folder(tmp_path / "out", "old")
    exchange.publish(folder(tmp_path / ".out-abc", "new"), final)
    assert text(final) == "new"
    assert [p.name for p in tmp_path.iterdir()] == ["out"]


def test_first_publication(tmp_path: Path) -> None:
    """Without an old folder the new one is simply renamed."""
    exchange.publish(folder(tmp_path / ".out-abc", "new"), tmp_path / "out")
    assert text(tmp_path / "out") == "new"


@pytest.mark.parametrize("at", [1, 2])
def test_cut_between_two_renames_is_finished_by_the_next_command(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, at: int
) -> None:
    """Stopped before either rename: the next command leaves one whole folder, and no journal."""
    monkeypatch.setattr(exchange, "_swap", lambda *_: False)
    final, new = folder(tmp_path / "out", "old"), folder(tmp_path / ".out-abc", "new")
    real, calls = Path.rename, []

    def rename(self: Path, target: Path) -> Path:
        calls.append(self)
        if len(calls) == at:
            raise KeyboardInterrupt
        return real(self, target)

    monkeypatch.setattr(Path, "rename", rename)
    with pytest.raises(KeyboardInterrupt):
        exchange.publish(new, final)
    monkeypatch.setattr(Path, "rename", real)
    exchange.finish(final)
    assert text(final) == ("old" if at == 1 else "new")
    assert [p.name for p in tmp_path.iterdir()] == ["out"]


def test_only_our_own_leftovers_are_swept(tmp_path: Path) -> None:
    """A folder under construction goes; somebody's folder of a like name stays."""
    final = folder(tmp_path / "out", "old")
    exchange.aside(final, "abc")
    (tmp_path / ".out-mine").mkdir()
    (tmp_path / ".out-mine" / "letter.txt").touch()
    exchange.finish(final)
    assert sorted(p.name for p in tmp_path.iterdir()) == [".out-mine", "out"]


def test_refusal_keeps_the_old_and_says_what_to_do(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A file held open (as on Windows): the old folder stays whole, the sentence says what to close."""

    def refuse(*_: object) -> bool:
        raise PermissionError(13, "in use")

    monkeypatch.setattr(exchange, "_swap", refuse)
    final = folder(tmp_path / "out", "old")
    with pytest.raises(MachineError, match="close the programs that hold its files open"):
        exchange.publish(folder(tmp_path / ".out-abc", "new"), final)
    assert text(final) == "old"


def test_a_folder_of_somebody_else_is_never_replaced(tmp_path: Path) -> None:
    """Letters are not a run: refused, untouched; an empty folder and an earlier run are fine."""
    letters = tmp_path / "letters"
    letters.mkdir()
    exchange.check_place(letters)
    (letters / "letter.txt").touch()
    with pytest.raises(MachineError, match="something else than a run stands here"):
        exchange.check_place(letters)
    exchange.check_place(folder(tmp_path / "out", "old"))
    exchange.check_place(tmp_path / "new")


def test_a_link_is_never_written_through(tmp_path: Path) -> None:
    """A survey folder that came from elsewhere may hold links named out and work: both are refused."""
    elsewhere = folder(tmp_path / "elsewhere", "mine")
    (tmp_path / "out").symlink_to(elsewhere)
    with pytest.raises(MachineError, match="something else than a run stands here"):
        exchange.check_place(tmp_path / "out")
    (tmp_path / "work").symlink_to(elsewhere)
    with pytest.raises(MachineError, match="work is a link or a file"):
        Store(tmp_path / "work")
    assert sorted(p.name for p in elsewhere.iterdir()) == ["run.json"]
