"""Good surveys in all the shapes crews and spreadsheet programs give them."""

from __future__ import annotations

import codecs
from collections.abc import Callable
from pathlib import Path

import pytest

from planum.survey.folder import Survey, read_survey

Write = Callable[..., Path]

SHORT = 'files = "lines/A_{line}.sgy"\nline_spacing_m = 0.25\nline_length_m = 20.0'
RADARS = '[[radar]]\nname = "900"\ncentre_frequency_mhz = 900\nantenna_separation_m = 0.06\n\n[[visit]]'
HEAD = "grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m"


def _places(survey: Survey) -> list[tuple[str, str, tuple[float, float], tuple[float, float]]]:
    return [(row.line, row.file, row.start, row.end) for row in survey.rows]


def test_rows_come_in_natural_order_with_names_filled_in(folder: Write) -> None:
    survey = read_survey(folder())
    assert _places(survey) == [
        ("1", "lines/A_1.sgy", (0, 0), (20, 0)),
        ("2", "lines/A_2.sgy", (20, 0.25), (0, 0.25)),
        ("10", "lines/A_10.sgy", (0, 0.5), (20, 0.5)),
    ]
    assert {(row.grid, row.radar, row.visit) for row in survey.rows} == {("A", "400", "2026-04-18")}
    assert survey.rows[2].source == "lines.csv line 4"
    assert survey.radar(survey.rows[0]).antenna_separation_m == 0.16
    assert survey.visit(survey.rows[0]).date.year == 2026
    assert survey.grid(survey.rows[0]).name == "A"
    assert (survey.set_aside, survey.warnings, survey.control) == ((), (), ())


def _excel(text: str) -> str:
    return text.replace(",", ";").replace("0.25", "0,25").replace("0.5", "0,5")


HABITS: dict[str, Callable[[str], str | bytes]] = {
    "semicolons and decimal commas": _excel,
    "tabs": lambda t: t.replace(",", "\t"),
    "tabs and decimal commas": lambda t: t.replace(",", "\t").replace("0.25", "0,25").replace("0.5", "0,5"),
    "semicolons and decimal points": lambda t: t.replace(",", ";"),
    "quoted decimal commas": lambda t: t.replace("0.25", '"0,25"').replace("0.5", '"0,5"'),
    "every cell quoted": lambda t: "\n".join(",".join(f'"{c}"' for c in r.split(",")) for r in t.splitlines()),
    "byte-order mark": lambda t: codecs.BOM_UTF8 + t.encode(),
    "UTF-16": lambda t: t.encode("utf-16"),
    "UTF-16, the other end first": lambda t: codecs.BOM_UTF16_BE + t.encode("utf-16-be"),
    "UTF-16 without its mark": lambda t: t.encode("utf-16-le"),
    "Windows line ends": lambda t: t.replace("\n", "\r\n"),
    "old line ends": lambda t: t.replace("\n", "\r"),
    "no end of the last line": lambda t: t.rstrip("\n"),
    "capital column names": lambda t: t.replace(HEAD, HEAD.upper()),
    "column names with blanks": lambda t: t.replace(HEAD, "Grid,Line,File,Start x (m),start y m,End X m,end-y-m"),
    "grid in small letters": lambda t: t.replace("A,", "a,"),
    "blank rows": lambda t: "\n\n" + t.replace("\n", "\n,,,,,,\n\n"),
    "trailing separators": lambda t: t.replace("\n", ",,,\n"),
    "blanks round the cells": lambda t: t.replace(",", " , "),
    "hard blanks round the cells": lambda t: t.replace(",", "\u00a0,\u00a0"),
    "separator declared": lambda t: "sep=;\n" + _excel(t),
    "columns in another order": lambda t: "\n".join(",".join(r.split(",")[::-1]) for r in t.splitlines()),
    "typographic minus": lambda t: t.replace("20,0.25", "20,\u22120.25").replace("0,0.25", "0,\u22120.25"),
    "plus and exponent": lambda t: t.replace("20,", "+2.0E1,"),
    "blank grid": lambda t: t.replace("A,", ","),
    "a note on two lines": lambda t: t.replace("y_m\n", "y_m,note\n").replace("20,0\n", '20,0,"wet,\nstopped"\n'),
}


@pytest.mark.parametrize("habit", HABITS)
def test_a_habit_of_spreadsheet_programs_changes_nothing(folder: Write, lines: str, habit: str) -> None:
    survey = read_survey(folder(lines=HABITS[habit](lines)))
    sign = -1 if habit == "typographic minus" else 1
    assert _places(survey) == [
        ("1", "lines/A_1.sgy", (0, 0), (20, 0)),
        ("2", "lines/A_2.sgy", (20, sign * 0.25), (0, sign * 0.25)),
        ("10", "lines/A_10.sgy", (0, 0.5), (20, 0.5)),
    ]


