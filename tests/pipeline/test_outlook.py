"""The outlook finds before a map what would stop it, all of it, and agrees with the map."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from planum.errors import PlanumError, SurveyError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy
from planum.pipeline.outlook import outlook
from planum.pipeline.run import map_site, plan_site


@pytest.fixture
def site(scrap: Path, tmp_path: Path) -> Path:
    """A copy of the small survey: five lines of 3 m, 61 traces, velocity given, slices from 0.4 to 0.7 m."""
    shutil.copytree(scrap, tmp_path / "site")
    return tmp_path / "site"


def survey(site: Path, old: str, new: str) -> None:
    text = (site / "survey.toml").read_text(encoding="utf-8")
    assert old in text
    (site / "survey.toml").write_text(text.replace(old, new, 1), encoding="utf-8")


def rewrite(site: Path, change: Callable[[np.ndarray], np.ndarray], *, only: slice = slice(None)) -> list[str]:
    """Write line files anew with other traces; return their names."""
    files = sorted((site / "lines").glob("*.sgy"))[only]
    for path in files:
        line = read_line(path, ReadOptions(interval_unit="ps"))
        write_segy(path, change(line.data), interval_ns=line.interval_ns)
    return [path.name for path in files]


def window_ns(site: Path) -> float:
    line = read_line(min((site / "lines").glob("*.sgy")), ReadOptions(interval_unit="ps"))
    return float(line.interval_ns * line.data.shape[1])


def test_a_sound_survey_is_told_as_the_map_would_plan_it(site: Path) -> None:
    """Names, rows and spacings are the plan's own."""
    seen, plan = outlook(site), plan_site(site).sets[0]
    assert [one.name for one in seen.sets] == [plan.name]
    one, g = seen.sets[0], plan.geometry
    assert (one.lines, one.direction, one.spacing_m) == (g.n_lines, g.direction, g.line_step_m)
    assert one.trace_spacing_m == pytest.approx(g.along_step_m)
    assert (seen.set_aside, one.missing_m) == ((), ())


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (
            "[[radar]]",
            "[[radar]]\ntime_zero_ns = 1000.0",
            r"time zero is 1000 ns, and the record ends -\d+",
        ),
        ("[[grid]]", "[[grid]]\ncell_m = 1e-6", r"the grids span \d+ . \d+ cells of 1e-06 m; at most 400,000,000"),
        ("[[grid]]", "[[grid]]\ncell_m = 9.0", "cell_m is 9, and the lines are 0.25 m apart"),
        ("[[grid]]", "[[grid]]\ntrace_spacing_m = 1e-7", r"trace_spacing_m is 1e-07; 0.005 to 3 m"),
        ("bottom_m = 0.7", "bottom_m = 40.7\ntop_m = 40.0", "the first slice ends at 40.10 m, the record"),
    ],
)
def test_numbers_a_map_cannot_work_with_are_found(site: Path, old: str, new: str, message: str) -> None:
    """Each names its place, and the map does refuse it."""
    if old.startswith("bottom"):
        survey(site, "top_m = 0.4\n", "")
    survey(site, old, new)
    with pytest.raises(SurveyError, match=message):
        outlook(site)
    with pytest.raises(PlanumError):
        map_site(site)
    assert not (site / "out").exists()


def test_a_time_zero_that_leaves_too_little_of_the_record_is_found(site: Path) -> None:
    """5 ns before the end: at 0.0875 m/ns they reach 22 cm at most (v t / 2), the first slice ends at 50 cm."""
    survey(site, "[[radar]]", f"[[radar]]\ntime_zero_ns = {window_ns(site) - 5.0:.1f}")
    with pytest.raises(SurveyError, match=r"first slice ends at 0\.50 m, .* reaches 0\.[12]\d m") as caught:
        outlook(site)
    assert caught.value.problems[0].key.endswith("time_zero_ns")
    with pytest.raises(PlanumError, match="the first slice ends"):
        map_site(site)


