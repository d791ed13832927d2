"""Tidying removes the work folder of a site, and nothing that is not ours."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest

from planum.errors import MachineError, SurveyError
from planum.pipeline.store import Store
from planum.pipeline.tidy import tidy


@pytest.fixture
def site(tmp_path: Path) -> Path:
    """Return a site with raw lines, a run and a work folder as the store makes it."""
    site = tmp_path / "site"
    for name in ("lines/1.sgy", "out/slices.nc", ".out-abc/half", "survey.toml"):
        (site / name).parent.mkdir(parents=True, exist_ok=True)
        (site / name).write_text("keep")
    Store(site / "work").save_json("census", "aa", {"a": 1})
    return site


def everything(folder: Path) -> set[str]:
    return {str(p.relative_to(folder)) for p in folder.rglob("*")}


def test_only_the_work_folder_goes(site: Path) -> None:
    """Lines, runs, and even a killed run's aside folder stay; the bytes told are the bytes that were there."""
    before = everything(site)
    size = sum(p.stat().st_size for p in (site / "work").rglob("*") if p.is_file())
    assert size > 0
    assert tidy(site) == size
    assert everything(site) == {name for name in before if not name.startswith("work")}


def test_nothing_to_tidy_is_no_mistake(site: Path) -> None:
    """A second call finds nothing and says 0."""
    tidy(site)
    assert tidy(site) == 0


def test_a_folder_that_is_no_survey_is_named(tmp_path: Path) -> None:
    """Nothing to free there does not mean that the survey has nothing to free."""
    with pytest.raises(SurveyError, match=r"is no survey folder.*survey\.toml"):
        tidy(tmp_path)


def test_a_folder_without_the_tag_is_not_ours(site: Path) -> None:
    """A person's own folder called work is left alone."""
    (site / "work" / "CACHEDIR.TAG").unlink()
    before = everything(site)
    with pytest.raises(SurveyError, match=r"does not carry the CACHEDIR\.TAG"):
        tidy(site)
    assert everything(site) == before


def test_a_tag_that_says_something_else_is_not_ours(site: Path) -> None:
    """The name of the tag alone is no licence; the specification asks for its first 43 bytes."""
    (site / "work" / "CACHEDIR.TAG").write_text("Signature: something else")
    with pytest.raises(SurveyError, match="does not carry"):
        tidy(site)
    assert (site / "work" / "census" / "aa.json").is_file()


def test_a_linked_tag_is_not_ours(site: Path, tmp_path: Path) -> None:
    """The specification asks for a regular file."""
    tag = site / "work" / "CACHEDIR.TAG"
    tag.rename(tmp_path / "tag")
    tag.symlink_to(tmp_path / "tag")
    with pytest.raises(SurveyError, match="does not carry"):
        tidy(site)


def test_a_linked_work_folder_is_refused(site: Path, tmp_path: Path) -> None:
    """What a link points at may be anything."""
    (site / "work").rename(tmp_path / "elsewhere")
    (site / "work").symlink_to(tmp_path / "elsewhere")
    with pytest.raises(SurveyError, match="is a link"):
        tidy(site)
    assert (tmp_path / "elsewhere" / "census" / "aa.json").is_file()


def test_a_file_called_work_is_refused(site: Path) -> None:
    """It is no folder, so it is not ours."""
    shutil.rmtree(site / "work")
    (site / "work").write_text("mine")
    with pytest.raises(SurveyError, match="is not a folder"):
        tidy(site)
    assert (site / "work").read_text() == "mine"


def test_links_inside_go_and_their_targets_stay(site: Path, tmp_path: Path) -> None:
    """Neither a linked file nor a linked folder is followed, and neither counts as freed space."""
    (tmp_path / "target").mkdir()
    (tmp_path / "target" / "file").write_text("x" * 1000)
    (site / "work" / "a").symlink_to(tmp_path / "target")
    (site / "work" / "census" / "b").symlink_to(tmp_path / "target" / "file")
    assert tidy(site) < 1000
    assert (tmp_path / "target" / "file").read_text() == "x" * 1000
    assert not (site / "work").exists()


def test_a_file_with_a_second_name_frees_nothing(site: Path, tmp_path: Path) -> None:
    """Its bytes stay on the disk under the other name."""
    (tmp_path / "big").write_bytes(b"x" * 5000)
    os.link(tmp_path / "big", site / "work" / "census" / "big")
    assert tidy(site) < 5000


def test_tidying_cut_short_can_be_taken_up_again(site: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The tag goes last: whatever stops the first call, the second still knows the folder as ours."""

    def refuse(path: str) -> None:
        raise PermissionError(13, "in use", path)

    with monkeypatch.context() as patch:
        patch.setattr("planum.pipeline.tidy.shutil.rmtree", refuse)
        with pytest.raises(MachineError, match="in use"):
            tidy(site)
    assert tidy(site) > 0
    assert not (site / "work").exists()