def test_the_line_of_a_row_counts_lines_of_the_file(folder: Write) -> None:
    text = f'\n{HEAD},note\nA,1,lines/A_1.sgy,0,0,20,0,"on\ntwo"\n\nA,2,lines/A_2.sgy,0,1,20,1,\n'
    assert [r.source for r in read_survey(folder(lines=text)).rows] == ["lines.csv line 3", "lines.csv line 6"]


def test_words_in_windows_1252_are_read(folder: Write, toml: str) -> None:
    text = f"{HEAD};note\n".replace(",", ";") + "A;1;lines/A_1.sgy;0;0;20;0;Gräben – nördlich\n"
    site = folder(toml=toml.replace("Marrowby", "Möllenfeld").encode("cp1252"), lines=text.encode("cp1252"))
    survey = read_survey(site)
    assert survey.rows[0].note == "Gräben – nördlich"
    assert survey.config.survey.title == "Möllenfeld Field"


def test_optional_columns_are_kept(folder: Write) -> None:
    text = (
        HEAD + ",first_trace,last_trace,part,radar,visit,note\n"
        "A,1,lines/A_1.sgy,0,0,9,0,0,449,,,18.4.2026,up to the tree\n"
        "A,1,lines/A_1.sgy,11,0,20,0,450.0,,,400,2026-04-18,\n"
        "A,2,lines/A_2.sgy,0,1,20,1,,,1,,,\n"
        "A,3,lines/A_2.sgy,0,2,20,2,,,2,,,\n"
    )
    rows = read_survey(folder(lines=text)).rows
    assert [(r.line, r.first_trace, r.last_trace, r.part) for r in rows] == [
        ("1", 0, 449, None), ("1", 450, None, None), ("2", None, None, 1), ("3", None, None, 2),
    ]  # fmt: skip
    assert {r.visit for r in rows} == {"2026-04-18"}
    assert rows[0].note == "up to the tree"


def test_pieces_of_a_line_come_along_the_line(folder: Write) -> None:
    text = f"{HEAD}\nA,1,lines/A_10.sgy,20,0,11,0\nA,1,lines/A_2.sgy,0,0,9,0\nA,1,lines/A_1.sgy,9.05,0,11.05,0\n"
    rows = read_survey(folder(lines=text)).rows
    assert [r.file for r in rows] == ["lines/A_2.sgy", "lines/A_1.sgy", "lines/A_10.sgy"]


def test_a_missing_file_sets_its_row_aside(folder: Write) -> None:
    survey = read_survey(folder(files=("lines/A_1.sgy", "lines/A_10.SGY")))
    assert [row.line for row in survey.rows] == ["1"]
    first, second = survey.set_aside
    assert (first.file, first.line, first.key, first.severity) == ("lines.csv", "3", "file", "warning")
    assert "line A/2 is set aside: lines/A_2.sgy is not there; copy it into the survey folder" in str(first)
    assert "there is 'A_10.SGY': mind upper and lower case" in str(second)


def test_a_missing_file_s_place_may_be_recorded_by_another_row(folder: Write) -> None:
    """A row that is set aside is not compared with the others."""
    text = f"{HEAD}\nA,1,lines/lost.sgy,0,0,20,0\nA,1,lines/A_1.sgy,0,0,20,0\n"
    assert [r.file for r in read_survey(folder(lines=text)).rows] == ["lines/A_1.sgy"]


@pytest.mark.parametrize("by", ["2b", "lines/A_2.sgy", "lines\\a_2.sgy"])
def test_a_superseded_row_is_left_out_with_a_note(folder: Write, by: str) -> None:
    text = f"{HEAD},superseded_by\nA,2,lines/A_1.sgy,0,0,20,0,{by}\nA,2b,lines/A_2.sgy,0,0,20,0,\n"
    survey = read_survey(folder(lines=text))
    assert [row.line for row in survey.rows] == ["2b"]
    assert [(p.severity, p.line) for p in survey.warnings] == [("note", "2")]
    assert "line A/2 (lines/A_1.sgy) is left out: superseded by" in str(survey.warnings[0])


