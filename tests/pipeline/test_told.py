"""What a run tells of itself: a statement per slice, missing lines, shapes for the GIS, the record to repeat it."""

from __future__ import annotations

import hashlib
import json
import shutil
from pathlib import Path

import numpy as np
import pyogrio
import pytest
import rasterio
import xarray as xr

import planum
from planum.constants import CAUTIONS
from planum.errors import Problem
from planum.outputs.about import statement_in
from planum.outputs.stretch import Stretch
from planum.pipeline import products
from planum.pipeline.recipe import settings_text
from planum.pipeline.run import RunResult, map_site, read_run
from planum.pipeline.telling import Drawn, report_context
from planum.pipeline.told import RunFacts, noise_depth, statements
from planum.records import CubeGeometry, Estimate, LineEntry, Plan, SetPlan, Similarity, StepSpec, Velocity

STRETCH = Stretch(1.0, 9.0, "one linear stretch for all slices")


def one_set(
    name: str, *, velocity: Velocity, rows: tuple[int, ...] = (0, 1, 2, 3, 4), migrated: bool = True
) -> SetPlan:
    """Return a set of five rows, some of them recorded."""
    across = "y" if name.endswith("x") else "x"
    geometry = CubeGeometry(
        direction="x" if across == "y" else "y",
        line0_m=1.0,
        line_step_m=0.5,
        n_lines=5,
        along0_m=0.0,
        along_step_m=0.05,
        n_along=61,
        time0_ns=0.0,
        time_step_ns=0.3,
        n_time=100,
    )
    entries = tuple(
        LineEntry(
            key=f"{name}/{r}/0",
            set=name,
            grid=name[0],
            line=str(r + 1),
            row=r,
            file=f"lines/{name[0]}{r}.sgy",
            first_trace=0,
            last_trace=60,
            start=(0.0, 1.0 + 0.5 * r),
            end=(3.0, 1.0 + 0.5 * r),
        )
        for r in rows
    )
    steps = ("dewow", "migrate", "envelope") if migrated else ("dewow", "envelope")
    return SetPlan(
        name=name,
        grid=name[0],
        radar="400",
        visit="2026-04-18",
        geometry=geometry,
        centre_frequency_ghz=0.4,
        separation_m=0.16,
        zero=Estimate(value=6.0, error=0.25, unit="ns", origin="measured", method="envelope maximum less s/c"),
        velocity=velocity,
        chain=tuple(StepSpec(name=s, version=1, params={"window_ns": 5.1} if s == "dewow" else {}) for s in steps),
        windows_ns=((8.0, 10.0), (10.0, 12.0)),
        entries=entries,
        frame=Similarity(),
        limit_depth_m=1.3,
    )


GOOD = Velocity.constant(0.1, 0.002, origin="measured", method="sharpest diffractions")
POOR = Velocity.constant(0.08, 0.02, origin="book")


def run_of(*sets: SetPlan, **plan: object) -> RunFacts:
    whole = Plan(
        version="9.9",
        title="A field",
        code="FLD",
        crs=None,
        cell_m=0.1,
        bounds=(0.0, 0.5, 3.0, 3.5),
        intervals_m=((0.4, 0.5), (0.5, 0.6)),
        sets=sets,
        notes=("Features narrower than 0.50 m between lines are not resolved.",),
    ).model_copy(update=plan)
    return RunFacts(whole, (), {}, (), (), {}, {"2026-04-18": "dry grass"})


def stack(errors: tuple[float, float] = (0.031, 0.042)) -> xr.Dataset:
    return xr.Dataset({"depth_error": ("depth", np.array(errors))})


# --- statements ---


def test_each_slice_states_its_interval_and_error() -> None:
    """Interval, depth error, velocity with origin and method, time zero and the rest, slice by slice."""
    run = run_of(one_set("A/x", velocity=GOOD))
    told = statements(run.plan, stack(), STRETCH)
    assert [(s.top_m, s.bottom_m) for s in told] == [(0.4, 0.5), (0.5, 0.6)]
    assert [s.depth_error_m for s in told] == [0.031, 0.042]
    for s in told:
        assert (s.velocity_m_per_ns, s.velocity_error_m_per_ns) == (0.1, pytest.approx(0.002))
        assert s.velocity_origin == "measured: sharpest diffractions"
        assert (s.zero_rule, s.zero_error_ns) == ("envelope maximum less s/c", 0.25)
        assert s.migration == "migrated in 2-D, line by line"
        assert s.line_spacing_m == 0.5
        assert s.resolution == "features narrower than 0.50 m between lines are not resolved"
        assert s.date == "2026-04-18"
        assert s.stretch == STRETCH.text
        assert s.cautions == CAUTIONS
    sentence = told[0].sentence()
    for words in ("from 0.40 to 0.50 m (± 0.03 m)", "velocity 0.1000 ± 0.0020 m/ns", "± 0.25 ns", "visit 2026-04-18"):
        assert words in sentence, words


