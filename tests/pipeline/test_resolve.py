"""From survey and facts to a plan: frames, sets, intervals, the common raster, and what is told on the way."""

from __future__ import annotations

import csv
import math
import random
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from planum.errors import FrameError, SurveyError
from planum.pipeline import resolve as resolve_module
from planum.pipeline.frames import site_frames
from planum.pipeline.run import RunResult, map_site, plan_site
from planum.records import Plan, SetPlan, Similarity
from planum.survey.config import SurveyConfig
from planum.survey.control import ControlPoint
from planum.survey.folder import Survey
from planum.synthetic.folder import Layout, Site, write_survey
from planum.synthetic.recording import Noise
from planum.synthetic.scene import Scene, Wall


@pytest.fixture(scope="module")
def counted(scrap: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The scrap survey with its facts in the cache, so that planning reads nothing."""
    site = tmp_path_factory.mktemp("counted") / "site"
    shutil.copytree(scrap, site)
    plan_site(site)
    return site


@pytest.fixture
def site(counted: Path, tmp_path: Path) -> Path:
    """A copy to change."""
    copy = tmp_path / "site"
    shutil.copytree(counted, copy)
    return copy


def edit(site: Path, old: str, new: str) -> None:
    """Change survey.toml; what should be changed must be there."""
    path = site / "survey.toml"
    text = path.read_text(encoding="utf-8")
    assert old in text, old
    path.write_text(text.replace(old, new), encoding="utf-8")


def edit_rows(site: Path, change: Callable[[list[dict[str, str]]], None]) -> None:
    """Change the register's rows."""
    path = site / "lines.csv"
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    change(rows)
    with path.open("w", encoding="utf-8", newline="") as file:
        table = csv.DictWriter(file, list(rows[0]))
        table.writeheader()
        table.writerows(rows)


# --- frames ---


def survey_of(*grids: str, crs: str | None = "EPSG:25832", control: tuple[ControlPoint, ...] = ()) -> Survey:
    config = SurveyConfig.model_validate(
        {
            "survey": {"title": "Test", "code": "T", "crs": crs},
            "radar": [{"centre_frequency_mhz": 400.0, "antenna_separation_m": 0.16}],
            "grid": [{"name": name, "register": "lines.csv"} for name in grids],
        }
    )
    return Survey(Path("site"), config, (), control)


def points(frame: Similarity, grid: str, n: int = 4) -> tuple[ControlPoint, ...]:
    """Exact control points of a frame."""
    corners = [(0.0, 0.0), (10.0, 0.0), (10.0, 20.0), (0.0, 20.0)][:n]
    out = []
    for i, (x, y) in enumerate(corners):
        east, north = (float(v) for v in frame.forward(x, y))
        out.append(ControlPoint(f"{grid or 'S'}{i}", x, y, east, north, None, grid, None, "control.csv"))
    return tuple(out)


def turned(degrees: float, east: float, north: float) -> Similarity:
    turn = math.radians(degrees)
    return Similarity(a=math.cos(turn), b=math.sin(turn), e0=east, n0=north)


SITE, OWN = turned(15.0, 500_000.0, 5_600_000.0), turned(-40.0, 500_100.0, 5_600_050.0)


def assert_frame(found: Similarity, want: Similarity) -> None:
    """The same place to a micrometre, at the far corner too."""
    for x, y in ((0.0, 0.0), (10.0, 20.0)):
        assert math.dist(found.forward(x, y), want.forward(x, y)) < 1e-6


def test_grid_takes_its_own_points_or_the_sites() -> None:
    """Two points of its own are enough, in any case of the name; with one or none the site grid places it."""
    control = (*points(SITE, ""), *points(OWN, "b", 2), *points(turned(80.0, 0.0, 0.0), "C", 1))
    frames = site_frames(survey_of("A", "B", "C", control=control))
    assert_frame(frames["A"], SITE)
    assert_frame(frames["B"], OWN)
    assert_frame(frames["C"], SITE)
    assert frames["A"].error_m == pytest.approx(0.0, abs=1e-6)
    assert frames["B"].error_m is None  # two points: nothing left over to tell an error
    assert len(frames["A"].residuals_m) == 4


def test_map_reference_without_control_points_is_refused() -> None:
    """Coordinates in a map frame nobody measured would be wrong by kilometres."""
    with pytest.raises(FrameError, match="grid B has no control points, and the survey names a crs") as caught:
        site_frames(survey_of("A", "B", control=points(OWN, "A")))
    assert caught.value.problems[0].file == "control.csv"
    frames = site_frames(survey_of("A", "B", crs=None))
    assert frames["A"] == frames["B"] == Similarity()


def test_one_control_point_is_too_few() -> None:
    """A single site point cannot turn a grid."""
    with pytest.raises(FrameError, match=r"grid A has 1 usable control point\(s\); at least two"):
        site_frames(survey_of("A", control=points(SITE, "", 1)))


# --- sets and lines ---


def test_two_radars_in_one_grid_are_refused(site: Path) -> None:
    """Antennas are not mixed in one picture; the grid is named."""
    edit(
        site, "[[grid]]", '[[radar]]\nname = "other"\ncentre_frequency_mhz = 400\nantenna_separation_m = 0.16\n[[grid]]'
    )
    edit(site, "[[radar]]\ncentre", '[[radar]]\nname = "first"\ncentre')

    def two(rows: list[dict[str, str]]) -> None:
        for i, row in enumerate(rows):
            row["radar"] = "other" if i == 2 else "first"

    edit_rows(site, two)
    edit(site, "antenna_separation_m = 0.16\n[[grid]]", 'antenna_separation_m = 0.16\ninterval_unit = "ps"\n[[grid]]')
    with pytest.raises(SurveyError, match="grid A was recorded with more than one radar; one radar in a grid"):
        plan_site(site)


def test_crossing_lines_are_a_set_of_their_own(site: Path) -> None:
    """A grid of lines along y over one of lines along x: two sets that share raster and intervals."""

    def crossing(rows: list[dict[str, str]]) -> None:
        for i, x in enumerate((0.5, 1.0, 1.5)):
            copy = f"lines/cross_{i}.sgy"
            shutil.copyfile(site / rows[i]["file"], site / copy)
            extra = dict(rows[i]) | {"file": copy}
            extra |= {
                "grid": "C",
                "line": str(100 + i),
                "start_x_m": str(x),
                "end_x_m": str(x),
                "start_y_m": "0",
                "end_y_m": "3",
            }
            rows.append(extra)

    edit_rows(site, crossing)
    edit(site, "[ground]", '[[grid]]\nname = "C"\nregister = "lines.csv"\n\n[ground]')
    plan = plan_site(site)
    assert_on_whole_cells(plan)
    assert [s.name for s in plan.sets] == ["A/x", "C/y"]
    assert [len(s.entries) for s in plan.sets] == [5, 3]
    assert plan.sets[1].geometry.direction == "y"
    assert plan.sets[1].geometry.line_step_m == pytest.approx(0.5)
    assert any("not balanced against each other" in note for note in plan.notes)


def test_last_trace_beyond_the_record_shortens_the_line(site: Path) -> None:
    """61 traces over 3 m, 0 to 80 asked for: the record ends after 60/80 of the way, and a warning says so."""

    def beyond(rows: list[dict[str, str]]) -> None:
        for row in rows:
            row["last_trace"] = "80" if row["line"] == "2" else ""  # line 2 was walked from x = 3 to 0

    edit_rows(site, beyond)
    result = planned(site)
    entry = next(e for e in result.plan.sets[0].entries if e.line == "2")
    assert entry.last_trace == 60
    assert entry.start == (3.0, 0.25)
    assert entry.end == pytest.approx((3.0 - 3.0 * 60 / 80, 0.25))
    told = [w for w in result.warnings if "trace 80 is asked for, the last recorded is 60" in w.came]
    assert [(w.severity, w.file, w.line) for w in told] == [("warning", "lines/A_002.sgy", "2")]
    assert all(e.last_trace == 60 for e in result.plan.sets[0].entries)


# --- slices ---


def test_slices_below_the_record_are_left_out_with_a_note(site: Path) -> None:
    """160 samples of 0.3 ns less 6 ns before time zero are 41.7 ns, at 0.0875 m/ns 1.82 m: 1.8 is the last bottom."""
    edit(site, "bottom_m = 0.7", "bottom_m = 3.0")
    edit(site, "top_m = 0.4", "top_m = 0.0")
    result = planned(site)
    assert len(result.plan.intervals_m) == 18
    assert result.plan.intervals_m[-1] == pytest.approx((1.7, 1.8))
    note = next(w for w in result.warnings if w.key == "slices.bottom_m")
    assert note.severity == "note"
    assert note.came.startswith("12 of 30 slices lie below the record (1.8")
    for low, high in result.plan.sets[0].windows_ns:
        assert 0 < low < high <= result.plan.sets[0].geometry.times()[-1] + 1e-9


def test_no_slice_within_the_record_is_an_error(site: Path) -> None:
    """All slices deeper than the record: the depths of both are told."""
    edit(site, "bottom_m = 0.7", "bottom_m = 5.0")
    edit(site, "top_m = 0.4", "top_m = 4.0")
    with pytest.raises(SurveyError, match=r"the first slice ends at 4\.10 m, the recordings at 1\.8\d m") as caught:
        plan_site(site)
    assert caught.value.problems[0].key == "slices"


def planned(site: Path) -> resolve_module.Resolution:
    """Resolve a site and keep the warnings too."""
    kept = []
    real = resolve_module.resolve

    def keep(*args: object, **more: object) -> resolve_module.Resolution:
        kept.append(real(*args, **more))  # type: ignore[arg-type]
        return kept[-1]

    from planum.pipeline import run

    with pytest.MonkeyPatch.context() as patched:
        patched.setattr(run, "resolve", keep)
        plan_site(site)
    return kept[-1]


# --- the raster ---


def corners(s: SetPlan) -> np.ndarray:
    """Map corners of a set's lines, without any rim."""
    g = s.geometry
    ends = [(a, c) for a in g.along()[[0, -1]] for c in g.lines()[[0, -1]]]
    return np.array([s.frame.forward(*(p if g.direction == "x" else p[::-1])) for p in ends], float)


def assert_on_whole_cells(plan: Plan) -> None:
    """Each bound is a whole number of cells from the map's origin, and every set lies within."""
    west, south, east, north = plan.bounds
    for edge in plan.bounds:
        assert edge / plan.cell_m == pytest.approx(round(edge / plan.cell_m), abs=1e-6)
    for s in plan.sets:
        at = corners(s)
        assert west - 1e-6 <= at[:, 0].min() <= at[:, 0].max() <= east + 1e-6
        assert south - 1e-6 <= at[:, 1].min() <= at[:, 1].max() <= north + 1e-6


def test_bounds_are_whole_cells_round_the_lines(site: Path) -> None:
    """Five lines of 3 m, 0.25 m apart and half a spacing on both sides, on cells of 5 cm: a cell more at most."""
    plan = plan_site(site)
    assert plan.cell_m == pytest.approx(0.05)
    assert_on_whole_cells(plan)
    for edge, rim, out in zip(plan.bounds, (0.0, -0.125, 3.0, 1.125), (-1, -1, 1, 1), strict=True):
        assert -1e-9 <= out * (edge - rim) <= 0.05 + 1e-9


def test_typed_cell_is_kept(site: Path) -> None:
    edit(site, 'register = "lines.csv"', 'register = "lines.csv"\ncell_m = 0.07')
    plan = plan_site(site)
    assert plan.cell_m == 0.07
    assert_on_whole_cells(plan)


def test_too_many_cells_are_refused_with_advice(site: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """One cell more than allowed: the size, the limit and the ways out; exactly as many pass."""
    west, south, east, north = plan_site(site).bounds
    columns, rows = round((east - west) / 0.05), round((north - south) / 0.05)
    monkeypatch.setattr(resolve_module, "MOST_CELLS", columns * rows - 1)
    said = rf"the grids span {columns} × {rows} cells of 0\.05 m; at most {columns * rows - 1:,} cells"
    with pytest.raises(SurveyError, match=said) as caught:
        plan_site(site)
    assert "mistyped control point" in caught.value.problems[0].do
    monkeypatch.setattr(resolve_module, "MOST_CELLS", columns * rows)
    assert plan_site(site).bounds == (west, south, east, north)


# --- what is said ---


@pytest.mark.parametrize("stretch", [0.4, 1.0, 3.0])
def test_plan_says_what_is_not_resolved(site: Path, stretch: float) -> None:
    """Lines 0.25 m apart resolve nothing narrower; from which dip on traces alias depends on their spacing.

    Two samples per wavelength: 2 f dx sin(dip) / v < 1/2 (Yilmaz, Seismic Data Analysis, ch. 4, from memory), with the
    highest frequency 1.6 x 0.4 GHz and v = 0.0875 m/ns. Traces 2 cm apart alias at no dip, 5 cm at 43, 15 cm at 13
    degrees.
    """
    ends = ("start_x_m", "end_x_m")
    edit_rows(site, lambda rows: [row.update({k: f"{stretch * float(row[k]):g}" for k in ends}) for row in rows])
    notes = plan_site(site).notes
    assert notes[0] == "Features narrower than 0.25 m between lines are not resolved."
    share = 0.0875 / (4 * 0.64 * 0.05 * stretch)
    if share >= 1.0:
        assert len(notes) == 1
    else:
        dip = math.degrees(math.asin(share))
        spacing = 0.05 * stretch
        assert notes[1:] == (
            f"Reflectors steeper than {dip:.0f}° along the line alias at {spacing:.3f} m between traces.",
        )


# --- order of the register ---


def test_plan_does_not_depend_on_the_order_of_the_register(site: Path) -> None:
    """Any order of the rows, and the same plan to the last digit; with a line in two pieces too."""
    want = plan_site(site)

    def split(rows: list[dict[str, str]]) -> None:
        """Give line 3 in two pieces of one file."""
        for row in rows:
            row.setdefault("first_trace", "")
            row.setdefault("last_trace", "")
        at = rows.index(next(row for row in rows if row["line"] == "3"))  # walked from x = 0 to 3
        piece = dict(rows[at])
        rows[at] |= {"end_x_m": "1.5", "first_trace": "0", "last_trace": "30"}
        rows.append(piece | {"start_x_m": "1.55", "first_trace": "31", "last_trace": "60"})

    for change in (None, split):
        if change:
            edit_rows(site, change)
            want = plan_site(site)
        for seed in range(3):
            edit_rows(site, random.Random(seed).shuffle)
            assert plan_site(site) == want


def test_slices_do_not_depend_on_the_order_of_the_register(site: Path, no_isosurface: None) -> None:
    """Rows backwards: every raster byte for byte the same."""
    first = map_site(site, name="first")
    edit_rows(site, lambda rows: rows.reverse())
    shutil.rmtree(site / "work")
    second = map_site(site, name="second")
    for path in sorted(first.out.rglob("*.tif")):
        assert path.read_bytes() == (second.out / path.relative_to(first.out)).read_bytes(), path.name


# --- two grids, one map ---


ZERO = (500_000.0, 5_600_000.0)


@pytest.fixture(scope="module")
def pair(tmp_path_factory: pytest.TempPathFactory) -> RunResult:
    """Two grids side by side, the second turned by 30 degrees, on one map; one wall runs through both."""
    folder = tmp_path_factory.mktemp("pair") / "site"
    wall = Wall("wall", ((-0.5, 1.0), (8.5, 2.5)), 0.5, 0.45, 0.95)
    quiet = replace(Noise.none(), white=2e-4)
    first = Layout("A", length_m=3.0, width_m=2.5, noise=quiet)
    frame = turned(30.0, 4.6, 0.2)
    second = Layout("B", length_m=3.0, width_m=2.0, noise=quiet, frame=frame)
    about = Site(
        crs="EPSG:25832",
        frame=turned(10.0, *ZERO),
        slices={"top_m": 0.4, "bottom_m": 0.6, "thickness_m": 0.1, "step_m": 0.1},
        velocity_m_per_ns=0.0875,
    )
    write_survey(folder, Scene((wall,)), [first, second], seed=3, site=about)
    with pytest.MonkeyPatch.context() as patched:
        from planum.errors import Problem
        from planum.pipeline import products

        patched.setattr(products, "draw_scene", lambda *_: Problem("left out"))
        return map_site(folder)


def test_two_grids_share_one_raster(pair: RunResult) -> None:
    """Both sets, one raster on whole cells round both, and the seam's caution."""
    from planum.pipeline.run import read_run

    plan, _ = read_run(pair.out / "run.json")
    assert [s.name for s in plan.sets] == ["A/x", "B/x"]
    assert_on_whole_cells(plan)
    # Control points are written to the centimetre: 4 points over 3 m hold the angle to some 0.15 degrees.
    assert plan.sets[0].frame.rotation_deg == pytest.approx(10.0, abs=0.3)
    assert plan.sets[1].frame.rotation_deg == pytest.approx(40.0, abs=0.3)
    assert any("Grids and visits are not balanced" in note for note in plan.notes)


def test_wall_runs_through_both_grids(pair: RunResult) -> None:
    """In each grid the strong cells lie along the one wall of the scene: one straight line, half a metre wide.

    Judged against the truth in map coordinates: the weighted middle of the amplitude across the wall, at places along
    it in either grid, is within 0.12 m of its centre line - half a line spacing; grids placed apart by more would not
    pass, nor would a turn the wrong way.
    """
    to_map = turned(10.0, *ZERO)
    with xr.open_dataset(pair.out / "slices.nc", engine="h5netcdf") as data:
        image = data.amplitude.sel(depth=0.45, method="nearest").load()
    start, end = np.array([-0.5, 1.0]), np.array([8.5, 2.5])
    way = (end - start) / np.linalg.norm(end - start)
    side = np.array([-way[1], way[0]])
    across = np.arange(-0.8, 0.801, 0.05)
    seen = {"A": 0, "B": 0}
    for along in np.arange(1.0, 8.0, 0.25):
        scene = start + along * way + across[:, None] * side
        east, north = to_map.forward(scene[:, 0], scene[:, 1])
        values = image.interp(x=xr.DataArray(east, dims="p"), y=xr.DataArray(north, dims="p")).values
        if np.isnan(values).any():
            continue  # the rim of a grid, or the gap between both
        weight = np.maximum(values - np.median(values), 0.0)
        middle = float(np.sum(weight * across) / weight.sum())
        assert abs(middle) < 0.12, (along, middle)
        seen["A" if scene[len(scene) // 2][0] < 3.5 else "B"] += 1
    assert seen["A"] >= 4
    assert seen["B"] >= 4


def test_empty_ground_between_the_grids_is_empty(pair: RunResult) -> None:
    """Where neither grid was walked there is nothing: no cell is filled across the gap."""
    to_map = turned(10.0, *ZERO)
    with xr.open_dataset(pair.out / "slices.nc", engine="h5netcdf") as data:
        image = data.amplitude.sel(depth=0.45, method="nearest").load()
        covered = data.coverage.load()

    def at(x: float, y: float, what: xr.DataArray) -> float:
        east, north = (float(v) for v in to_map.forward(x, y))
        return float(what.sel(x=east, y=north, method="nearest"))

    assert at(3.4, 1.2, covered) == 0
    assert np.isnan(at(3.4, 1.2, image))
