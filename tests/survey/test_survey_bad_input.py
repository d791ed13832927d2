"""Every kind of bad survey is told with file, line, key, what came and what is allowed."""

# ruff: noqa: E501 - the tables of mistakes are read row by row
from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import pytest

from planum.errors import SurveyError
from planum.survey.folder import read_survey

Write = Callable[..., Path]

# name: (text in survey.toml, what replaces it, line, key, words of the message)
TOML_MISTAKES = {
    "not toml": ('title = "Marrowby Field"', 'title = "Marrowby', "2", "", "this is not TOML"),
    "doubled key": ('code = "MBF1"', 'code = "MBF1"\ncode = "X"', "4", "", "this is not TOML.*overwrite"),
    "impossible date": ("2026-04-18", "2026-02-30", "13", "", "this is not TOML"),
    "unknown key": ("code =", "cod =", "3", "survey.cod", "unknown key 'cod'; did you mean 'code'"),
    "missing key": ('code = "MBF1"\n', "", "1", "survey.code", "code is missing; needed: a short code"),
    "unknown table": ("[recipe]", "[recipes]", "28", "recipes", "unknown key 'recipes'; did you mean 'recipe'"),
    "missing table": (
        '[survey]\ntitle = "Marrowby Field"\ncode = "MBF1"\ncrs = "EPSG:25832"\n', "", "", "survey",
        r"the table \[survey\] is missing",
    ),
    "key of another table": (
        "[ground]\n", "[ground]\ntop_m = 1.0\n", "20", "ground.top_m", "'top_m' belongs to the table 'slices'",
    ),
    "table that is a value": ("[recipe]", "[recipe]\n[survey.title]", "29", "", "this is not TOML"),
    "text for a number": (
        "_mhz = 400", '_mhz = "400"', "8", "radar[400].centre_frequency_mhz", '"400"; a number is allowed; write it',
    ),
    "decimal comma": ("= 0.16", '= "0,16"', "9", "radar[400].antenna_separation_m", '"0,16"; a number is allowed'),
    "number for text": ('code = "MBF1"', "code = 7", "3", "survey.code", "code is 7; text in quotes is allowed"),
    "truth for a number": ("= 0.16", "= true", "9", "radar[400].antenna_separation_m", "is true; a number"),
    "frequency in GHz": (
        "_mhz = 400", "_mhz = 0.4", "8", "radar[400].centre_frequency_mhz", "0.4; it should be greater than or equal to 10",
    ),
    "frequency in Hz": ("_mhz = 400", "_mhz = 4e8", "8", "radar[400].centre_frequency_mhz", "less than or equal to 3000"),
    "infinite number": ("= 0.16", "= inf", "9", "radar[400].antenna_separation_m", "not finite; a finite number"),
    "no number": ("= 0.16", "= nan", "9", "radar[400].antenna_separation_m", "not finite"),
    "enormous number": ("_mhz = 400", "_mhz = 0x" + "f" * 5000, "8", "radar[400].centre_frequency_mhz", "enormous"),
    "thousands of digits": ("_mhz = 400", "_mhz = " + "9" * 5000, "", "", "this is not TOML"),
    "both intervals": (
        'interval_unit = "ps"', 'interval_unit = "ps"\nsample_interval_ns = 0.15', "10", "radar[400].interval_unit",
        "sample_interval_ns and interval_unit are both given; one of the two",
    ),
    "unknown unit": ('"ps"', '"ms"', "10", "radar[400].interval_unit", '"ms"; allowed: "ps", "ns", "us"'),
    "negative interval": (
        'interval_unit = "ps"', "sample_interval_ns = -1", "10", "radar[400].sample_interval_ns", "greater than 0",
    ),
    "gain from a file": (
        'interval_unit = "ps"', 'recorded_gain = "gain.csv"', "10", "radar[400].recorded_gain",
        r"not supported yet: a recorded gain from a file \(gain.csv\)",
    ),
    "gain that is nothing": (
        'interval_unit = "ps"', 'recorded_gain = "some"', "10", "radar[400].recorded_gain", '"none", "unknown" or',
    ),
    "axis": ('interval_unit = "ps"', 'antenna_axis = "up"', "10", "radar[400].antenna_axis", '"along", "across"'),
    "no radar": (
        '[[radar]]\nname = "400"\ncentre_frequency_mhz = 400\nantenna_separation_m = 0.16\ninterval_unit = "ps"\n', "",
        "", "radar", r"the table \[radar\] is missing; needed: at least one antenna",
    ),
    "second radar without a name": (
        "[[visit]]", "[[radar]]\ncentre_frequency_mhz = 900\nantenna_separation_m = 0.06\n[[visit]]", "12",
        "radar[2].name", "name is missing; each of several radars has a name",
    ),
    "two radars of one name": (
        "[[visit]]", '[[radar]]\nname = "400"\ncentre_frequency_mhz = 900\nantenna_separation_m = 0.06\n[[visit]]', "13",
        "radar[400].name", r"two tables \[\[radar\]\] are called '400'",
    ),
    "unknown radar of a grid": (
        'register = "lines.csv"', 'radar = "40"', "17", "grid[A].radar", r"no \[\[radar\]\] is called '40'; did you mean",
    ),
    "unknown visit of a grid": (
        'register = "lines.csv"', "visit = 2026-04-19", "17", "grid[A].visit", "no .*visit.* called '2026-04-19'",
    ),
    "two visits of one day": (
        "[[grid]]", "[[visit]]\ndate = 2026-04-18\n[[grid]]", "15", "visit[2].name", "give each visit of one day its own",
    ),
    "date as text": ("= 2026-04-18", '= "18 April"', "13", "visit[1].date", "a date is written 2026-04-18"),
    "time for a date": ("= 2026-04-18", "= 12:30:00", "13", "visit[1].date", "a date such as 2026-04-18"),
    "code with blanks": ('"MBF1"', '"MB F1"', "3", "survey.code", "1 to 16 letters"),
    "code too long": ('"MBF1"', '"ABCDEFGHIJKLMNOPQ"', "3", "survey.code", "1 to 16 letters"),
    "code that climbs": ('"MBF1"', '"../x"', "3", "survey.code", "cannot be used in file names"),
    "code of a device": ('"MBF1"', '"nul"', "3", "survey.code", "name of a device"),
    "code of a port": ('"MBF1"', '"COM1"', "3", "survey.code", "name of a device"),
    "empty title": ('"Marrowby Field"', '""', "2", "survey.title", "at least 1 character"),
    "geographic crs": ("25832", "4326", "4", "survey.crs", "is geographic, in degrees; a projected system in metres"),
    "geocentric crs": ("25832", "4978", "4", "survey.crs", "is not projected"),
    "crs in feet": ("25832", "2263", "4", "survey.crs", "is in US survey foot; a system in metres"),
    "unknown crs": ("25832", "999999", "4", "survey.crs", "is not known; a code such as EPSG:25832"),
    "crs that is a projection string": (
        '"EPSG:25832"', '"+proj=utm +zone=32 +nadgrids=/etc/passwd"', "4", "survey.crs", "is not a code",
    ),
    "no grid": ('[[grid]]\nname = "A"\nregister = "lines.csv"\n', "", "", "grid", r"the table \[grid\] is missing"),
    "grid without a name": ('name = "A"\n', "", "15", "grid[1].name", "name is missing"),
    "grid with a bad name": ('name = "A"', 'name = "A/x"', "16", "grid[A/x].name", "letters, digits"),
    "grid called like a device": ('name = "A"', 'name = "con"', "16", "grid[con].name", "belongs to a device"),
    "two grids of one name": (
        "[ground]", '[[grid]]\nname = "a"\n[ground]', "20", "grid[a].name", r"two tables \[\[grid\]\] are called 'a'",
    ),
    "register and files": (
        'register = "lines.csv"',
        'register = "lines.csv"\nfiles = "{line}.sgy"\nline_spacing_m = 0.25\nline_length_m = 20.0',
        "18", "grid[A].files", "register and files are both given",
    ),
    "short form without files": (
        'register = "lines.csv"', "line_spacing_m = 0.25", "17", "grid[A].line_spacing_m", "belongs to the short form",
    ),
    "short form without spacing": (
        'register = "lines.csv"', 'files = "lines/A_{line}.sgy"\nline_length_m = 20.0', "15", "grid[A].line_spacing_m",
        "line_spacing_m is missing; the short form needs it",
    ),
    "spacing 0": (
        'register = "lines.csv"', 'files = "lines/A_{line}.sgy"\nline_length_m = 20.0\nline_spacing_m = 0', "19",
        "grid[A].line_spacing_m", "line_spacing_m is 0",
    ),
    "pattern without a number": (
        'register = "lines.csv"', 'files = "lines/A.sgy"\nline_length_m = 20.0\nline_spacing_m = 1', "17",
        "grid[A].files", "the file name holds {line} once",
    ),
    "last line before the first": (
        'register = "lines.csv"',
        'files = "lines/A_{line}.sgy"\nline_length_m = 20.0\nline_spacing_m = 1\nfirst_line = 5\nlast_line = 4',
        "21", "grid[A].last_line", "last_line is 4 and first_line 5",
    ),
    "last line and count": (
        'register = "lines.csv"',
        'files = "lines/A_{line}.sgy"\nline_length_m = 20.0\nline_spacing_m = 1\nline_count = 5\nlast_line = 4',
        "20", "grid[A].line_count", "last_line and line_count are both given",
    ),
    "walk": ('register = "lines.csv"', 'walk = "zig-zag"', "17", "grid[A].walk", '"zigzag", "one-way"'),
    "cell 0": ('register = "lines.csv"', "cell_m = 0", "17", "grid[A].cell_m", "greater than 0"),
    "split": ('register = "lines.csv"', 'split = "colour"', "17", "grid[A].split", '"fieldrecord"'),
    "raw layout": (
        'register = "lines.csv"', "[grid.raw]\nheader_bytes = -1\nsamples = 512\nsample_type = \"int16\"", "18",
        "grid[A].raw.header_bytes", "greater than or equal to 0",
    ),
    "unknown key of the raw layout": (
        'register = "lines.csv"', '[grid.raw]\nheader_bytes = 0\nsample = 512\nsample_type = "int16"', "19",
        "grid[A].raw.sample", "did you mean 'samples'",
    ),
    "channels": ('register = "lines.csv"', 'channels = "channels.csv"', "17", "grid[A].channels", "antenna array"),
    "velocity above light": ("0.085", "0.4", "20", "ground.velocity_m_per_ns", "less than or equal to 0.2997"),
    "velocity in cm": ("0.085", "8.5", "20", "ground.velocity_m_per_ns", "less than or equal to 0.2997"),
    "velocity too slow": ("0.085", "0.02", "20", "ground.velocity_m_per_ns", "greater than or equal to 0.03"),
    "error without velocity": (
        "velocity_m_per_ns = 0.085", "velocity_error_m_per_ns = 0.005", "20", "ground.velocity_error_m_per_ns",
        "without a velocity",
    ),
    "error above velocity": (
        "= 0.085", "= 0.085\nvelocity_error_m_per_ns = 0.1", "21", "ground.velocity_error_m_per_ns", "as large as",
    ),
    "soil": (
        "velocity_m_per_ns = 0.085", 'soil = "loam"', "20", "ground.soil", r"not supported yet: a ground type \(soil\)",
    ),
    "velocity layers": ("= 0.085", "= 0.085\nlayers = []", "21", "ground.layers", "not supported yet: velocity in layers"),
    "elevation": ("[recipe]", '[elevation]\nfile = "e.csv"', "28", "elevation", "not supported yet: the ground surface"),
    "obstacles": ("[recipe]", "[obstacles]", "28", "obstacles", "not supported yet: obstacles"),
    "array": ("[recipe]", "[array]", "28", "array", "not supported yet: an antenna array"),
    "frame": ("[recipe]", "[[frame]]", "28", "frame", "not supported yet: further local frames"),
    "bottom above top": ("bottom_m = 2.0", "bottom_m = 0.0", "24", "slices.bottom_m", "bottom_m 0 is not below top_m 0"),
    "slice too thick": ("= 0.10", "= 3.0", "25", "slices.thickness_m", "does not fit between"),
    "steps that lose depths": ("= 0.05", "= 0.2", "26", "slices.step_m", "depths between the slices would be lost"),
    "too many slices": ("step_m = 0.05", "step_m = 1e-9", "26", "slices.step_m", "at most 2000 slices"),
    "settings of no step": (
        "[recipe]", "[recipe.bandpas]\nx = 1", "28", "recipe.bandpas", "not a step of this recipe; did you mean 'bandpass'",
    ),
    "settings that are no table": ("[recipe]", "[recipe]\ndewow = 3", "29", "recipe.dewow", "are not a table"),
    "steps that are no list": ("[recipe]", '[recipe]\nsteps = "dewow"', "29", "recipe.steps", "a list is allowed"),
    "step that is no text": ("[recipe]", "[recipe]\nsteps = [1]", "29", "recipe.steps[1]", "text in quotes"),
}  # fmt: skip

