"""Drafts of survey.toml and lines.csv read back as what was put in."""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from planum.errors import SurveyError
from planum.survey.checking import load_config
from planum.survey.config import Grid, Radar, Recipe, SliceTable, SurveyTable, Visit
from planum.survey.folder import read_survey
from planum.survey.register import RegisterRow
from planum.survey.template import GridDraft, SurveyDraft, lines_csv, survey_toml

FULL = SurveyDraft(
    title='Marrowby "North" \\ field',
    code="MBF1",
    crs="EPSG:25832",
    centre_frequency_mhz=400,
    antenna_separation_m=0.16,
    sample_interval_ns=0.15,
    date=dt.date(2026, 4, 18),
    conditions="short grass",
    grids=(
        GridDraft("A"),
        GridDraft("B", files="lines/B_{line}.sgy", line_spacing_m=-0.25, line_length_m=20, along="y", walk="zigzag"),
    ),
)


def test_a_full_draft_reads_back() -> None:
    config = load_config(survey_toml(FULL))
    assert config.survey == SurveyTable(title=FULL.title, code="MBF1", crs="EPSG:25832")
    assert config.radar == (
        Radar(name="400", centre_frequency_mhz=400, antenna_separation_m=0.16, sample_interval_ns=0.15),
    )
    assert config.visit == (Visit(name="2026-04-18", date=FULL.date, conditions="short grass"),)
    short = {"first_line": 1, "first_line_m": 0.0, "line_spacing_m": -0.25, "line_length_m": 20.0}
    assert config.grid == (
        Grid(name="A", register="lines.csv"),
        Grid(name="B", files="lines/B_{line}.sgy", along="y", walk="zigzag", **short),
    )
    assert config.slices == SliceTable()


def test_a_draft_names_what_it_does_not_know() -> None:
    draft = SurveyDraft("T", "T", grids=(GridDraft("A", files="{line}.sgy"),))
    with pytest.raises(SurveyError, match="centre_frequency_mhz is missing") as caught:
        load_config(survey_toml(draft))
    assert {p.key for p in caught.value.problems} == {
        "radar[1].centre_frequency_mhz",
        "radar[1].antenna_separation_m",
        "grid[A].line_spacing_m",
        "grid[A].line_length_m",
    }


def test_every_commented_key_of_a_draft_is_a_key(tmp_path: Path) -> None:
    """The draft teaches the contract: with all its comments opened it is still a good survey."""
    text = survey_toml(SurveyDraft("T", "T", grids=(GridDraft("A", files="{line}.sgy", walk="zigzag"),)))
    opened = "\n".join(line.removeprefix("# ") if "=" in line or "[[" in line else line for line in text.splitlines())
    opened = "\n".join(line for line in opened.splitlines() if not line.startswith("sample_interval_ns"))
    config = load_config(opened)
    taught = {key for table in (config.radar[0], config.visit[0], config.grid[0]) for key in table.model_fields_set}
    aside = {
        "name",
        "register_file",
        "last_line",
        "line_count",
        "radar",
        "visit",
        "positions",
        "split",
        "channels",
        "raw",
    }
    known = {*Radar.model_fields, *Visit.model_fields, *Grid.model_fields} - aside - {"sample_interval_ns"}
    assert taught - aside == known
    assert config.recipe == Recipe(steps=Recipe().names())
    assert (config.ground.velocity_m_per_ns, config.ground.velocity_error_m_per_ns) == (0.085, 0.005)


@given(st.text(min_size=1, max_size=60), st.text(max_size=60))
def test_any_title_survives(title: str, conditions: str) -> None:
    draft = SurveyDraft(title, "T", None, 400, 0.16, date=dt.date(2026, 1, 1), conditions=conditions)
    config = load_config(survey_toml(draft))
    assert config.survey.title == "".join(c if c.isprintable() else " " for c in title)


def test_a_register_reads_back(folder: Callable[..., Path]) -> None:
    rows = (
        RegisterRow("A", "1", "lines/A_1.sgy", (0.0, -0.0), (8.123456, 0.0), last_trace=99, note='tree, "big"\nat 8 m'),
        RegisterRow("A", "1", "lines/A_1.sgy", (12.0, 0.0), (20.0, 0.0), first_trace=100),
        RegisterRow("A", "2", "lines/A_2.sgy", (20.0, 1e-6), (1 / 3, 1e-6)),
    )
    text = lines_csv(rows)
    assert text.splitlines()[0] == "grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m,first_trace,last_trace,note"
    read = read_survey(folder(lines=text.replace(",0.000001", ",0.25"))).rows
    for a, b in zip(read[:2], rows[:2], strict=True):
        assert (a.line, a.file, a.start, a.end, a.first_trace, a.last_trace) == (
            b.line, b.file, b.start, b.end, b.first_trace, b.last_trace,
        )  # fmt: skip
    assert [r.note for r in read] == ['tree, "big" at 8 m', "", ""]  # a line end is a blank once it is read
    assert read[2].end[0] == pytest.approx(1 / 3, abs=5e-7)  # written to the micrometre


def test_a_plain_register_has_the_needed_columns_only() -> None:
    assert lines_csv([]) == "grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m\n"
