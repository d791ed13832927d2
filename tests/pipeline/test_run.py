"""The main job from outside: a folder in, a run folder out; again, cut short, with damage, on any number of threads."""

from __future__ import annotations

import errno
import json
import multiprocessing
import os
import random
import shutil
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import rasterio
import xarray as xr

from planum.errors import PlanumError, Problem, RecipeError, SurveyError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy
from planum.pipeline import census, passes, products
from planum.pipeline import run as run_module
from planum.pipeline.cubes import open_cube
from planum.pipeline.run import RunResult, map_site, plan_site, read_run


def copied(page: Path, tmp_path: Path) -> Path:
    """Return a fresh copy of the one-page survey."""
    site = tmp_path / "site"
    shutil.copytree(page, site)
    return site


def rasters(out: Path) -> dict[str, bytes]:
    """Return every GeoTIFF of a run by name."""
    return {p.name: p.read_bytes() for p in sorted(out.rglob("*.tif"))}


def is_whole(out: Path) -> bool:
    """Tell, without the program, whether a run folder holds just the files it lists, whole, and all rasters open."""
    record = json.loads((out / "run.json").read_text(encoding="utf-8"))
    for name, size in record["files"].items():
        if (out / name).stat().st_size != size:
            return False
    for path in out.rglob("*.tif"):
        with rasterio.open(path) as raster:
            raster.read(1)
    listed = {*record["files"], "run.json"}
    return {str(p.relative_to(out).as_posix()) for p in out.rglob("*") if p.is_file()} == listed


def test_run_folder_holds_what_is_promised(mapped: RunResult) -> None:
    """Every product of the contract is there, and nothing is half."""
    out = mapped.out
    for name in ("slices.nc", "slices_all.tif", "site.gpkg", "run.json", "report.html", "pictures/contact-sheet.png"):
        assert (out / name).is_file(), name
    assert len(list((out / "slices").glob("TEST_d???-???cm.tif"))) == 12
    assert len(list((out / "pictures" / "sections").glob("*.png"))) == 17
    assert (out / "pictures" / "isosurface.png").is_file()
    assert is_whole(out)
    assert mapped.changed
    assert mapped.set_aside == ()
    assert not list(out.parent.glob(".out*"))


def test_velocity_is_found_from_the_data(mapped: RunResult) -> None:
    """The synthetic ground has 0.0875 m/ns; the scan's own 1-sigma error is 1 to 2 %, three of them are allowed."""
    plan, record = read_run(mapped.out / "run.json")
    v = plan.sets[0].velocity
    assert v.origin == "measured"
    assert abs(v.value - 0.0875) < 3 * v.error
    assert v.error < 0.03 * v.value
    assert record["velocity_curve"]["votes"]


def test_wall_is_seen_at_its_place_and_depth(mapped: RunResult) -> None:
    """The wall (top 0.45 m, from (2.2, -0.5) to (3.6, 4.5)) is strong in its slice, the ground above it weak."""
    with xr.open_dataset(mapped.out / "slices.nc", engine="h5netcdf") as data:
        centre = 2.2 + (data.y + 0.5) * 1.4 / 5.0
        distance = abs(data.x - centre) * np.cos(np.arctan(1.4 / 5.0))
        amplitude = data.amplitude.load()
        inside = amplitude.where(distance < 0.25).mean(("y", "x"))
        outside = amplitude.where(distance > 1.0).mean(("y", "x"))
        ratio = 20 * np.log10(inside / outside)
        top = int(np.argmin(abs(data.depth.values - 0.45)))
        assert float(ratio[top]) > 8.0  # dB, the least contrast the demo promises
        assert float(inside[1]) < 0.1 * float(inside[top])  # 0.1 to 0.2 m: only the pulse's side lobes, 20 dB down
        assert int(np.argmax(inside.values)) in (top, top + 1)


