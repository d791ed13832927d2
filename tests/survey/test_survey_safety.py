"""Nothing that came on a stick is trusted: each rule has its test."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import pytest

from planum.errors import SurveyError
from planum.survey import toml_text
from planum.survey.folder import read_survey
from planum.survey.safety import MOST_TABLE_BYTES, MOST_TOML_BYTES, inside, is_device, natural_key, read_text_capped

Write = Callable[..., Path]

REFUSED = {
    "climbing": ("../secret.sgy", "leaves the survey folder"),
    "climbing later": ("lines/../../secret.sgy", "leaves the survey folder"),
    "climbing with backslashes": ("lines\\..\\..\\secret.sgy", "leaves the survey folder"),
    "absolute": ("/etc/passwd", "is absolute"),
    "absolute with a backslash": ("\\etc\\passwd", "is absolute"),
    "network share": ("\\\\server\\share\\a.sgy", "is absolute"),
    "drive": ("C:\\data\\a.sgy", "is absolute"),
    "drive without a slash": ("c:a.sgy", "is absolute"),
    "URL": ("https://example.org/a.sgy", "is a URL"),
    "URL in capitals": ("FILE:a.sgy", "is a URL"),
    "virtual": ("/vsicurl/http://example.org/a.tif", "is a virtual path"),
    "virtual with backslashes": ("\\vsizip\\a.zip\\a.sgy", "is a virtual path"),
    "virtual in capitals": ("/VSIMEM/a", "is a virtual path"),
    "stream": ("lines/a.sgy:hidden", "holds a colon"),
    "home": ("~/a.sgy", "starts at a home directory"),
    "home of another": ("~root/a.sgy", "starts at a home directory"),
    "device": ("lines/NUL", "names the device 'NUL'"),
    "device with a suffix": ("com1.sgy", "names the device 'com1.sgy'"),
    "NUL character": ("a\0.sgy", "holds control characters"),
    "line end": ("a\nb.sgy", "holds control characters"),
    "escape": ("a\x1b[2Jb.sgy", "holds control characters"),
    "reversed text": ("a\u202egys.b", "holds control characters"),
    "half a character": ("a\ud800.sgy", "holds control characters"),
    "empty": ("  ", "is empty"),
    "endless": ("a/" * 600, "has 1200 characters"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_a_path_that_may_leave_the_folder_is_refused(tmp_path: Path, name: str) -> None:
    text, words = REFUSED[name]
    with pytest.raises(SurveyError, match=words) as caught:
        inside(tmp_path, text)
    assert str(caught.value).isprintable()


@pytest.mark.parametrize("text", ["a.sgy", "lines/a.sgy", "lines\\a.sgy", "./lines//a.sgy", "x/../lines/a.sgy", " a "])
def test_a_path_inside_is_resolved(tmp_path: Path, text: str) -> None:
    path = inside(tmp_path, text)
    assert path == tmp_path.resolve() / ("lines/a.sgy" if "lines" in text else text.strip())


def test_a_backslash_is_a_slash_in_registers(folder: Write, lines: str) -> None:
    survey = read_survey(folder(lines=lines.replace("lines/", "lines\\")))
    assert [row.file for row in survey.rows] == ["lines/A_1.sgy", "lines/A_2.sgy", "lines/A_10.sgy"]


def test_a_link_that_leaves_the_folder_is_refused(folder: Write, tmp_path: Path) -> None:
    site = folder(files=("lines/A_1.sgy", "lines/A_10.sgy"))
    (tmp_path / "elsewhere.sgy").write_bytes(b"secret")
    (site / "lines" / "A_2.sgy").symlink_to(tmp_path / "elsewhere.sgy")
    with pytest.raises(SurveyError, match=r"lines.csv, line 3, file: .*leaves the survey folder.*further root"):
        read_survey(site)
    assert len(read_survey(site, roots=[tmp_path]).rows) == 3  # the user, not the file, may allow it


def test_a_linked_folder_is_followed_before_the_check(tmp_path: Path) -> None:
    (tmp_path / "site").mkdir()
    (tmp_path / "outside").mkdir()
    (tmp_path / "site" / "lines").symlink_to(tmp_path / "outside", target_is_directory=True)
    with pytest.raises(SurveyError, match="leaves the survey folder"):
        inside(tmp_path / "site", "lines/a.sgy")


def test_a_link_that_bites_its_tail_is_refused(tmp_path: Path) -> None:
    (tmp_path / "a").symlink_to(tmp_path / "b")
    (tmp_path / "b").symlink_to(tmp_path / "a")
    with pytest.raises(SurveyError, match=r"not there, or not a regular file|cannot be followed"):
        read_text_capped(tmp_path, "a", most_bytes=10)


@pytest.mark.parametrize("name", ["survey.toml", "lines.csv", "control.csv"])
def test_the_survey_files_themselves_may_not_be_links_to_elsewhere(folder: Write, tmp_path: Path, name: str) -> None:
    site = folder()
    (tmp_path / "secret").write_text("password")
    (site / name).unlink(missing_ok=True)
    (site / name).symlink_to(tmp_path / "secret")
    with pytest.raises(SurveyError, match=f"{name}: .*leaves the survey folder") as caught:
        read_survey(site)
    assert "password" not in str(caught.value)


def test_a_register_outside_the_folder_is_refused(folder: Write, toml: str, tmp_path: Path) -> None:
    (tmp_path / "lines.csv").write_text("secret")
    with pytest.raises(SurveyError, match=r"\.\./lines.csv: the path .*leaves the survey folder"):
        read_survey(folder(toml=toml.replace('"lines.csv"', '"../lines.csv"')))


def test_a_pattern_outside_the_folder_is_refused(folder: Write, toml: str) -> None:
    short = 'files = "../{line}.sgy"\nline_spacing_m = 0.25\nline_length_m = 20.0'
    with pytest.raises(SurveyError, match=r"survey.toml, line 17, grid\[A\].files: .*leaves the survey folder"):
        read_survey(folder(toml=toml.replace('register = "lines.csv"', short)))


def test_a_register_row_is_checked_again_when_its_path_is_asked_for(folder: Write, tmp_path: Path) -> None:
    survey = read_survey(folder())
    assert survey.path(survey.rows[0]) == (survey.folder / "lines/A_1.sgy").resolve()
    (survey.folder / "lines/A_1.sgy").unlink()
    (survey.folder / "lines/A_1.sgy").symlink_to("/etc/hostname")
    with pytest.raises(SurveyError, match="leaves the survey folder"):
        survey.path(survey.rows[0])


def test_a_pipe_is_not_waited_for(folder: Write) -> None:
    site = folder(lines=None)
    os.mkfifo(site / "lines.csv")
    with pytest.raises(SurveyError, match=r"lines\.csv is not there, or not a regular file"):
        read_survey(site)


def test_an_oversized_survey_file_is_refused(folder: Write, toml: str) -> None:
    with pytest.raises(SurveyError, match=f"survey.toml holds more than {MOST_TOML_BYTES} bytes"):
        read_survey(folder(toml=toml + "#" * MOST_TOML_BYTES))


def test_an_oversized_register_is_refused(folder: Write, lines: str) -> None:
    site = folder()
    with (site / "lines.csv").open("wb") as stream:
        stream.truncate(MOST_TABLE_BYTES + 1)  # a sparse file: the disk does not carry it
    with pytest.raises(SurveyError, match=f"lines.csv holds more than {MOST_TABLE_BYTES} bytes"):
        read_survey(site)


NESTED = {
    "arrays": "a = " + "[" * 100_000 + "]" * 100_000,
    "inline tables": "a = " + "{a=" * 100_000 + "1" + "}" * 100_000,
    "dotted keys": ".".join("a" * 100_000) + " = 1",
    "dotted table": "[" + ".".join("a" * 100_000) + "]",
    "dotted array of tables": "[[" + " . ".join('"a"' for _ in range(100_000)) + "]]",
    "nine levels": "a = " + "[" * 9 + "]" * 9,
}


@pytest.mark.parametrize("name", NESTED)
def test_deep_nesting_is_refused_before_it_is_parsed(folder: Write, toml: str, name: str) -> None:
    with pytest.raises(SurveyError, match=r"survey.toml, line 2: nested deeper than 8 levels"):
        read_survey(folder(toml="# depth\n" + NESTED[name] + "\n" + toml))


def test_brackets_and_dots_in_texts_and_comments_are_no_nesting() -> None:
    text = (
        'a = "' + "[.{" * 50 + "\"\nb = '''\n" + "[.\n" * 50 + "'''\n# " + "[." * 50 + "\nc = [" + "1.5, " * 9 + "]\n"
    )
    values, places = toml_text.parse(text, file="t")
    assert len(values["a"]) == 150
    assert [places.line([k]) for k in "abc"] == ["1", "2", "55"]


def test_places_of_keys_are_found() -> None:
    text = """\
