"""Rows of a plan: what their names depend on, how their pieces are read, and the same rows as a lazy cube."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import segyio

from planum import schema
from planum.engine.linepass import condition, row_cube
from planum.errors import LineError, Problem, SurveyError
from planum.pipeline import products
from planum.pipeline.cubes import open_cube
from planum.pipeline.passes import read_pieces, row_key, strip_of
from planum.pipeline.run import map_site, plan_site
from planum.records import FLAG_NONE, SetPlan, StepSpec, Strip


@pytest.fixture(scope="module")
def site(scrap: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The scrap survey without line 3, mapped."""
    folder = tmp_path_factory.mktemp("rows") / "site"
    shutil.copytree(scrap, folder)
    (folder / "lines" / "A_003.sgy").unlink()
    with pytest.MonkeyPatch.context() as patched:
        patched.setattr(products, "draw_scene", lambda *_: Problem("this machine cannot draw"))
        map_site(folder)
    return folder


@pytest.fixture(scope="module")
def plan(site: Path) -> SetPlan:
    return plan_site(site).sets[0]


def with_entry(plan: SetPlan, row: int, **changed: Any) -> SetPlan:
    return plan.model_copy(
        update={"entries": tuple(e.model_copy(update=changed) if e.row == row else e for e in plan.entries)}
    )


@pytest.mark.parametrize(
    "change",
    [
        lambda p: with_entry(p, 1, gain=1.1),
        lambda p: with_entry(p, 1, zero_ns=((0, 6.2),)),
        lambda p: with_entry(p, 1, file_id="f" * 64),
        lambda p: with_entry(p, 1, end=(3.1, 0.25)),
        lambda p: with_entry(p, 1, dropped=((3, 5),)),
        lambda p: p.model_copy(update={"chain": (*p.chain[:-1], StepSpec(name="envelope", version=2))}),
        lambda p: p.model_copy(update={"windows_ns": p.windows_ns[:2]}),
        lambda p: p.model_copy(update={"geometry": p.geometry.model_copy(update={"time0_ns": -2.7})}),
        lambda p: with_entry(p, 1, interval_ns=0.31),
        lambda p: p.model_copy(update={"reader": {"reader": "raw"}}),
    ],
)
def test_name_of_a_row_changes_with_all_it_depends_on(plan: SetPlan, change: Callable[[SetPlan], SetPlan]) -> None:
    """Bytes, corrections, axes, chain, windows and the way of reading: each makes another strip."""
    assert row_key(change(plan), 1) != row_key(plan, 1)


@pytest.mark.parametrize(
    "change",
    [
        lambda p: with_entry(p, 0, gain=1.1),  # another row's
        lambda p: with_entry(p, 1, because=("line balance",)),  # words
        lambda p: p.model_copy(update={"visit": "2026-01-01"}),
        lambda p: p.model_copy(update={"frame": p.frame.model_copy(update={"e0": 100.0})}),  # gridding's business
    ],
)
def test_name_of_a_row_does_not_change_with_anything_else(plan: SetPlan, change: Callable[[SetPlan], SetPlan]) -> None:
    """A corrected control point or a better word recomputes no line."""
    assert row_key(change(plan), 1) == row_key(plan, 1)


def test_rows_have_names_of_their_own(plan: SetPlan) -> None:
    rows = sorted({e.row for e in plan.entries})
    assert rows == [0, 1, 3, 4]
    assert len({row_key(plan, r) for r in rows}) == 4


def test_piece_is_the_file_as_recorded(site: Path, plan: SetPlan) -> None:
    """One file, one piece, its samples as an independent reader (segyio) finds them; no row, no piece."""
    pieces = read_pieces(site, plan, 1)
    assert len(pieces) == 1
    assert pieces[0].entry.file == "lines/A_002.sgy"
    with segyio.open(site / "lines" / "A_002.sgy", ignore_geometry=True) as file:
        np.testing.assert_array_equal(pieces[0].data, file.trace.raw[:])
    assert pieces[0].interval_ns == pytest.approx(0.3)
    assert pieces[0].x is None
    assert read_pieces(site, plan, 2) == []


def test_broken_line_is_a_problem_not_an_exception(site: Path, plan: SetPlan, tmp_path: Path) -> None:
    """What cannot be read in the second pass is told by the register's name of the file; others give strips."""
    copy = tmp_path / "site"
    shutil.copytree(site / "lines", copy / "lines")
    (copy / "lines" / "A_002.sgy").write_bytes(b"no line at all" * 300)
    (copy / "lines" / "A_004.sgy").unlink()
    for row, name in ((1, "lines/A_002.sgy"), (3, "lines/A_004.sgy")):
        told = strip_of(copy, plan, row)
        assert isinstance(told, Problem)
        assert told.file == name
        with pytest.raises(LineError):
            read_pieces(copy, plan, row)
    assert isinstance(strip_of(copy, plan, 0), Strip)


def test_plan_cannot_read_outside_the_survey(site: Path, plan: SetPlan) -> None:
    """A plan is a file from elsewhere: a path that leaves the folder is refused."""
    with pytest.raises(SurveyError, match="outside"):
        read_pieces(site, with_entry(plan, 1, file="../outside.sgy"), 1)


def test_cube_holds_the_rows_of_the_plan(site: Path, plan: SetPlan) -> None:
    """Each row is the chain up to the stage; the missing row holds 0 and is flagged; axes are the plan's."""
    raw, migrated = open_cube(site, "A/x"), open_cube(site, "A/x", stage="migrate")
    for cube in (raw, migrated):
        schema.check_cube(cube)
        assert cube.dtype == np.float32
        assert cube.chunks is not None
        assert [len(c) for c in cube.chunks] == [5, 1, 1]
        np.testing.assert_allclose(cube["line"], 0.25 * np.arange(5), atol=1e-12)
        np.testing.assert_allclose(cube["along"], 0.05 * np.arange(61), atol=1e-9)
        np.testing.assert_array_equal((cube["flag"].values & FLAG_NONE) != 0, np.arange(5)[:, None] == np.full(61, 2))
    assert not raw.isel(line=2).values.any()
    by_hand = row_cube(read_pieces(site, plan, 1), plan, 1)
    np.testing.assert_array_equal(raw.isel(line=1), by_hand.isel(line=0))
    until = [s.name for s in plan.chain].index("migrate") + 1
    np.testing.assert_array_equal(migrated.isel(line=1), condition(by_hand, plan.chain[:until]).isel(line=0))
    assert migrated.attrs["quantity"] == "voltage"
    assert open_cube(site, "A/x", stage="envelope").attrs["quantity"] == "envelope"
