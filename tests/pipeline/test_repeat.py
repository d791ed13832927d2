"""A plan that is repeated: refused when it is none or another site's, and compared with what the survey says now."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest

from planum.errors import SurveyError
from planum.pipeline.repeat import differences, of_this_site
from planum.pipeline.run import map_site, plan_site, read_run
from planum.records import Plan
from planum.survey.checking import load_config
from planum.survey.config import SurveyConfig


@pytest.fixture(scope="module")
def plan(scrap: Path) -> Plan:
    """The plan of the very small survey: five lines, slices from 0.4 to 0.7 m, velocity 0.0875 m/ns typed."""
    return plan_site(scrap)


def config_of(site: Path, *changes: tuple[str, str]) -> SurveyConfig:
    text = (site / "survey.toml").read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text
        text = text.replace(old, new, 1)
    return load_config(text)


def test_an_unchanged_survey_says_what_the_plan_says(scrap: Path, plan: Plan) -> None:
    """Nothing is told."""
    assert differences(plan, config_of(scrap)) == ()


def test_slices_left_out_below_the_record_are_no_difference(scrap: Path, tmp_path: Path) -> None:
    """The survey asks for 20 m, the plan ends where the recordings end: so it would again."""
    site = tmp_path / "site"
    shutil.copytree(scrap, site)
    text = (site / "survey.toml").read_text(encoding="utf-8")
    (site / "survey.toml").write_text(text.replace("bottom_m = 0.7", "bottom_m = 20.0"), encoding="utf-8")
    plan = plan_site(site)
    assert plan.intervals_m[-1][1] < 10
    assert differences(plan, config_of(site)) == ()


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("bottom_m = 0.7", "bottom_m = 0.6", "slices 2 of 0.1 m from 0.4 to 0.6 m, plan 3 of 0.1 m from 0.4 to 0.7 m"),
        ("top_m = 0.4", "top_m = 0.3", "slices 4 of 0.1 m from 0.3 to 0.7 m"),
        ("velocity_m_per_ns = 0.0875", "velocity_m_per_ns = 0.1", "velocity 0.1 m/ns, plan 0.0875 m/ns"),
        ("velocity_m_per_ns = 0.0875", "", "velocity estimated, plan 0.0875 m/ns"),
        ('title = "', 'title = "New ', "title 'New "),
        ("[[grid]]", "[[grid]]\ncell_m = 0.02", "cell 0.02 m, plan "),
        ("[ground]", '[recipe]\nsteps = ["dewow", "envelope"]\n[ground]', "steps dewow, envelope, plan dewow, gain"),
    ],
)
def test_what_the_survey_says_otherwise_is_one_line(scrap: Path, plan: Plan, old: str, new: str, says: str) -> None:
    """Each change is told by both numbers, in one warning."""
    (told,) = differences(plan, config_of(scrap, (old, new)))
    assert says in told.came
    assert told.severity == "warning"
    assert "\n" not in str(told)


def test_several_differences_are_still_one_line(scrap: Path, plan: Plan) -> None:
    """Title and velocity at once."""
    changed = config_of(scrap, ('title = "', 'title = "New '), ("= 0.0875", "= 0.1"))
    (told,) = differences(plan, changed)
    assert "title" in told.came
    assert "velocity" in told.came


def test_a_plan_of_another_site_is_refused_before_its_files_are_compared(
    scrap: Path, plan: Plan, tmp_path: Path
) -> None:
    """The code tells sites apart."""
    other = plan.model_copy(update={"code": "MBF1"})
    (tmp_path / "run.json").write_text(json.dumps({"plan": other.model_dump(mode="json")}), encoding="utf-8")
    with pytest.raises(SurveyError, match=f"this plan is of MBF1, this site is {plan.code}"):
        map_site(scrap, plan=tmp_path / "run.json", out=tmp_path / "out")
    assert not (tmp_path / "out").exists()
    assert of_this_site(plan, config_of(scrap), tmp_path) is plan


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (b"title = 'a survey.toml'", "run.json of a run is wanted; this is no JSON"),
        (b"\xff\xfe\x00", "run.json of a run is wanted; this is no JSON"),
        (b"[1, 2]", "this JSON holds no plan"),
        (b'{"a": 1}', "this JSON holds no plan"),
        (b'{"plan": {"version": "1"}}', r"no plan can be read \(title: field required\)"),
    ],
)
def test_a_file_that_is_no_plan_is_refused_in_our_words(tmp_path: Path, content: bytes, says: str) -> None:
    """Nothing of the parser's text (line and column of its first stumble) is left."""
    (tmp_path / "a.json").write_bytes(content)
    with pytest.raises(SurveyError, match=says) as refused:
        read_run(tmp_path / "a.json")
    assert "column" not in str(refused.value)
    assert "validation error" not in str(refused.value)