def test_second_run_recomputes_nothing(
    page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, no_isosurface: None
) -> None:
    """Unchanged input: no raw file is read, nothing is written; a new title writes products but reads no line."""
    site = copied(page, tmp_path)
    first = map_site(site)
    stamp = (first.out / "run.json").stat().st_mtime_ns

    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("a raw file was read again")

    monkeypatch.setattr(census, "read_line", refuse)
    monkeypatch.setattr(passes, "run_row", refuse)
    real_open = Path.open
    monkeypatch.setattr(Path, "open", lambda p, *a, **k: refuse() if p.suffix == ".sgy" else real_open(p, *a, **k))
    again = map_site(site)
    assert not again.changed
    assert (first.out / "run.json").stat().st_mtime_ns == stamp
    text = (site / "survey.toml").read_text(encoding="utf-8")
    (site / "survey.toml").write_text(text.replace("Invented survey", "Another title"), encoding="utf-8")
    retitled = map_site(site)
    assert retitled.changed
    assert "Another title" in (site / "out" / "report.html").read_text(encoding="utf-8")


def test_rasters_do_not_depend_on_threads_or_the_day(page: Path, tmp_path: Path, no_isosurface: None) -> None:
    """One thread and three, two folders, two moments: byte-identical GeoTIFFs."""
    a, b = copied(page, tmp_path / "a"), copied(page, tmp_path / "b")
    one = map_site(a, workers=1)
    time.sleep(1.1)  # a time stamp of whole seconds would differ
    three = map_site(b, workers=3)
    first, second = rasters(one.out), rasters(three.out)
    assert first.keys() == second.keys()
    assert all(first[name] == second[name] for name in first)
    assert (one.out / "slices.nc").read_bytes() == (three.out / "slices.nc").read_bytes()


def test_plan_can_be_repeated(page: Path, tmp_path: Path, no_isosurface: None) -> None:
    """A run made from another run's plan gives the same rasters, though the survey now says another velocity."""
    site = copied(page, tmp_path)
    first = map_site(site)
    with (site / "survey.toml").open("a", encoding="utf-8") as file:
        file.write("\n[ground]\nvelocity_m_per_ns = 0.12\n")
    changed = map_site(site, name="other")
    repeated = map_site(site, name="again", plan=first.out / "run.json")
    assert rasters(repeated.out) == rasters(first.out)
    assert rasters(changed.out) != rasters(first.out)
    assert {p.name for p in site.glob("out*")} == {"out", "out-other", "out-again"}


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda plan: plan.pop("sets"), "no plan can be read"),
        (lambda plan: plan["sets"][0]["chain"][0].update(name="os.system"), "there is no step 'os.system'"),
        (lambda plan: plan["sets"][0]["chain"][0]["params"].update(window_ns="x"), "no plan can be read"),
        (lambda plan: plan.update(bounds=[0, 0, 1e9, 1e9]), "the grids span"),
        (lambda plan: plan["sets"][0]["entries"][0].update(file="../../secret.sgy"), "outside|leaves|inside"),
    ],
)
def test_a_plan_from_elsewhere_is_not_trusted(
    mapped: RunResult, tmp_path: Path, spoil: Callable[[dict], None], message: str
) -> None:
    """A run.json is a file like any other: unknown steps, absurd rasters and paths out of the folder are refused."""
    site = tmp_path / "site"
    shutil.copytree(mapped.out.parent, site)
    record = json.loads((site / "out" / "run.json").read_text(encoding="utf-8"))
    spoil(record["plan"])
    (tmp_path / "run.json").write_text(json.dumps(record), encoding="utf-8")
    with pytest.raises(PlanumError, match=message):
        map_site(site, plan=tmp_path / "run.json", name="other")
    assert not (site / "out-other").exists()


def test_one_changed_line_redoes_one_line(
    page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, no_isosurface: None
) -> None:
    """With velocity and recipe settled, new bytes in one file that change no estimate cost one row."""
    site = copied(page, tmp_path)
    with (site / "survey.toml").open("a", encoding="utf-8") as file:
        file.write("\n[ground]\nvelocity_m_per_ns = 0.0875\n")
    map_site(site)
    path = sorted((site / "lines").glob("*.sgy"))[3]
    raw = bytearray(path.read_bytes())
    raw[10] ^= 1  # a letter of the textual header: other bytes, the same traces
    path.write_bytes(raw)
    rows = []
    real = passes.run_row
    monkeypatch.setattr(
        passes, "run_row", lambda pieces, plan, row, **k: rows.append(row) or real(pieces, plan, row, **k)
    )
    assert map_site(site).changed
    assert rows == [3]