def test_unmigrated_slices_say_so() -> None:
    """Nobody may take an unmigrated slice for a migrated one."""
    run = run_of(one_set("A/x", velocity=GOOD, migrated=False))
    assert {s.migration for s in statements(run.plan, stack(), STRETCH)} == {"not migrated"}


def test_least_certain_set_speaks_for_all() -> None:
    """Of two velocities the one with the larger relative error is stated, whatever the order of the sets."""
    a, b = one_set("A/x", velocity=GOOD), one_set("B/x", velocity=POOR).model_copy(update={"visit": "2026-05-02"})
    for sets in ((a, b), (b, a)):
        told = statements(run_of(*sets).plan, stack(), STRETCH)[0]
        assert told.velocity_m_per_ns == 0.08
        assert told.velocity_origin == "book"
        assert told.date == "2026-04-18, 2026-05-02"


def test_noise_is_told_to_five_centimetres_and_marks_the_slices_below() -> None:
    """A limit of 0.4788 m is told as 0.50 m; of slices in the middle at 0.45 and 0.55 m the second lies below."""
    run = run_of(one_set("A/x", velocity=GOOD).model_copy(update={"limit_depth_m": 0.4788}))
    above, below = statements(run.plan, stack(), STRETCH)
    assert run.summary()["limit_depth_m"] == 0.5
    assert (above.in_noise, below.in_noise) == (False, True)
    said = "below the depth where ground sinks into noise (0.50 m): only strong reflectors show"
    assert said in below.sentence()
    assert below.tags()["PLANUM_NOISE"] == below.attrs()["noise"] == said
    assert "only strong reflectors show" not in above.sentence()


def test_the_shallowest_set_meets_noise_first_and_one_that_never_does_says_so() -> None:
    a, b = one_set("A/x", velocity=GOOD), one_set("B/x", velocity=GOOD)
    sets = [s.model_copy(update={"limit_depth_m": limit}) for s, limit in ((a, None), (b, 1.31))]
    assert noise_depth(run_of(*sets).plan) == 1.3
    never = run_of(sets[0])
    assert noise_depth(never.plan) is None
    (noise,) = {s.noise for s in statements(never.plan, stack(), STRETCH)}
    assert noise == "where ground sinks into noise is not known: the record ends before its level is even"


# --- missing lines, summary, identity ---


def test_missing_lines_are_named_by_their_place() -> None:
    """Rows without a recording, by where they would have run; nothing to say of a whole set."""
    whole, holed = one_set("A/x", velocity=GOOD), one_set("B/y", velocity=GOOD, rows=(0, 2, 4))
    run = run_of(whole, holed)
    assert run.missing() == ["set B/y: no recording at x = 1.50, 2.50 m"]
    assert run_of(one_set("A/x", velocity=GOOD, rows=(0, 1, 4))).missing() == [
        "set A/x: no recording at y = 2.00, 2.50 m"
    ]
    assert run_of(whole).missing() == []
    summary = run.summary()
    assert summary["lines"] == 8
    assert summary["sets"] == ["A/x", "B/y"]
    assert summary["slices"] == 2
    assert summary["raster"] == "30 × 30 cells of 0.1 m"
    assert summary["velocity"] == "0.1000 ± 0.0020 m/ns (measured)"
    assert summary["missing"] == run.missing()


def test_result_is_named_by_all_it_tells() -> None:
    """Another plan, warning, line set aside or ground condition is another result; the same is the same."""
    run = run_of(one_set("A/x", velocity=GOOD))
    names = {
        run.output_key(),
        run_of(one_set("A/x", velocity=POOR)).output_key(),
        run.without([Problem("broken")]).output_key(),
        RunFacts(run.plan, (), {}, (Problem("odd"),), (), {}, run.visits).output_key(),
        RunFacts(run.plan, (), {}, (), (), {}, {"2026-04-18": "rain"}).output_key(),
    }
    assert len(names) == 5
    assert run_of(one_set("A/x", velocity=GOOD)).output_key() == run.output_key()
    assert [p.came for p in run.without([Problem("broken")]).set_aside] == ["broken"]


# --- the report's words ---