# [survey]
[survey] # title
"title" = "x = 1"
'co.de' = [
  1,
  2,
]
a.b = 1

[[grid]]
name = "A"
[grid.raw]
samples = 5
[[grid]]
  name = "[B]"
  [recipe . gain]
  power = 1
"""
    _, places = toml_text.parse(text, file="t")
    for path, line in {
        ("survey",): "2", ("survey", "title"): "3", ("survey", "co.de"): "4", ("survey", "a", "b"): "8",
        ("grid", 0, "name"): "11", ("grid", 0, "raw", "samples"): "13", ("grid", 1): "14", ("grid", 1, "name"): "15",
        ("recipe", "gain", "power"): "17", ("grid", 0, "lost"): "10", ("lost",): "",
    }.items():  # fmt: skip
        assert places.line(path) == line, path


def test_messages_carry_no_control_characters(folder: Write, toml: str, lines: str) -> None:
    bad = toml.replace('code = "MBF1"', 'code = "\\u001b[31mMBF1"\n"k\\u001b[2Jey" = 1\n"\\u202e" = 2')
    site = folder(toml=bad, lines=lines.replace("A,2", "\x1b[31mA\x07,2").replace(",20,0.25", ",\x1b[1m,0.25"))
    with pytest.raises(SurveyError, match="code") as caught:
        read_survey(site)
    text = str(caught.value)
    assert all(line.isprintable() for line in text.split("\n"))
    assert len(text.split("\n")) == len(caught.value.problems)


def test_words_for_people_lose_their_control_characters(folder: Write, toml: str, control: str) -> None:
    text = "grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m,note\nA,1,lines/A_1.sgy,0,0,20,0,a\x1b[31mb\n"
    survey = read_survey(
        folder(toml=toml.replace("Marrowby", "M\\u001b[2J\\u202e"), lines=text, control=control.replace("P1", "P\x071"))
    )
    assert survey.config.survey.title == "M [2J  Field"
    assert survey.rows[0].note == "a [31mb"
    assert survey.control[0].point == "P 1"


@pytest.mark.parametrize("name", ["NUL", "con", "COM1", "lpt9.txt", "AUX.tar.gz", "prn ", "COM²", "CONIN$"])
def test_device_names_are_known(name: str) -> None:
    """The reserved names of Windows (Microsoft, Naming Files, Paths, and Namespaces; from memory)."""
    assert is_device(name)


@pytest.mark.parametrize("name", ["null", "console", "COM", "COM10", "A", "lines", "auxiliary.csv"])
def test_other_names_are_no_devices(name: str) -> None:
    assert not is_device(name)


def test_numbers_sort_by_value() -> None:
    names = ["A_10", "A_2", "a_1", "A_02b", "B", "A", "10", "9", "A_1_10", "A_1_9", "", "x" + "9" * 6000]
    assert sorted(names, key=natural_key) == [
        "", "9", "10", "A", "a_1", "A_1_9", "A_1_10", "A_2", "A_02b", "A_10", "B", "x" + "9" * 6000,
    ]  # fmt: skip


def test_a_long_list_of_missing_files_is_read_in_good_time(folder: Write, monkeypatch: pytest.MonkeyPatch) -> None:
    """The folder is searched for look-alikes of the first missing files only: cost must not grow with the square."""
    rows = "".join(f"A,{i},lines/B_{i}.sgy,0,{i},20,{i}\n" for i in range(2000))
    site = folder(lines="grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m\nA,x,lines/A_1.sgy,0,-1,20,-1\n" + rows)
    calls = []
    real = Path.iterdir
    monkeypatch.setattr(Path, "iterdir", lambda self: calls.append(self) or real(self))
    assert len(read_survey(site).set_aside) == 2000
    assert len(calls) <= 60
