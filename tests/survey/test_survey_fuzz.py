"""Whatever stands in the files of a survey, only SurveyError is raised, with printable problems."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from planum.errors import SurveyError
from planum.survey.checking import load_config
from planum.survey.config import (
    Grid,
    Ground,
    Radar,
    RawTable,
    Recipe,
    SliceTable,
    SurveyConfig,
    SurveyTable,
    Visit,
)
from planum.survey.folder import read_survey

# the fixtures write the same folder anew for each example, which is what is wanted here
ANEW = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None, max_examples=50)

KEYS = [*SurveyConfig.model_fields, *SurveyTable.model_fields, *Radar.model_fields, *Visit.model_fields]
KEYS += [f.alias or name for name, f in Grid.model_fields.items()]
KEYS += [*Ground.model_fields, *SliceTable.model_fields, *Recipe.model_fields, *RawTable.model_fields, "gain"]
VALUES = st.one_of(
    st.integers().map(str),
    st.floats().map(lambda v: {"inf": "inf", "-inf": "-inf", "nan": "nan"}.get(repr(v), repr(v))),
    st.sampled_from(['"x.csv"', '"A_{line}.sgy"', '"x"', '""', "true", "[]", "{}", "[[1]]", "2026-04-18", "12:00:00"]),
    st.sampled_from(KEYS).map(lambda k: f"{{{k} = 1}}"),
    st.text(st.characters(codec="ascii", exclude_characters="'\n\r"), max_size=8).map(lambda t: f"'{t}'"),
)
STATEMENTS = st.one_of(
    st.sampled_from(KEYS).map(lambda k: f"[{k}]"),
    st.sampled_from(KEYS).map(lambda k: f"[[{k}]]"),
    st.tuples(st.sampled_from(KEYS), VALUES).map(lambda kv: f"{kv[0]} = {kv[1]}"),
)
CELLS = st.one_of(
    st.sampled_from(["A", "1", "lines/A_1.sgy", "0", "20", "0,5", "0.5", "-1", "", "nan", '"', "1e999", "../x", "NUL"]),
    st.text(max_size=6),
)
HEAD = (
    "grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m,first_trace,last_trace,channel,visit,superseded_by,part,radar"
)


def _only_survey_errors(site: Path) -> None:
    problems, rows = (), ()
    try:
        rows = read_survey(site).rows
    except SurveyError as error:
        problems = error.problems
    assert bool(rows) != bool(problems)
    assert all(str(p).isprintable() for p in problems)


@ANEW
@given(text=st.one_of(st.text(max_size=200), st.binary(max_size=200)))
def test_any_text_as_survey_toml(folder, text: str | bytes) -> None:
    raw = text if isinstance(text, bytes) else text.encode("utf-8", "surrogatepass")
    _only_survey_errors(folder(toml=raw))


@ANEW
@given(statements=st.lists(STATEMENTS, max_size=25))
def test_any_statements_as_survey_toml(folder, statements: list[str]) -> None:
    _only_survey_errors(folder(toml="\n".join(statements)))


@ANEW
@given(at=st.integers(0, 28), statement=STATEMENTS, drop=st.booleans())
def test_any_statement_in_a_good_survey_toml(folder, toml: str, at: int, statement: str, drop: bool) -> None:
    rows = toml.splitlines()
    rows[at : at + drop] = [statement]
    _only_survey_errors(folder(toml="\n".join(rows)))


@ANEW
@given(text=st.one_of(st.text(max_size=200), st.binary(max_size=200)), head=st.booleans())
def test_any_text_as_a_register(folder, lines: str, text: str | bytes, head: bool) -> None:
    raw = text if isinstance(text, bytes) else text.encode("utf-8", "surrogatepass")
    _only_survey_errors(folder(lines=(lines.encode() if head else b"") + raw))


@ANEW
@given(rows=st.lists(st.lists(CELLS, min_size=5, max_size=14), max_size=5), mark=st.sampled_from(",;\t"))
def test_any_cells_in_a_register(folder, rows: list[list[str]], mark: str) -> None:
    text = "\n".join([HEAD.replace(",", mark), *(mark.join(row) for row in rows)])
    _only_survey_errors(folder(lines=text.encode("utf-8", "surrogatepass")))


@ANEW
@given(text=st.text(max_size=200))
def test_any_text_as_control(folder, control: str, text: str) -> None:
    _only_survey_errors(folder(control=(control + text).encode("utf-8", "surrogatepass")))


@pytest.mark.parametrize("text", ["a = 1" + "0" * 4300, "a = 0x" + "f" * 9999, "a = 1e99999", "a = '''" + "'" * 3000])
def test_numbers_and_texts_of_absurd_length(text: str) -> None:
    with pytest.raises(SurveyError, match=r"survey\.toml, line 1|this is not TOML|unknown key 'a'"):
        load_config(text)