def test_report_gathers_what_the_run_knows(tmp_path: Path) -> None:
    """Missing lines, frame, recipe, sections, and only files that are there."""
    (tmp_path / "slices").mkdir()
    (tmp_path / "slices" / "FLD_d040-050cm.tif").touch()
    (tmp_path / "slices.nc").touch()
    run = run_of(one_set("A/x", velocity=GOOD, rows=(0, 1, 2, 4))).without([Problem("torn", file="lines/A3.sgy")])
    told = statements(run.plan, stack(), STRETCH)
    drawn = Drawn(
        {"contact": tmp_path / "contact.png"},
        [tmp_path / "a.png", tmp_path / "b.png"],
        [1],
        {"A/x, line 1, y = 1.00 m": "pictures/sections/A-x_000_1.png"},
    )
    said = report_context(run, told, drawn, tmp_path)
    assert said.missing == ("set A/x: no recording at y = 2.50 m",)
    assert said.set_aside[0].file == "lines/A3.sgy"
    assert said.frame == "Coordinates are in the local frame of the grid: the survey names no map reference."
    assert said.velocity == "Sharpest diffractions."
    assert ("Lines", "4 in 1 set") in said.surveyed
    assert ("Ground", "dry grass") in said.surveyed
    assert said.leading == ()
    assert said.focus is None
    assert [p.alt for p in said.best] == ["Slice 0.50 to 0.60 m"]
    assert [p.caption for p in said.best] == ["0.50 to 0.60 m, ± 0.04 m, visit 2026-04-18."]
    assert not [text for _, text in said.files if "`" in text]
    assert said.sections == (("A/x, line 1, y = 1.00 m", "pictures/sections/A-x_000_1.png"),)
    assert said.recipe[0] == ("dewow", settings_text({"window_ns": 5.1}))
    named = [name for name, _ in said.files]
    assert "slices/FLD_d040-050cm.tif" in named
    assert "slices.nc" in named
    assert "site.gpkg" not in named


def test_report_names_the_placing_of_every_grid(tmp_path: Path) -> None:
    """Two points leave no error to tell; residuals are told point by point; a mirrored frame is said to be one."""
    exact = Similarity(a=0.0, b=1.0, mirrored=True, origin="least-squares similarity on 2 control points")
    fitted = Similarity(
        residuals_m=(("P1", 0.0123), ("P2", 0.02)), error_m=0.016, origin="least-squares similarity on 3 control points"
    )
    a = one_set("A/x", velocity=GOOD).model_copy(update={"frame": exact})
    b = one_set("B/x", velocity=GOOD).model_copy(update={"frame": fitted})
    run = run_of(a, b, crs="EPSG:25832")
    said = report_context(
        run, statements(run.plan, stack(), STRETCH), Drawn({"contact": tmp_path / "c.png"}, [], [], {}), tmp_path
    )
    assert said.frame.startswith("Coordinates are in EPSG:25832.")
    assert "Grid A: least-squares similarity on 2 control points, no redundancy, so no error is known" in said.frame
    assert "x axis 90.00° from east, y to the other hand" in said.frame
    assert "Grid B: least-squares similarity on 3 control points, ± 0.016 m" in said.frame
    assert said.control is not None
    assert said.control.rows == (("B", "P1", "0.012 m"), ("B", "P2", "0.020 m"))


def test_rows_are_named_by_grid_direction_and_line_with_a_file_of_their_own() -> None:
    """What a crew wrote on its sheet; names that differ in a disk's eyes only by case get a number."""
    s = one_set("A/x", velocity=GOOD)
    assert products.row_title(s, 2) == "Grid A, lines along x, line 3, y = 2.00 m"
    used: set[str] = set()
    names = [products._section_name(s.model_copy(update={"grid": grid}), 2, used) for grid in ("A", "a", "A 1")]
    assert names == ["A_line-3", "a_line-3_2", "A-1_line-3"]


def test_slices_in_large_leave_out_the_direct_wave_unless_nothing_else_is_left() -> None:
    """It reaches to 0.16 m / 0.1 m/ns + 1 / 0.4 GHz = 4.1 ns after time zero."""
    s = one_set("A/x", velocity=GOOD)
    for windows, expected in (
        (((4.0, 6.0), (4.2, 6.2)), [1]),
        (((4.2, 6.0), (9.0, 9.2)), [0]),
        (((1.0, 2.0), (2.0, 3.0)), [0]),
    ):
        run = run_of(s.model_copy(update={"windows_ns": windows}))
        told = statements(run.plan, stack(), STRETCH)
        # neighbours are never shown both: the first has the higher score
        assert products._large(run.plan, told, [9.0, 5.0]) == expected


# --- what a finished run holds ---


@pytest.fixture(scope="module")
def small(scrap: Path, tmp_path_factory: pytest.TempPathFactory) -> RunResult:
    """The scrap survey mapped, without the isosurface."""
    site = tmp_path_factory.mktemp("small") / "site"
    shutil.copytree(scrap, site)
    with pytest.MonkeyPatch.context() as patched:
        patched.setattr(products, "draw_scene", lambda *_: Problem("this machine cannot draw"))
        return map_site(site)