ROW = "A,2,lines/A_2.sgy,20,0.25,0,0.25"
HEAD = "grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m"
# name: (text in lines.csv, what replaces it, line, key, words of the message)
REGISTER_MISTAKES = {
    "column misspelt": (HEAD, HEAD.replace("file", "fiel"), "1", "fiel", "unknown column 'fiel'; did you mean 'file'"),
    "column missing": (HEAD, HEAD.replace(",end_y_m", ""), "1", "end_y_m", "the column 'end_y_m' is missing"),
    "column twice": (HEAD, HEAD + ",grid", "1", "grid", "the column 'grid' stands twice"),
    "text for a place": (ROW, ROW.replace("20", "twenty"), "3", "start_x_m", "start_x_m is 'twenty'; a finite number"),
    "unit in a place": (ROW, ROW.replace("20,", "20 m,"), "3", "start_x_m", "a finite number up to 1e.09, without unit"),
    "empty place": (ROW, ROW.replace("20,", ","), "3", "start_x_m", "start_x_m is empty; each row needs it"),
    "infinite place": (ROW, ROW.replace("20,", "inf,"), "3", "start_x_m", "a finite number"),
    "place that overflows": (ROW, ROW.replace("20,", "1e999,"), "3", "start_x_m", "a finite number"),
    "no place": (ROW, ROW.replace("20,", "nan,"), "3", "start_x_m", "a finite number"),
    "number with underscore": (ROW, ROW.replace("20,", "2_0,"), "3", "start_x_m", "a finite number"),
    "digits of another script": (ROW, ROW.replace("20,", "٢٠,"), "3", "start_x_m", "a finite number"),
    "both decimal marks": (ROW, ROW.replace("20,", '"20,5",'), "3", "start_x_m", "other cells use a decimal point"),
    "decimal commas split the row": (ROW, ROW.replace("0.25", "0,25"), "3", "", "more cells than columns.*decimal comma"),
    "no file": (ROW, ROW.replace("lines/A_2.sgy", ""), "3", "file", "file is empty"),
    "no line number": (ROW, ROW.replace("A,2", "A,"), "3", "line", "line is empty"),
    "line number that climbs": (ROW, ROW.replace("A,2", "A,../2"), "3", "line", "cannot be used in file names"),
    "unknown grid": (ROW, ROW.replace("A,2", "AA,2"), "3", "grid", r"called 'AA'; did you mean 'A'"),
    "zero length": (ROW, ROW.replace("20,", "0,"), "3", "end_x_m", "start and end are the same place"),
    "slanting line": (ROW, ROW.replace("0.25,0,0.25", "0.25,0,5"), "3", "end_x_m", "not parallel to local x or y"),
    "two directions": (ROW, ROW.replace("20,0.25,0,0.25", "1,0,1,20"), "3", "end_x_m", "two directions in one grid"),
    "file used twice": (ROW, ROW.replace("A_2", "A_1"), "3", "file", r"already used for line A/1 \(lines.csv line 2\)"),
    "line twice": (
        ROW, ROW.replace("2,lines", "1,lines").replace("0.25", "0"), "3", "line", "covers 20.00 m of its other piece",
    ),
    "two lines at one place": (ROW, ROW.replace("0.25", "0"), "3", "line", "covers 20.00 m of line 1 .lines.csv line 2"),
    "line at two places": (ROW, ROW.replace("A,2", "A,1"), "3", "line", "stands at 0 m and at 0.25 m"),
    "quote not closed": (ROW, ROW.replace("A,2", 'A,"2'), "3", "", "cannot be split.*quotes come in pairs"),
    "path outside": (ROW, ROW.replace("lines/A_2", "../A_2"), "3", "file", "leaves the survey folder"),
    "absolute path": (ROW, ROW.replace("lines/A_2", "/data/A_2"), "3", "file", "is absolute"),
    "empty table": (None, "\n\n", "", "", "lines.csv is empty; the first row names the columns"),
    "head alone": (None, HEAD + "\n", "", "", "lines.csv holds no lines"),
    "binary file": (None, b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR", "", "", "lines.csv is not text"),
}  # fmt: skip
OPTIONAL_MISTAKES = {
    "first_trace": ("-1", "first_trace", "a whole number, counted from 0"),
    "last_trace": ("0", "last_trace", "is not after first_trace 0"),
    "part": ("one", "part", "a whole number, counted from 0"),
    "channel": ("1", "channel", r"not supported yet: an antenna array \(channel\)"),
    "visit": ("2026-05-01", "visit", "called '2026-05-01'; did you mean '2026-04-18'"),
    "radar": ("900", "radar", r"no \[\[radar\]\] is called '900'"),
}
CONTROL_MISTAKES = {
    "text for a number": ("500020", "east", "3", "easting_m", "easting_m is 'east'; a finite number"),
    "empty cell": ("500020", "", "3", "easting_m", "easting_m is empty"),
    "point twice": ("P2", "p1", "3", "point", "the point 'p1' stands twice, first in line 2"),
    "point without a name": ("P2", "", "3", "point", "point is empty"),
    "one place only": ("P2,20", "P2,0", "2", "grid", "the site grid has control at 1 place; a frame needs 2"),
    "column misspelt": ("northing_m", "north_m", "1", "north_m", "unknown column 'north_m'; did you mean 'northing_m'"),
    "column missing": (",northing_m", "", "1", "northing_m", "the column 'northing_m' is missing"),
    "no points": ("P1,0,0,500000,5400000\nP2,20,0,500020,5400000\n", "", "", "", "control.csv holds no points"),
}


def _told(site: Path, file: str, line: str, key: str, words: str) -> None:
    """Require such a problem among those raised; its sentence names file, line and key."""
    with pytest.raises(SurveyError, match=words) as caught:
        read_survey(site)
    fitting = [str(p) for p in caught.value.problems if (p.file, p.line, p.key) == (file, line, key)]
    assert any(re.search(words, text) for text in fitting), "\n".join(map(repr, caught.value.problems))
    for part in (file, f"line {line}" if line else "", key):
        assert part in fitting[0]


@pytest.mark.parametrize("name", TOML_MISTAKES)
def test_a_mistake_in_survey_toml_is_told(folder: Write, toml: str, name: str) -> None:
    old, new, line, key, words = TOML_MISTAKES[name]
    assert toml.count(old) >= 1
    _told(folder(toml=toml.replace(old, new, 1)), "survey.toml", line, key, words)


@pytest.mark.parametrize("name", REGISTER_MISTAKES)
def test_a_mistake_in_the_register_is_told(folder: Write, lines: str, name: str) -> None:
    old, new, line, key, words = REGISTER_MISTAKES[name]
    if old is not None:
        assert lines.count(old) == 1
        new = lines.replace(old, new)
    _told(folder(lines=new), "lines.csv", line, key, words)


@pytest.mark.parametrize("column", OPTIONAL_MISTAKES)
def test_a_mistake_in_an_optional_column_is_told(folder: Write, column: str) -> None:
    cell, key, words = OPTIONAL_MISTAKES[column]
    _told(folder(lines=f"{HEAD},{column}\n{ROW},{cell}\n"), "lines.csv", "2", key, words)


@pytest.mark.parametrize("name", CONTROL_MISTAKES)
def test_a_mistake_in_the_control_points_is_told(folder: Write, control: str, name: str) -> None:
    old, new, line, key, words = CONTROL_MISTAKES[name]
    assert control.count(old) == 1
    _told(folder(control=control.replace(old, new)), "control.csv", line, key, words)


@pytest.mark.parametrize(
    ("extra", "cell", "key", "words"),
    [
        ("grid", "B", "grid", "no .*grid.* with this table is called 'B'"),
        ("accuracy_m", "-1", "accuracy_m", "accuracy_m is -1; a positive number"),
        ("elevation_m", "high", "elevation_m", "elevation_m is 'high'; a finite number"),
    ],
)
def test_a_mistake_in_an_optional_control_column_is_told(
    folder: Write, control: str, extra: str, cell: str, key: str, words: str
) -> None:
    text = "\n".join(f"{row},{cell if i else extra}" for i, row in enumerate(control.splitlines()))
    _told(folder(control=text), "control.csv", "2", key, words)


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("obstacles.geojson", "obstacles"),
        ("elevation.csv", "the ground surface"),
        ("elevation.tif", "the ground surface"),
        ("channels.csv", "antenna arrays"),
        ("marks/1.csv", "distance marks"),
        ("tracks/1.csv", "tracks"),
        ("Obstacles.GeoJSON", "obstacles"),
    ],
)
def test_a_file_that_would_be_ignored_is_refused_by_name(folder: Write, name: str, words: str) -> None:
    site = folder(files=("lines/A_1.sgy", "lines/A_2.sgy", "lines/A_10.sgy", name))
    _told(site, name.partition("/")[0], "", "", f"not supported yet: {words}.*; move it out of the survey folder")