def test_a_row_superseded_by_nothing_known_is_told(folder: Write) -> None:
    text = f"{HEAD},superseded_by\nA,2,lines/A_1.sgy,0,0,20,0,2\nA,3,lines/A_2.sgy,0,1,20,1,\n"
    survey = read_survey(folder(lines=text))
    assert [row.line for row in survey.rows] == ["3"]
    assert [(p.severity, p.key) for p in survey.warnings] == [("warning", "superseded_by")]
    assert "which is no line and no file in this register" in str(survey.warnings[0])


def test_one_radar_may_stand_in_single_brackets_without_a_name(folder: Write, toml: str) -> None:
    text = toml.replace('[[radar]]\nname = "400"', "[radar]").replace("[[visit]]\ndate = 2026-04-18", "")
    survey = read_survey(folder(toml=text))
    assert {(row.radar, row.visit) for row in survey.rows} == {("400", "")}
    assert survey.visit(survey.rows[0]) is None


def test_several_radars_visits_and_grids(folder: Write, toml: str) -> None:
    text = toml.replace("[[visit]]", RADARS).replace(
        "[[grid]]",
        '[[visit]]\nname = "wet"\ndate = 2026-05-02\n\n[[grid]]\nname = "B"\nradar = "900"\nvisit = "wet"\n\n[[grid]]',
    )
    text = text.replace('register = "lines.csv"', 'radar = "400"\nvisit = 2026-04-18')
    rows = (
        f"{HEAD},radar,visit\nA,1,lines/A_1.sgy,0,0,20,0,,\nA,1,lines/A_1b.sgy,0,0,20,0,900,\n"
        "A,1,lines/A_1c.sgy,0,0,20,0,,WET\nB,1,lines/B_1.sgy,0,0,0,20,,\n"
    )
    site = folder(toml=text, lines=rows, files=tuple(f"lines/{n}.sgy" for n in ("A_1", "A_1b", "A_1c", "B_1")))
    assert [(r.grid, r.radar, r.visit) for r in read_survey(site).rows] == [
        ("B", "900", "wet"), ("A", "400", "2026-04-18"), ("A", "400", "wet"), ("A", "900", "2026-04-18"),
    ]  # fmt: skip  # grids in the order of survey.toml


def test_grids_may_have_their_own_registers(folder: Write, toml: str, lines: str) -> None:
    site = folder(toml=toml.replace("[ground]", '[[grid]]\nname = "B"\nregister = "B\\\\lines.csv"\n[ground]'))
    (site / "B").mkdir()
    (site / "B" / "lines.csv").write_text(f"{HEAD}\nB,1,lines/A_1x.sgy,0,0,20,0\n")
    (site / "lines" / "A_1x.sgy").write_bytes(b"x")
    assert [(r.grid, r.source) for r in read_survey(site).rows][-1] == ("B", "B/lines.csv line 2")


@pytest.mark.parametrize(
    ("extra", "expected"),
    [
        ("", [("1", (0, 0), (20, 0)), ("2", (0, 0.25), (20, 0.25)), ("10", (0, 2.25), (20, 2.25))]),
        ('walk = "zigzag"', [("1", (0, 0), (20, 0)), ("2", (20, 0.25), (0, 0.25)), ("10", (20, 2.25), (0, 2.25))]),
        (
            'walk = "zigzag"\nfirst_walk = "-"',
            [("1", (20, 0), (0, 0)), ("2", (0, 0.25), (20, 0.25)), ("10", (0, 2.25), (20, 2.25))],
        ),
        (
            'walk = "one-way"\nfirst_walk = "-"\nalong = "y"',
            [("1", (0, 20), (0, 0)), ("2", (0.25, 20), (0.25, 0)), ("10", (2.25, 20), (2.25, 0))],
        ),
        ("first_line = 2\nfirst_line_m = 5.0", [("2", (0, 5), (20, 5)), ("10", (0, 7), (20, 7))]),
        ("last_line = 2", [("1", (0, 0), (20, 0)), ("2", (0, 0.25), (20, 0.25))]),
        ("line_count = 9", [("1", (0, 0), (20, 0)), ("2", (0, 0.25), (20, 0.25))]),
    ],
)  # fmt: skip
def test_the_short_form_places_lines_by_their_number(folder: Write, toml: str, extra: str, expected: list) -> None:
    site = folder(toml=toml.replace('register = "lines.csv"', f"{SHORT}\n{extra}"), lines=None)
    assert [(r.line, r.start, r.end) for r in read_survey(site).rows] == expected