def test_lines_of_the_gis_file_link_their_sections(small: RunResult) -> None:
    """Every walked line is there, from its start to its end, with a picture that exists in the run folder."""
    path = small.out / "site.gpkg"
    layers = {str(name) for name, _ in pyogrio.list_layers(path)}
    assert {"lines", "grids"} <= layers
    lines = pyogrio.read_dataframe(path, layer="lines")
    plan, _ = read_run(small.out / "run.json")
    entries = {e.line: e for e in plan.sets[0].entries}
    assert sorted(lines["line"], key=int) == sorted(entries, key=int)
    for found in lines.itertuples():
        assert (small.out / found.section).is_file(), found.section
        assert found.section == f"pictures/sections/A_line-{found.line}.png"
        coords = np.array(found.geometry.coords)[:, :2]
        np.testing.assert_allclose(coords, [entries[found.line].start, entries[found.line].end], atol=1e-9)
    assert lines["section"].is_unique
    assert lines["traces"].eq(61).all()


def test_every_product_states_the_same(small: RunResult) -> None:
    """The record, each GeoTIFF's tags and the NetCDF hold one statement per slice, equal in depth and velocity."""
    record = json.loads((small.out / "run.json").read_text(encoding="utf-8"))
    files = sorted((small.out / "slices").glob("TEST_d*cm.tif"))
    assert len(record["statements"]) == len(files) == 3
    with xr.open_dataset(small.out / "slices.nc", engine="h5netcdf") as data:
        np.testing.assert_allclose(data.depth_error, [s["depth_error_m"] for s in record["statements"]], rtol=1e-6)
        np.testing.assert_allclose(data.depth_bounds[:, 0], [s["top_m"] for s in record["statements"]], atol=1e-9)
    for path, said in zip(files, record["statements"], strict=True):
        with rasterio.open(path) as raster:
            tags = raster.tags()
        assert float(tags["PLANUM_TOP_M"]) == pytest.approx(said["top_m"], abs=1e-6)
        # Tags hold six significant figures.
        assert float(tags["PLANUM_DEPTH_ERROR_M"]) == pytest.approx(said["depth_error_m"], rel=5e-6)
        assert float(tags["PLANUM_VELOCITY_M_PER_NS"]) == pytest.approx(said["velocity_m_per_ns"], rel=5e-6)
        assert tags["PLANUM_PLAN_KEY"] == said["plan_key"]


def test_every_picture_tells_about_itself(small: RunResult) -> None:
    """Every PNG of a run carries the plan it was made by; sections their own line, all others every depth."""
    record = json.loads((small.out / "run.json").read_text(encoding="utf-8"))
    pictures = sorted((small.out / "pictures").rglob("*.png"))
    assert len([p for p in pictures if p.parent.name == "sections"]) == 5
    for path in pictures:
        said = statement_in(path)
        assert said["plan_key"] == record["statement"]["plan_key"], path.name
        if path.parent.name == "sections":
            assert said["quantity"].startswith("one line in section: Grid A, lines along x, line "), path.name


def test_record_holds_what_a_repetition_needs(small: RunResult, scrap: Path) -> None:
    """The plan, the sha256 of every line as it lies on disk, the versions, and the size of every file written."""
    record = json.loads((small.out / "run.json").read_text(encoding="utf-8"))
    assert Plan.model_validate(record["plan"]) == read_run(small.out / "run.json")[0]
    assert record["version"] == record["versions"]["planum"] == planum.__version__
    assert {"python", "numpy", "scipy"} <= record["versions"].keys()
    on_disk = {f"lines/{p.name}": hashlib.sha256(p.read_bytes()).hexdigest() for p in (scrap / "lines").iterdir()}
    assert {name: facts["file_id"] for name, facts in record["facts"].items()} == on_disk
    planned = {e["file"]: e["file_id"] for s in record["plan"]["sets"] for e in s["entries"]}
    assert planned == on_disk
    for name, size in record["files"].items():
        assert (small.out / name).stat().st_size == size


def test_record_alone_repeats_the_run(small: RunResult, scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """On another machine: the survey, the record of a run, no cache; the settings of the survey no longer matter."""
    there = tmp_path / "there"
    shutil.copytree(scrap, there)
    text = (there / "survey.toml").read_text(encoding="utf-8")
    changed = text.replace("0.0875", "0.12").replace("bottom_m = 0.7", "bottom_m = 0.5")
    assert changed != text
    (there / "survey.toml").write_text(changed, encoding="utf-8")
    shutil.copyfile(small.out / "run.json", tmp_path / "kept.json")
    again = map_site(there, plan=tmp_path / "kept.json")
    names = sorted(p.relative_to(small.out) for p in small.out.rglob("*.tif"))
    assert names
    for name in names:
        assert (again.out / name).read_bytes() == (small.out / name).read_bytes(), name