def test_control_in_other_letters_is_not_ignored(folder: Write) -> None:
    site = folder(files=("lines/A_1.sgy", "Control.CSV"))
    _told(site, "Control.CSV", "", "", "Control.CSV is not read; the name is control.csv; rename it")


def test_the_same_folders_may_stand_empty(folder: Write) -> None:
    site = folder()
    (site / "marks").mkdir()
    (site / "tracks").mkdir()
    assert len(read_survey(site).rows) == 3


def test_an_empty_list_of_grids_is_told(folder: Write, toml: str) -> None:
    head, _, rest = toml.partition('[[grid]]\nname = "A"\nregister = "lines.csv"\n')
    _told(
        folder(toml="grid = []\n" + head + rest), "survey.toml", "1", "grid", "grid is empty; needed: at least one grid"
    )


def test_the_missing_parts_of_a_folder_are_told(folder: Write, tmp_path: Path) -> None:
    with pytest.raises(SurveyError, match="there is no folder"):
        read_survey(tmp_path / "nowhere")
    with pytest.raises(SurveyError, match=r"survey.toml: the folder 'site' holds no survey.toml.*planum new"):
        read_survey(folder(toml=None))


def test_a_missing_register_is_told(folder: Write) -> None:
    _told(folder(lines=None), "lines.csv", "", "", "lines.csv is not there")


