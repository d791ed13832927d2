"""Sets from real folders with one thing wrong: nothing silent, nothing lost that could be kept."""

from __future__ import annotations

import csv
import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from scipy.signal import resample

from planum.errors import PlanumError, SurveyError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy
from planum.pipeline.passes import read_pieces
from planum.pipeline.run import map_site, plan_site, read_run


@pytest.fixture
def site(scrap: Path, tmp_path: Path) -> Path:
    """A copy of the small survey: five lines of 61 traces."""
    shutil.copytree(scrap, tmp_path / "site")
    return tmp_path / "site"


def traces(path: Path) -> np.ndarray:
    return read_line(path, ReadOptions(interval_unit="ps")).data


def files(site: Path) -> list[Path]:
    return sorted((site / "lines").glob("*.sgy"))


def rows(site: Path, change: Callable[[int, dict[str, str]], None]) -> None:
    """Change the register row by row."""
    with (site / "lines.csv").open(encoding="utf-8", newline="") as file:
        table = list(csv.DictReader(file))
    for i, row in enumerate(table):
        change(i, row)
    with (site / "lines.csv").open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, table[0])
        writer.writeheader()
        writer.writerows(table)


def survey(site: Path, old: str, new: str) -> None:
    text = (site / "survey.toml").read_text(encoding="utf-8")
    assert old in text
    (site / "survey.toml").write_text(text.replace(old, new), encoding="utf-8")


def test_lines_keep_their_own_sample_interval(site: Path) -> None:
    """One line recorded at half the interval: read at its own, and the same ground comes out.

    scipy's resample makes the finer line; 2 % of the largest is what its ends and the int16 rounding leave.
    """
    before = plan_site(site)
    reference = read_pieces(site, before.sets[0], 2)
    data = traces(files(site)[2])
    fine = np.rint(resample(data.astype(float), 2 * data.shape[1], axis=1)).clip(-32768, 32767).astype(np.int16)
    write_segy(files(site)[2], fine, interval_ns=0.15)
    plan = plan_site(site)
    (piece,) = read_pieces(site, plan.sets[0], 2)
    assert piece.interval_ns == 0.15
    assert [e.interval_ns for e in plan.sets[0].entries] == [0.3, 0.3, 0.15, 0.3, 0.3]
    from planum.engine.linepass import row_cube

    a = row_cube(reference, before.sets[0], 2).sel(time=slice(5, 30))
    b = row_cube([piece], plan.sets[0], 2).interp(time=a.time)
    assert float(abs(a - b).max()) < 0.02 * float(abs(a).max())


def test_one_short_file_costs_itself_only(site: Path, no_isosurface: None) -> None:
    """A recording of a third of the window is set aside by name; the others keep all their slices."""
    write_segy(files(site)[1], traces(files(site)[1])[:, :50], interval_ns=0.3)
    result = map_site(site)
    (problem,) = result.set_aside
    assert files(site)[1].name in problem.file
    assert "most lines" in problem.came
    assert result.summary["slices"] == 3


def test_a_cut_file_is_not_stretched(site: Path, no_isosurface: None) -> None:
    """Half of a file: its traces stay where they were recorded, the other half of the line holds nothing."""
    path = files(site)[2]
    path.write_bytes(path.read_bytes()[: 3600 + 30 * (240 + 2 * 160) + 100])
    plan = plan_site(site)
    (entry,) = [e for e in plan.sets[0].entries if e.row == 2]
    assert entry.last_trace == 29
    assert abs(entry.end[0] - entry.start[0]) == pytest.approx(29 * 0.05)
    told = [str(w) for w in map_site(site).warnings]
    assert any("traces would lie 0.103 m apart" in t and "the file is cut" in t for t in told)


def test_odd_trace_spacing_is_told_and_kept(site: Path, no_isosurface: None) -> None:
    """A whole file on a line a third shorter than the others: perhaps true, perhaps a slip of the pen."""
    rows(site, lambda i, row: row.update(end_x_m="2.0") if i == 2 else None)
    result = map_site(site)
    assert any("check start, end, first_trace" in str(w) for w in result.warnings)
    plan, _ = read_run(result.out / "run.json")
    assert next(e for e in plan.sets[0].entries if e.row == 2).end[0] == 2.0


def test_two_visits_over_the_same_ground_are_refused(site: Path) -> None:
    """Interleaved days would make stripes, repeated ones would hide each other: refused by name."""
    survey(site, "[[grid]]", "[[visit]]\ndate = 2026-05-02\n\n[[grid]]")
    rows(site, lambda i, row: row.update(visit="2026-04-18" if i % 2 else "2026-05-02"))
    with pytest.raises(SurveyError, match=r"walked over the same ground on 2026-0\d-\d\d and on"):
        plan_site(site)