def test_unreadable_line_is_set_aside(page: Path, tmp_path: Path, no_isosurface: None) -> None:
    """Garbage in one file and another file missing: both are named, the rest is mapped, their stripes stay empty."""
    site = copied(page, tmp_path)
    files = sorted((site / "lines").glob("*.sgy"))
    files[8].write_bytes(b"not a line" * 1000)
    files[12].unlink()
    result = map_site(site)
    text = " ".join(str(p) for p in result.set_aside)
    assert files[8].name in text
    assert files[12].name in text
    assert len(result.set_aside) == 2
    report = (result.out / "report.html").read_text(encoding="utf-8")
    assert files[8].name in report
    with xr.open_dataset(result.out / "slices.nc", engine="h5netcdf") as data:
        middle = data.amplitude.sel(x=3.0, method="nearest").isel(depth=5)
        # line 9 lies at y = 2.0: a cell there is a whole spacing from the next trace, beyond 0.6 of it
        assert np.isnan(float(middle.sel(y=2.0, method="nearest")))
        assert np.isfinite(float(middle.sel(y=1.75, method="nearest")))
        assert int((data.coverage.sel(y=2.0, method="nearest") == 0).all())


def test_a_full_disk_leaves_the_former_run_and_nothing_half(
    scrap: Path, tmp_path: Path, no_isosurface: None, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The disk fills up while the GeoPackage is written: the half folder goes, so that it does not fill it further."""
    site = copied(scrap, tmp_path)

    def full(path: Path, *_: object, **__: object) -> None:
        assert path.parent.name.startswith(".out-")
        assert any(path.parent.iterdir())
        raise OSError(errno.ENOSPC, "No space left on device", str(path))

    with monkeypatch.context() as patch:
        patch.setattr(products, "write_geopackage", full)
        with pytest.raises(OSError, match="No space left"):
            map_site(site)
    assert not list(site.glob(".out*"))
    assert not (site / "out").exists()
    assert is_whole(map_site(site).out)


def test_a_line_that_failed_once_is_tried_again(
    scrap: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, no_isosurface: None
) -> None:
    """A passing fault in the second pass sets a line aside for that run only: the next one does not call it whole."""
    site = copied(scrap, tmp_path)
    real = run_module.strip_of
    fault = Problem(came="the stick was pulled out", file="lines/x.sgy")
    with monkeypatch.context() as once:
        once.setattr(run_module, "strip_of", lambda f, s, row, **k: fault if row == 2 else real(f, s, row, **k))
        assert map_site(site).set_aside == (fault,)
    again = map_site(site)
    assert again.changed
    assert again.set_aside == ()
    assert not map_site(site).changed


def test_no_usable_line_is_an_error(page: Path, tmp_path: Path) -> None:
    """Nothing to map: the error names every file."""
    site = copied(page, tmp_path)
    for path in (site / "lines").glob("*.sgy"):
        path.write_bytes(b"\0" * 5000)
    with pytest.raises(SurveyError, match="no line can be used") as caught:
        map_site(site)
    assert len(caught.value.problems) == 18


def test_rendering_that_fails_costs_one_picture(scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """A machine that cannot draw in 3-D finishes everything else and says so."""
    result = map_site(copied(scrap, tmp_path))
    assert not (result.out / "pictures" / "isosurface.png").exists()
    assert any("cannot draw" in str(w) for w in result.warnings)
    assert "this machine cannot draw" in (result.out / "report.html").read_text(encoding="utf-8")
    assert is_whole(result.out)


@pytest.mark.parametrize(
    ("recipe", "message"),
    [
        ('steps = ["envelope", "migrate"]', r"'migrate' cannot follow 'envelope': it takes voltage, and gets envelope"),
        ('steps = ["dewow", "migrate"]', r"the recipe ends with voltage"),
        ('steps = ["dewow", "dewow", "envelope"]', r"'dewow' comes twice"),
        ('steps = ["dewov", "envelope"]', r"there is no step 'dewov'; did you mean 'dewow'\?"),
        ("[recipe.migrate]\nmax_dip = 40", r"unknown setting 'max_dip'.*max_dip_deg"),
        ("[recipe.dewow]\nwindow_ns = 'wide'", r"recipe\.dewow\.window_ns"),
    ],
)
def test_impossible_recipe_is_refused_before_any_work(
    page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, recipe: str, message: str
) -> None:
    """The order and every setting are checked before a second look at the data."""
    site = copied(page, tmp_path)
    text = (site / "survey.toml").read_text(encoding="utf-8")
    (site / "survey.toml").write_text(f"{text}\n[recipe]\n{recipe}\n", encoding="utf-8")
    monkeypatch.setattr(passes, "run_row", lambda *_, **__: pytest.fail("work was done"))
    with pytest.raises(RecipeError, match=message):
        map_site(site)


def test_unmigrated_and_step_left_out(scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """A recipe without migration runs, and every slice says so."""
    site = copied(scrap, tmp_path)
    with (site / "survey.toml").open("a", encoding="utf-8") as file:
        file.write('\n[recipe]\nsteps = ["dewow", "bandpass", "background", "envelope"]\n')
    result = map_site(site)
    with rasterio.open(next((result.out / "slices").glob("*cm.tif"))) as raster:
        assert raster.tags()["PLANUM_MIGRATION"] == "not migrated"


def test_cube_opens_lazily(mapped: RunResult, monkeypatch: pytest.MonkeyPatch) -> None:
    """Opening reads nothing; one row reads one line; stages differ; unknown names are told."""
    calls = []
    real = passes.Source.read
    monkeypatch.setattr(passes.Source, "read", lambda self: calls.append(self.name) or real(self))
    cube = open_cube(mapped.out.parent, "A/x", stage="migrate")
    assert calls == []
    assert cube.dims == ("line", "along", "time")
    row = cube.isel(line=4).compute()
    assert len(calls) == 1
    raw = open_cube(mapped.out.parent, "A/x").isel(line=4).compute()
    assert row.shape == raw.shape
    assert float(abs(row - raw).max()) > 0
    with pytest.raises(SurveyError, match=r"there is no set 'B/x'"):
        open_cube(mapped.out.parent, "B/x")
    with pytest.raises(RecipeError, match=r"there is no stage 'migrated'; did you mean 'migrate'\?"):
        open_cube(mapped.out.parent, "A/x", stage="migrated")


def test_plan_holds_every_number(page: Path, tmp_path: Path) -> None:
    """No setting of the resolved chain is left automatic, and the plan survives JSON."""
    plan = plan_site(copied(page, tmp_path))
    for step in plan.sets[0].chain:
        unset = {k for k, v in step.params.items() if v is None}
        assert unset <= {"window_m"}, (step.name, unset)  # only what the chosen scope does not use
    assert type(plan).model_validate_json(plan.model_dump_json()) == plan


KILLED = """
from pathlib import Path
from planum.errors import Problem
from planum.pipeline import products
from planum.pipeline.run import map_site
products.draw_scene = lambda *_: Problem(came="left out")
map_site(Path({site!r}))
"""


def test_killed_at_twenty_moments_the_run_is_whole(scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """SIGKILL at 20 random moments of a run that replaces another: always the old folder or the new, whole.

    The seed fixes the moments as shares of the last run of the same kind that came to its end. Each try changes the
    title, so that all products are written anew; one kind also empties work/, so that the passes are hit too. Tries go
    on until 20 were killed: a run that ends before its moment proves nothing.
    """
    site = copied(scrap, tmp_path)
    map_site(site)
    text = (site / "survey.toml").read_text(encoding="utf-8")
    rng = random.Random(7)
    # a fresh process each time, without the seconds it takes to load the libraries
    clean = multiprocessing.get_context("forkserver" if hasattr(os, "fork") else "spawn")
    if hasattr(os, "fork"):
        clean.set_forkserver_preload(["planum.pipeline.run"])
        first = clean.Process(target=exec, args=("pass",))
        first.start()
        first.join()
    took = {True: 600.0, False: 600.0}
    killed: list[bool] = []
    for attempt in range(60):
        if len(killed) == 20:
            break
        from_nothing = attempt % 2 == 0
        (site / "survey.toml").write_text(text.replace("Invented survey", f"Title {attempt}"), encoding="utf-8")
        if from_nothing:
            shutil.rmtree(site / "work")
        process = clean.Process(target=exec, args=(KILLED.format(site=str(site)), {}))
        start = time.monotonic()
        process.start()
        process.join(took[from_nothing] * (1.0 if attempt < 2 else rng.uniform(0.02, 1.0)))
        if process.is_alive():
            process.kill()
            killed.append(from_nothing)
            process.join()
        else:
            assert process.exitcode == 0
            took[from_nothing] = time.monotonic() - start
        assert is_whole(site / "out"), attempt
    assert len(killed) == 20
    assert 5 <= sum(killed) <= 15  # both kinds were hit
    final = map_site(site)
    assert is_whole(final.out)
    assert list(site.glob(".out*")) == []


MEASURED = """
import sys
from pathlib import Path
from planum.errors import Problem
from planum.pipeline import products
from planum.pipeline.run import map_site
products.draw_scene = lambda *_: Problem(came="left out")
def peak():  # of this program alone: the usage counters start with what the parent process had
    lines = Path("/proc/self/status").read_text().splitlines()
    return int(next(line.split()[1] for line in lines if line.startswith("VmHWM")))
before = peak()
map_site(Path(sys.argv[1]), workers=1)
print(before, peak())
"""

LONG = """
[survey]
title = "Many long lines"
code = "LONG"
[[radar]]
centre_frequency_mhz = 400
antenna_separation_m = 0.16
interval_unit = "ps"
[[grid]]
name = "A"
files = "lines/{{line}}.sgy"
line_count = {count}
line_spacing_m = 0.25
line_length_m = 100.0
cell_m = 0.25
[ground]
velocity_m_per_ns = 0.0875
[slices]
top_m = 0.4
bottom_m = 0.7
step_m = 0.1
"""


def long_lines(site: Path, one: np.ndarray, count: int) -> None:
    """Write lines of 2000 traces x 512 samples, 2 MB each: one short line over and over, never twice the same."""
    (site / "lines").mkdir(parents=True)
    (site / "survey.toml").write_text(LONG.format(count=count), encoding="utf-8")
    rng = np.random.default_rng(1)
    for number in range(1, count + 1):
        data = rng.integers(-3, 4, (2000, 512)).astype(np.int16)
        data[:, : one.shape[1]] += np.roll(np.resize(one, (2000, one.shape[1])), 7 * number, axis=0)
        write_segy(site / "lines" / f"{number}.sgy", data, interval_ns=0.3)


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="peak memory is read from Linux's /proc")
def test_memory_does_not_grow_with_lines(scrap: Path, tmp_path: Path) -> None:
    """Four times the lines raise the peak memory of a run by less than a tenth.

    A tenth of what the loaded libraries take could hide a leak; so what a run takes above them is bounded too.

    On one thread, because with more the peak hangs on which rows happen to be in work together. Measured, within 1 MB:
    12 lines 122 MB, 48 lines 146 MB; what grows are facts and plan, 0.7 MB a line. Keeping every raw line as it is in
    the file (2 MB) as well made it 141 and 311 MB: a factor of 2.2 instead of 1.2.
    """
    one = read_line(min((scrap / "lines").glob("*.sgy")), ReadOptions(interval_unit="ps")).data
    peak = []
    for count in (12, 48):
        site = tmp_path / f"lines-{count}"
        long_lines(site, one, count)
        done = subprocess.run([sys.executable, "-c", MEASURED, str(site)], capture_output=True, text=True, check=True)
        peak.append([int(kilobytes) for kilobytes in done.stdout.split()[-2:]])
    (base, few), (_, many) = peak
    assert few > base + 20_000, peak  # the run is seen at all
    assert many < 1.1 * few, peak
    assert many - base < 1.4 * (few - base), peak


def test_problem_of_a_line_names_the_line(scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """What was set aside says which file and which line of the register it is."""
    site = copied(scrap, tmp_path)
    path = sorted((site / "lines").glob("*.sgy"))[0]
    path.write_bytes(path.read_bytes()[:2000])
    problem = map_site(site).set_aside[0]
    assert isinstance(problem, Problem)
    assert problem.file.endswith(path.name)
    assert problem.line == "1"