def test_a_grid_without_a_row_is_told(folder: Write, toml: str) -> None:
    site = folder(toml=toml.replace("[ground]", '[[grid]]\nname = "B"\n[ground]'))
    _told(site, "survey.toml", "", "grid[B]", "grid 'B' has no line in lines.csv")


def test_a_survey_whose_files_are_all_missing_is_told(folder: Write) -> None:
    _told(folder(files=()), "survey.toml", "", "", "no line is left to work on")


def test_a_short_form_that_fits_no_file_is_told(folder: Write, toml: str) -> None:
    short = 'files = "lines/B_{line}.sgy"\nline_spacing_m = 0.25\nline_length_m = 20.0'
    site = folder(toml=toml.replace('register = "lines.csv"', short))
    _told(site, "survey.toml", "17", "grid[A].files", "no file fits 'lines/B_{line}.sgy' from line 1 on")


def test_two_files_of_one_number_are_told(folder: Write, toml: str) -> None:
    short = 'files = "lines/A_{line}.sgy"\nline_spacing_m = 0.25\nline_length_m = 20.0'
    site = folder(toml=toml.replace('register = "lines.csv"', short), files=("lines/A_1.sgy", "lines/A_01.sgy"))
    _told(site, "survey.toml", "17", "grid[A].files", "'lines/A_01.sgy' and 'A_1.sgy' are both line 1")