def test_two_visits_side_by_side_share_one_gain(site: Path) -> None:
    """Days that meet at an edge are two sets with the same gain and band: their seam is not of our making."""
    survey(site, "[[grid]]", "[[visit]]\ndate = 2026-05-02\n\n[[grid]]")
    rows(site, lambda i, row: row.update(visit="2026-04-18" if i < 3 else "2026-05-02"))
    plan = plan_site(site)
    assert len(plan.sets) == 2
    a, b = ({s.name: s.params for s in one.chain} for one in plan.sets)
    assert a["gain"]["absorption_db_per_ns"] == pytest.approx(b["gain"]["absorption_db_per_ns"], rel=1e-6)
    assert a["bandpass"] == b["bandpass"]


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("antenna_separation_m = 0.16", "antenna_separation_m = 0.16\ntime_zero_ns = 47.0", r"time_zero_ns"),
        ("antenna_separation_m = 0.16", "antenna_separation_m = 0.16\ntime_zero_ns = 1000", r"time_zero_ns"),
        ('name = "A"', 'name = "A"\ncell_m = 5.0', r"grid\[A\]\.cell_m: cell_m is 5, the lines are 0.25 m apart"),
        ('name = "A"', 'name = "A"\ncell_m = 1e-6', r"the grids span .* cells of 1e-06 m"),
        ('name = "A"', 'name = "A"\ntrace_spacing_m = 1e-7', r"trace_spacing_m"),
    ],
)
def test_absurd_numbers_are_refused_by_name(site: Path, old: str, new: str, message: str) -> None:
    """Before memory is asked for, with the key to mend."""
    survey(site, old, new)
    with pytest.raises(SurveyError, match=message):
        plan_site(site)


def test_two_velocities_are_told(site: Path, no_isosurface: None) -> None:
    """Migrated at one velocity, depths counted at another: a warning, and the statement names the one used."""
    with (site / "survey.toml").open("a", encoding="utf-8") as file:
        file.write("\n[recipe.migrate]\nvelocity_m_per_ns = 0.12\n")
    result = map_site(site)
    assert any("migrated at 0.12 m/ns, depths are counted at 0.0875" in str(w) for w in result.warnings)
    _, record = read_run(result.out / "run.json")
    assert record["statement"]["migration"] == "migrated in 2-D, line by line, at 0.12 m/ns"


def test_a_plan_is_repeated_on_its_own_bytes_only(site: Path, no_isosurface: None) -> None:
    """A line file that changed since is refused by name, and the cache is not spoilt for the file that comes back."""
    first = map_site(site)
    kept = (first.out / "slices_all.tif").read_bytes()
    shutil.copy(first.out / "run.json", site / "plan.json")
    own = files(site)[3].read_bytes()
    write_segy(files(site)[3], traces(files(site)[3])[::-1].copy(), interval_ns=0.3)
    shutil.rmtree(site / "work")
    with pytest.raises(SurveyError, match="this file has changed since the plan was made"):
        map_site(site, plan=site / "plan.json", name="again")
    files(site)[3].write_bytes(own)
    shutil.rmtree(first.out)
    assert (map_site(site).out / "slices_all.tif").read_bytes() == kept


def control(site: Path, *points: tuple[str, float, float, float, float]) -> None:
    lines = ["point,local_x_m,local_y_m,easting_m,northing_m", *(",".join(map(str, p)) for p in points)]
    (site / "control.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    survey(site, 'code = "TEST"', 'code = "TEST"\ncrs = "EPSG:25832"')


E, N = 566400.0, 5934100.0


@pytest.mark.parametrize(
    ("points", "message"),
    [
        ([("a", 0, 0, E, N), ("b", 3, 0, E + 3, N)], "do not tell to which hand y points"),
        ([("a", 0, 0, E, N), ("b", 1, 0, E + 1, N), ("c", 3, 0, E + 3, N)], "do not tell to which hand y points"),
        (
            [("a", 0, 0, E, N), ("b", 3, 0, E + 3.2, N), ("c", 3, 1, E + 3, N + 1), ("d", 0, 1, E, N + 1)],
            r"point \w is 0\.\d\d m from where the fit puts it",
        ),
    ],
)
def test_doubtful_control_is_told(
    site: Path, no_isosurface: None, points: list[tuple[str, float, float, float, float]], message: str
) -> None:
    """What a fit cannot know or only just bears is said, not swallowed."""
    control(site, *points)
    try:
        told = [str(w) for w in map_site(site).warnings]
    except PlanumError as refused:  # 0.2 m on 3 m is a scale the fit refuses altogether
        told = [str(refused)]
        message = f"{message}|scale of"
    import re

    assert any(re.search(message, t) for t in told), told


def test_moved_control_remakes_the_products(site: Path, no_isosurface: None) -> None:
    """A point that changes no fit still stands in the GeoPackage: the run is not "unchanged"."""
    points = [("a", 0, 0, E, N), ("b", 3, 0, E + 3, N), ("c", 0, 1, E, N + 1)]
    control(site, *points)
    assert map_site(site).changed
    assert not map_site(site).changed
    text = (site / "control.csv").read_text(encoding="utf-8")
    (site / "control.csv").write_text(text.replace("c,", "corner,"), encoding="utf-8")
    assert map_site(site).changed
