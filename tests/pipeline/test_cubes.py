"""A set opened as a cube says where it holds nothing and where its traces truly lie, and belongs to its run."""

from __future__ import annotations

import os
import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from planum.engine.linepass import condition, row_cube
from planum.engine.steps import get_step
from planum.errors import Problem, SurveyError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy
from planum.pipeline import passes, products
from planum.pipeline.cubes import open_cube
from planum.pipeline.passes import read_pieces
from planum.pipeline.run import map_site, read_run
from planum.records import FLAG_DEAD, FLAG_NONE
from planum.synthetic.folder import write_survey
from planum.synthetic.ready import one_page

DEAD = slice(20, 32)


@pytest.fixture(scope="module", params=["register", "header"])
def site(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Five lines of 3 m, mapped: line 2 has 12 dead traces, line 3 ends at 2 m and lies 2 cm beside its row.

    Once placed by the register, once by positions in the files, which say the same.
    """
    folder = tmp_path_factory.mktemp("cubes") / "site"
    scene, layout = one_page()
    write_survey(folder, scene, replace(layout, length_m=3.0, width_m=1.0, walk="one-way"), seed=1)
    toml = (folder / "survey.toml").read_text(encoding="utf-8")
    if request.param == "header":
        toml = toml.replace("[[grid]]", '[[grid]]\npositions = "header"', 1)
    toml += "\n[ground]\nvelocity_m_per_ns = 0.0875\n[slices]\nbottom_m = 0.4\nstep_m = 0.1\n"
    (folder / "survey.toml").write_text(toml, encoding="utf-8")
    table = [row.split(",") for row in (folder / "lines.csv").read_text(encoding="utf-8").splitlines()]
    at = {name: i for i, name in enumerate(table[0])}
    table[3][at["end_x_m"]], table[3][at["start_y_m"]], table[3][at["end_y_m"]] = "2.0", "0.52", "0.52"
    (folder / "lines.csv").write_text("\n".join(",".join(row) for row in table) + "\n", encoding="utf-8")
    for number, row in enumerate(table[1:], 1):
        path = folder / row[at["file"]]
        line = read_line(path, ReadOptions(interval_unit="ps"))
        data = line.data[: 41 if number == 3 else 61].copy()
        if number == 2:
            data[DEAD] = 0
        x0, y0, x1, y1 = (float(row[at[n]]) for n in ("start_x_m", "start_y_m", "end_x_m", "end_y_m"))
        places = {"x": np.linspace(x0, x1, len(data)), "y": np.linspace(y0, y1, len(data))}
        write_segy(path, data, interval_ns=line.interval_ns, **(places if request.param == "header" else {}))
    with pytest.MonkeyPatch.context() as patched:
        patched.setattr(products, "draw_scene", lambda *_: Problem("this machine cannot draw"))
        assert map_site(folder).set_aside == ()
    return folder


def without_work(site: Path, tmp_path: Path) -> Path:
    """Return the site as it is when the cache has been freed."""
    shutil.copytree(site, tmp_path / "site", ignore=shutil.ignore_patterns("work"))
    return tmp_path / "site"


def test_ends_gaps_and_dead_traces_are_flagged(site: Path) -> None:
    """Line 3 stops at 2.0 m and counts 0.75 of a trace spacing farther; 12 dead traces lie from 1.0 to 1.55 m."""
    cube = open_cube(site, "A/x")
    along = cube["along"].values
    flag = cube["flag"].values
    np.testing.assert_array_equal((flag[2] & FLAG_NONE) != 0, along > 2.0 + 0.75 * 0.05)
    np.testing.assert_array_equal((flag[1] & FLAG_DEAD) != 0, (along > 0.99) & (along < 1.56))
    assert not flag[[0, 3, 4]].any()


def test_places_are_the_traces_own(site: Path) -> None:
    """Line 3 lies at 0.52 m; to the centimetre the files keep."""
    cube = open_cube(site, "A/x")
    np.testing.assert_allclose(cube["y"].values[2, :41], 0.52, atol=1e-9)
    np.testing.assert_allclose(cube["y"].values[1], 0.25, atol=1e-9)
    np.testing.assert_allclose(cube["x"].values, np.broadcast_to(cube["along"].values, cube.shape[:2]))


@pytest.mark.parametrize("stage", ["raw", "background", "migrate", "envelope"])
def test_kept_flags_are_those_of_the_row_itself(site: Path, tmp_path: Path, stage: str) -> None:
    """At every stage, with and without a cache, flags and places are what the steps give by hand."""
    plan = read_run(site / "out" / "run.json")[0].sets[0]
    until = 0 if stage == "raw" else [s.name for s in plan.chain].index(stage) + 1
    rows = [condition(row_cube(read_pieces(site, plan, row), plan, row), plan.chain[:until]) for row in range(5)]
    for where in (site, without_work(site, tmp_path)):
        cube = open_cube(where, "A/x", stage=stage).compute()
        for row, by_hand in enumerate(rows):
            for name in ("flag", "x", "y"):
                np.testing.assert_array_equal(cube[name].values[row], by_hand[name].values[0], err_msg=f"{name} {row}")


def test_a_step_applied_to_the_cube_is_the_runs_own(site: Path) -> None:
    """Migrating the opened cube is what the run did: a gap taken for zeros would smear its edges."""
    plan = read_run(site / "out" / "run.json")[0].sets[0]
    params = next(s.params for s in plan.chain if s.name == "migrate")
    by_hand = get_step("migrate")(open_cube(site, "A/x", stage="background"), **params)
    np.testing.assert_array_equal(by_hand.values, open_cube(site, "A/x", stage="migrate").values)
    blind = open_cube(site, "A/x", stage="background").drop_vars("flag")
    assert float(abs(get_step("migrate")(blind, **params) - by_hand)[1:3].max()) > 0  # the flags do matter


def test_flags_and_differences_of_stages_read_no_line(site: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Amplitudes and places wait until they are asked for; a row is read once for all of them."""
    reads = []
    real = passes.Source.read
    monkeypatch.setattr(passes.Source, "read", lambda self: reads.append(self.name) or real(self))
    raw, migrated = open_cube(site, "A/x"), open_cube(site, "A/x", stage="migrate")
    assert isinstance(raw["flag"].data, np.ndarray)
    both = xr.Dataset({"raw": raw.drop_vars("flag"), "gone": raw.drop_vars("flag") - migrated.drop_vars("flag")})
    assert reads == []
    row = both.isel(line=3).compute()
    assert len(reads) == 1
    assert float(row["y"][0]) == pytest.approx(0.75)


@pytest.mark.parametrize("cache", [True, False])
def test_a_line_file_that_was_changed_since_is_refused_by_name(site: Path, tmp_path: Path, cache: bool) -> None:
    """At opening, and when it changes behind an opened cube; the same bytes with another time are the same file."""
    site = shutil.copytree(site, tmp_path / "with") if cache else without_work(site, tmp_path)
    first, second = sorted((site / "lines").glob("*.sgy"))[:2]
    os.utime(second, ns=(1, 1))
    cube = open_cube(site, "A/x")
    raw = bytearray(first.read_bytes())
    raw[-1] ^= 1
    first.write_bytes(raw)
    os.utime(first, ns=(2, 2))
    assert np.isfinite(cube.isel(line=1).values).all()
    with pytest.raises(SurveyError, match=rf"{first.name}: this file has changed since the run"):
        cube.isel(line=0).compute()
    with pytest.raises(SurveyError, match=rf"{first.name}: this file has changed since the run; .*; planum map SITE"):
        open_cube(site, "A/x")
    first.unlink()
    with pytest.raises(SurveyError, match=rf"{first.name}: cannot be read"):
        open_cube(site, "A/x")