def test_several_radars_need_a_choice(folder: Write, toml: str) -> None:
    two = toml.replace(
        "[[visit]]", '[[radar]]\nname = "900"\ncentre_frequency_mhz = 900\nantenna_separation_m = 0.06\n\n[[visit]]'
    )
    _told(folder(toml=two), "lines.csv", "2", "radar", "the survey has several radars, and none is named")
    short = 'files = "lines/A_{line}.sgy"\nline_spacing_m = 0.25\nline_length_m = 20.0'
    site = folder(toml=two.replace('register = "lines.csv"', short))
    _told(site, "survey.toml", "22", "grid[A].radar", "several radars, and the grid 'A' names none")


def test_all_mistakes_of_all_files_come_at_once(folder: Write, toml: str, lines: str, control: str) -> None:
    site = folder(
        toml=toml.replace("code", "cod").replace("= 400", "= 4"),
        lines=lines.replace("20,0.25", "20,a quarter").replace("A,10", "A,"),
        control=control.replace("500020", "east"),
        files=("obstacles.geojson",),
    )
    with pytest.raises(SurveyError, match="code is missing") as caught:
        read_survey(site)
    assert sorted((p.file, p.line) for p in caught.value.problems) == [
        ("control.csv", "3"),
        ("lines.csv", "3"),
        ("lines.csv", "4"),
        ("obstacles.geojson", ""),
        ("survey.toml", "1"),
        ("survey.toml", "3"),
        ("survey.toml", "8"),
    ]


def test_a_table_full_of_mistakes_is_told_briefly(folder: Write) -> None:
    site = folder(lines=HEAD + "\n" + "A,1,a.sgy,x,x,x,x\n" * 5000)
    with pytest.raises(SurveyError, match="more problems are not listed; mend the first ones") as caught:
        read_survey(site)
    assert 300 <= len(caught.value.problems) <= 310