def test_a_record_that_is_long_enough_in_fast_ground_only_is_a_warning(site: Path) -> None:
    """Without a velocity: 0.5 m take 2 x 0.5 / 0.06 = 16.7 ns in wet soil, but half of that in dry."""
    survey(site, "[ground]\nvelocity_m_per_ns = 0.0875\n", "")
    survey(site, "[[radar]]", f"[[radar]]\ntime_zero_ns = {window_ns(site) - 12.0:.1f}")
    told = [w for w in outlook(site).warnings if "the first slice ends at 0.50 m" in w.came]
    assert [w.severity for w in told] == ["warning"]
    assert "in slow ground" in told[0].came


def test_mistakes_of_every_kind_come_at_once(site: Path) -> None:
    """A step, control points, a cell, a trace spacing per grid, a damaged and a constant file: one error names all."""
    names = rewrite(site, np.zeros_like, only=slice(1))
    names.append(sorted((site / "lines").glob("*.sgy"))[1].name)
    (site / "lines" / names[1]).write_bytes(b"damaged")
    survey(site, "[survey]", '[survey]\ncrs = "EPSG:25832"')
    survey(site, "[[grid]]", "[[grid]]\ntrace_spacing_m = 1e-7")
    with (site / "survey.toml").open("a", encoding="utf-8") as file:
        file.write('\n[recipe]\nsteps = ["dewow"]\n')
    with pytest.raises(SurveyError) as caught:
        outlook(site)
    text = str(caught.value)
    for part in ("the recipe ends with voltage", "no control points", "trace_spacing_m is 1e-07", *names):
        assert part in text, part
    severities = [p.severity for p in caught.value.problems]
    assert severities == sorted(severities)  # errors first, then warnings


def test_constant_files_are_named_as_the_map_names_them(site: Path, no_isosurface: None) -> None:
    """One is set aside by both, all of them stop both."""
    (name,) = rewrite(site, np.zeros_like, only=slice(1))
    (aside,) = outlook(site).set_aside
    assert aside.file.endswith(name)
    assert "every trace is constant" in aside.came
    assert len(map_site(site).set_aside) == 1
    rewrite(site, lambda data: np.full_like(data, 7))
    with pytest.raises(SurveyError, match="no line can be used") as caught:
        outlook(site)
    assert len(caught.value.problems) == 6


def test_files_of_one_trace_are_named(site: Path) -> None:
    """Some are told, and mapped; where no line has two traces there is no spacing, for either."""
    (name,) = rewrite(site, lambda data: data[:1], only=slice(1))
    told = [w for w in outlook(site).warnings if "a single trace" in w.came]
    assert [w.file.endswith(name) for w in told] == [True]
    rewrite(site, lambda data: data[:1])
    with pytest.raises(SurveyError, match="no line with two traces") as caught:
        outlook(site)
    assert sum("a single trace" in p.came for p in caught.value.problems) == 5
    with pytest.raises(PlanumError, match="no line with two traces"):
        map_site(site)


def test_a_first_trace_behind_the_end_of_the_file_is_set_aside(site: Path) -> None:
    """61 traces are there; the register wants trace 100 on."""
    register = site / "lines.csv"
    head, first, *rest = register.read_text(encoding="utf-8").splitlines()
    assert "first_trace" not in head
    rows = [f"{head},first_trace,last_trace", f"{first},100,160", *(f"{row},," for row in rest)]
    register.write_text("\n".join(rows) + "\n", encoding="utf-8")
    (aside,) = outlook(site).set_aside
    assert "first_trace is 100, and the file holds 61 traces" in aside.came


def test_a_register_in_centimetres_is_asked_about_by_check_and_map(site: Path, no_isosurface: None) -> None:
    """Spacing and length 30 times too large (7.5 m, 1.5 m from trace to trace): both ask, neither refuses."""
    register = site / "lines.csv"
    head, *rows = register.read_text(encoding="utf-8").splitlines()
    at = [i for i, name in enumerate(head.split(",")) if name.endswith("_m")]
    scaled = []
    for row in rows:
        cells = row.split(",")
        for i in at:
            cells[i] = f"{30 * float(cells[i]):g}"
        scaled.append(",".join(cells))
    register.write_text("\n".join([head, *scaled]) + "\n", encoding="utf-8")
    asked = [w for w in outlook(site).warnings if "is the register in metres?" in w.came]
    assert len(asked) == 2
    assert set(asked) <= set(map_site(site).warnings)