def test_the_short_form_takes_leading_zeros_and_steps_left(folder: Write, toml: str) -> None:
    text = toml.replace(
        'register = "lines.csv"', SHORT.replace("0.25", "-0.5").replace("/", "\\\\") + '\nwalk = "one-way"'
    )
    survey = read_survey(folder(toml=text, files=tuple(f"lines/A_{n:03}.sgy" for n in (1, 2, 3, 7, 12))))
    assert [(r.file, r.start[1]) for r in survey.rows] == [
        ("lines/A_001.sgy", 0), ("lines/A_002.sgy", -0.5), ("lines/A_003.sgy", -1), ("lines/A_007.sgy", -3),
        ("lines/A_012.sgy", -5.5),
    ]  # fmt: skip
    assert [p.severity for p in survey.warnings] == ["note", "note"]
    assert "for lines 4 to 6: a gap stays" in str(survey.warnings[0])
    assert survey.set_aside == ()


def test_an_unstated_walk_is_noted(folder: Write, toml: str) -> None:
    site = folder(toml=toml.replace('register = "lines.csv"', SHORT), files=("lines/A_1.sgy",))
    (note,) = read_survey(site).warnings
    assert (note.severity, note.key) == ("note", "grid[A].walk")
    assert "every line is taken to start at the baseline" in note.came


def test_control_points_are_read(folder: Write) -> None:
    text = (
        "Point;Local X m;local_y_m;easting_m;northing_m;elevation_m;grid;accuracy_m\n"
        "P1;0;0;500 000,00;5 400 000,00;12,5;;0,02\nP2;20;0;500\u00a0020;5400000;;;\n"
        "a;0;0;500000;5400000;;a;\nb;0;20;500000;5400020;;A;\n"
    )
    control = read_survey(folder(control=text)).control
    assert [(p.point, p.grid, p.easting_m, p.northing_m) for p in control] == [
        ("P1", "", 500000, 5400000), ("P2", "", 500020, 5400000), ("a", "A", 500000, 5400000),
        ("b", "A", 500000, 5400020),
    ]  # fmt: skip
    assert (control[0].elevation_m, control[0].accuracy_m, control[1].elevation_m) == (12.5, 0.02, None)
    assert control[3].source == "control.csv line 5"


@pytest.mark.parametrize("crs", ["EPSG:25832", "epsg:2154", "EPSG:27700", "EPSG:25832+7837", "ESRI:102014"])
def test_projected_systems_in_metres_are_taken(folder: Write, toml: str, crs: str) -> None:
    assert read_survey(folder(toml=toml.replace("EPSG:25832", crs))).config.survey.crs == crs


def test_everything_of_the_contract_is_typed(folder: Write, toml: str) -> None:
    text = toml.replace('interval_unit = "ps"', 'sample_interval_ns = 0.15\ntime_zero_ns = 6\nantenna_axis = "across"')
    text = text.replace(
        'register = "lines.csv"',
        'trace_spacing_m = 0.02\ncell_m = 0.05\npositions = "header"\nsplit = "fieldrecord"\n[grid.raw]\n'
        'header_bytes = 3600\nsamples = 512\nbytes_before_trace = 240\nsample_type = "int16"\nbyte_order = "big"',
    )
    text = text.replace("[recipe]", '[recipe]\nsteps = ["dewow", "envelope"]\n[recipe.dewow]\nwindow_ns = 5.0')
    config = read_survey(folder(toml=text)).config
    grid = config.grid[0]
    assert (grid.positions, grid.split, grid.trace_spacing_m, grid.cell_m) == ("header", "fieldrecord", 0.02, 0.05)
    assert (grid.raw.header_bytes, grid.raw.samples, grid.raw.bytes_before_trace) == (3600, 512, 240)
    assert (grid.raw.sample_type, grid.raw.byte_order_mark) == ("int16", ">")
    assert (config.radar[0].sample_interval_ns, config.radar[0].time_zero_ns) == (0.15, 6.0)
    assert (config.recipe.names(), config.recipe.settings()) == (("dewow", "envelope"), {"dewow": {"window_ns": 5.0}})


def test_defaults_are_those_of_the_contract(folder: Write, toml: str) -> None:
    config = read_survey(folder(toml=toml[: toml.index("[ground]")])).config
    assert config.slices.model_dump() == {"top_m": 0.0, "bottom_m": 2.0, "thickness_m": 0.1, "step_m": 0.05}
    assert config.ground.velocity_m_per_ns is None
    assert config.recipe.names() == ("dewow", "gain", "bandpass", "background", "migrate", "envelope")
    assert config.recipe.settings() == {}


def test_a_config_cannot_be_changed(folder: Write) -> None:
    survey = read_survey(folder())
    with pytest.raises(ValueError, match="frozen"):
        survey.config.slices.top_m = 1.0
