"""The single commands on small folders: new, check, look, recipe, view, about, demo."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import NamedTuple

import click
import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner, Result
from PIL import Image

from planum.errors import MachineError, Problem
from planum.lines.segy_write import write_segy
from planum.outputs import look as look_picture
from planum.pipeline.run import RunResult
from planum.records import StepSpec
from planum_cli.commands import about, demo
from planum_cli.main import cli
from planum_cli.talk import aligned


class SetOf(NamedTuple):
    """What of a set's plan the recipe needs."""

    name: str
    chain: tuple[StepSpec, ...]


class PlanOf(NamedTuple):
    """What of a plan the recipe needs."""

    sets: tuple[SetOf, ...]


def run(*args: object, **named: object) -> Result:
    return CliRunner().invoke(cli, [str(a) for a in args], **named)  # type: ignore[arg-type]


def write_lines(folder: Path, count: int = 3) -> Path:
    """Write small SEG-Y lines of noise, whose interval unit the files do not tell."""
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(7)
    for number in range(1, count + 1):
        data = rng.integers(-2000, 2000, (21, 128)).astype(np.int16)
        write_segy(folder / f"L{number}.sgy", data, interval_ns=0.25, text=("A TEST LINE",))
    return folder


def write_empty_interval(path: Path) -> None:
    """Write a line whose interval fields are empty: bytes 3217, 3219, and 117 of each trace (SEG-Y rev 1)."""
    path.parent.mkdir(parents=True, exist_ok=True)
    data = np.random.default_rng(3).integers(-2000, 2000, (21, 128)).astype(np.int16)
    write_segy(path, data, interval_ns=0.25)
    content = bytearray(path.read_bytes())
    content[3216:3220] = bytes(4)
    for trace in range(3600, len(content), 240 + 2 * 128):
        content[trace + 116 : trace + 118] = bytes(2)
    path.write_bytes(content)


@pytest.fixture
def written(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Return the texts that reach the picture of `look`; they are drawn as well."""
    texts: list[str] = []
    draw = look_picture.write_text

    def keep(picture: Image.Image, at: tuple[float, float], text: str, *args: object, **named: object) -> None:
        texts.append(text)
        draw(picture, at, text, *args, **named)  # type: ignore[arg-type]

    monkeypatch.setattr(look_picture, "write_text", keep)
    return texts


@pytest.fixture
def stick(tmp_path: Path) -> Path:
    return write_lines(tmp_path / "stick")


@pytest.fixture
def site(stick: Path, tmp_path: Path) -> Path:
    """Return a survey drafted without questions."""
    done = run("new", tmp_path / "site", "--lines", stick, "--yes", "--frequency-mhz", "400")
    assert done.exit_code == 0, done.stderr
    return tmp_path / "site"


@pytest.fixture
def prompts(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Return the list of questions asked; each is answered by its guess."""
    asked: list[str] = []

    def answer(text: str, default: object = None, type: object = None, **_: object) -> object:  # noqa: A002
        asked.append(text)
        return type.convert(default, None, None) if isinstance(type, click.ParamType) else default

    monkeypatch.setattr(click, "prompt", answer)
    return asked


def test_new_with_yes_asks_nothing_and_check_passes(site: Path, prompts: list[str]) -> None:
    """The draft is a survey as it stands; its guesses are marked, the next commands named."""
    assert not prompts
    done = run("check", site)
    assert done.exit_code == 0, done.stderr
    assert "3 along x" in done.stdout
    assert f"next: planum map {site}" in done.stderr


def test_new_asks_at_most_six_questions(stick: Path, tmp_path: Path, prompts: list[str]) -> None:
    """No more than six, and no question twice; return keys make a survey that reads."""
    done = run("new", tmp_path / "site", "--lines", stick)
    assert done.exit_code == 0, done.stderr
    assert len(set(prompts)) == len(prompts) == 6
    assert run("check", tmp_path / "site").exit_code == 0


def test_what_is_given_is_not_asked(stick: Path, tmp_path: Path, prompts: list[str]) -> None:
    """Options answer questions, and reach the files."""
    given = ["--title", "North Field", "--spacing-m", "0.25", "--length-m", "5", "--walk", "one-way"]
    done = run("new", tmp_path / "site", "--lines", stick, *given, "--frequency-mhz", "500")
    assert done.exit_code == 0
    assert len(prompts) == 1
    text = (tmp_path / "site" / "survey.toml").read_text()
    assert 'title = "North Field"' in text
    assert 'code = "NF"' in text
    assert "centre_frequency_mhz = 500.0" in text
    assert (tmp_path / "site" / "lines.csv").read_text().splitlines()[2] == "A,2,lines/L2.sgy,0,0.25,5,0.25"


def test_answers_typed_at_the_questions_are_used(stick: Path, tmp_path: Path) -> None:
    """A wrong answer is asked again; the questions do not mix with the results."""
    typed = "My field\nfast\n250\n0.3\n0.5\n4\none-way\n"
    done = run("new", tmp_path / "site", "--lines", stick, input=typed)
    assert done.exit_code == 0, done.stderr
    assert "My field" in (tmp_path / "site" / "survey.toml").read_text()
    assert "centre_frequency_mhz = 250.0" in (tmp_path / "site" / "survey.toml").read_text()
    assert "Centre frequency" not in done.stdout
    assert (tmp_path / "site" / "lines.csv").read_text().splitlines()[2] == "A,2,lines/L2.sgy,0,0.5,4,0.5"


def test_new_asks_in_the_order_of_its_help(stick: Path, tmp_path: Path, prompts: list[str]) -> None:
    """Spacing comes before length in both."""
    run("new", tmp_path / "site", "--lines", stick)
    assert [text.split(" ")[0] for text in prompts] == ["What", "Centre", "Distance", "Distance", "Length", "Walked"]
    text = run("new", "--help").output.split("Example")[0]
    options = ["--title", "--frequency-mhz", "--separation-m", "--spacing-m", "--length-m", "--walk "]
    places = [text.index(f"  {option}") for option in options]
    assert places == sorted(places)


def test_new_says_once_that_the_interval_is_missing(tmp_path: Path) -> None:
    """Five files without interval: one sentence, which names the option that mends it."""
    for number in range(5):
        write_empty_interval(tmp_path / "stick" / f"L{number}.sgy")
    done = run("new", tmp_path / "site", "--lines", tmp_path / "stick", "--yes", "--quiet")
    assert done.exit_code == 3
    assert len(done.stderr.splitlines()) == 1
    assert "the interval field of 5 line file(s) is empty; give it with --interval-ns" in done.stderr
    done = run("new", tmp_path / "site", "--lines", tmp_path / "stick", "--yes", "--interval-ns", "0.25")
    assert done.exit_code == 0, done.stderr
    assert "sample_interval_ns = 0.25" in (tmp_path / "site" / "survey.toml").read_text()


def test_new_asks_for_an_interval_the_files_do_not_give(tmp_path: Path) -> None:
    """It is the first of still six questions; the title is not asked then, but taken from the folder."""
    for number in range(3):
        write_empty_interval(tmp_path / "stick" / f"L{number}.sgy")
    typed = "0.25\n250\n0.3\n0.5\n4\none-way\n"
    done = run("new", tmp_path / "site", "--lines", tmp_path / "stick", input=typed)
    assert done.exit_code == 0, done.stderr
    text = (tmp_path / "site" / "survey.toml").read_text()
    assert "sample_interval_ns = 0.25" in text
    assert "centre_frequency_mhz = 250.0" in text
    assert 'title = "site"' in text


def test_new_speaks_of_guesses_only_where_it_guessed(
    stick: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """All six given, and the interval: nothing is left to correct."""
    given = ["--title", "T", "--frequency-mhz", 400, "--separation-m", 0.16, "--spacing-m", 0.5, "--length-m", 4]
    given += ["--walk", "zigzag", "--interval-ns", 0.25]
    monkeypatch.chdir(tmp_path)
    done = run("new", "site", "--lines", stick, "--yes", *given)
    assert done.exit_code == 0, done.stderr
    assert "guessed" not in done.stderr
    assert "planum check site" in done.stderr


def test_a_question_nobody_can_answer_names_the_way_out(stick: Path, tmp_path: Path) -> None:
    """In a script standard input is empty: that is a usage error, and nothing is written."""
    done = run("new", tmp_path / "site", "--lines", stick, input="")
    assert done.exit_code == 2
    assert "--yes" in done.stderr
    assert not (tmp_path / "site").exists()


def test_new_refuses_to_overwrite(site: Path, stick: Path) -> None:
    """The survey of before stays byte for byte, and the refusal comes before any line is read."""
    before = (site / "survey.toml").read_bytes()
    done = run("new", site, "--lines", stick, "--yes")
    assert done.exit_code == 3
    assert "is not overwritten" in done.stderr
    assert "reading lines" not in done.stderr
    assert (site / "survey.toml").read_bytes() == before


def test_check_tells_all_mistakes_at_once(site: Path) -> None:
    """A wrong key, a wrong number and a wrong step: each with its place."""
    text = (site / "survey.toml").read_text().replace("bottom_m = 2.0", "botom_m = 2.0").replace("= 400.0", "= -4")
    (site / "survey.toml").write_text(text)
    done = run("check", site)
    assert done.exit_code == 3
    lines = done.stderr.splitlines()
    assert any("botom_m" in line and "line " in line and "bottom_m" in line for line in lines)
    assert any("centre_frequency_mhz" in line for line in lines)
    assert all(line.startswith("error: survey.toml") for line in lines)


def test_check_knows_the_steps(site: Path) -> None:
    """A recipe that cannot run is found without running it."""
    text = (site / "survey.toml").read_text()
    (site / "survey.toml").write_text(text + '\nsteps = ["dewow", "envelop"]\n')
    done = run("check", site)
    assert done.exit_code == 3
    assert "did you mean 'envelope'?" in done.stderr


def test_check_asks_for_the_control_points_a_crs_needs(site: Path) -> None:
    """A map frame without points to tie it to would stop the map at night; the evening says so."""
    text = (site / "survey.toml").read_text()
    (site / "survey.toml").write_text(text.replace("[survey]", '[survey]\ncrs = "EPSG:25832"', 1))
    done = run("check", site)
    assert done.exit_code == 3
    assert "add control.csv" in done.stderr


def test_check_reads_every_line_and_names_what_would_be_set_aside(site: Path) -> None:
    """A missing file and a damaged one: code 1, and the rest is counted."""
    (site / "lines" / "L1.sgy").unlink()
    (site / "lines" / "L3.sgy").write_bytes(b"damaged")
    done = run("check", site)
    assert done.exit_code == 1
    assert "2 lines would be set aside" in done.stderr
    assert "L1.sgy is not there" in done.stderr
    assert "line A/3 is set aside" in done.stderr


def test_check_writes_nothing(site: Path) -> None:
    """Not even a work folder."""
    before = {p: p.stat().st_mtime_ns for p in site.rglob("*")}
    run("check", site)
    assert {p: p.stat().st_mtime_ns for p in site.rglob("*")} == before


def test_check_counts_gaps_and_states_the_resolution(site: Path) -> None:
    """Lines at 0, 0.5, 1.0, 2.0 m: one gap at 1.5 m.

    In depth a quarter wavelength, v / 4 f: at 400 MHz and 0.06 to 0.12 m/ns 3.75 to 7.5 cm (closed form).
    """
    write_lines(site / "lines", 5)
    text = (site / "lines.csv").read_text()
    (site / "lines.csv").write_text(text + "A,5,lines/L5.sgy,0,2.0,0.4,2.0\n")
    done = run("check", site)
    assert "missing     at y = 1.5 m" in done.stdout
    assert "closer than 4 to 8 cm run together" in done.stdout
    assert "nearer than 1 m run together" in done.stdout


def test_look_guesses_the_unit_aloud(stick: Path, tmp_path: Path, written: list[str]) -> None:
    """250 over 128 samples is a window of 32 ns in ps alone; terminal, facts and picture call it guessed."""
    done = run("look", stick / "L1.sgy", "--picture", tmp_path / "a.png")
    assert done.exit_code == 0, done.stderr
    assert "unit guessed: ps;" in done.stderr
    assert "0.25 ns (unit guessed: ps)" in done.stdout
    assert "unit guessed: ps" in " ".join(" ".join(written).split())


def test_look_refuses_a_file_whose_interval_nobody_knows(tmp_path: Path) -> None:
    """An interval field of 0 leaves nothing to guess from; the cure is an option of this command."""
    write_empty_interval(tmp_path / "a.sgy")
    done = run("look", tmp_path / "a.sgy", "--picture", tmp_path / "a.png")
    assert done.exit_code == 3
    assert "--interval-ns" in done.stderr
    assert not (tmp_path / "a.png").exists()


@pytest.mark.parametrize("up", ["", "lines", "lines/day1"])
def test_look_takes_unit_and_frequency_from_the_survey_around(stick: Path, tmp_path: Path, up: str) -> None:
    """survey.toml beside the file, one and two folders up; three up is another house."""
    site = tmp_path / "site"
    (site / up / "deep" / "er").mkdir(parents=True)
    (site / up / "L1.sgy").write_bytes((stick / "L1.sgy").read_bytes())
    (site / "lines.csv").write_text("grid,line,file\nunfinished\n")
    (site / "survey.toml").write_text(
        '[survey]\ntitle = "T"\ncode = "T"\n[[radar]]\ncentre_frequency_mhz = 400\nantenna_separation_m = 0.16\n'
        'interval_unit = "ps"\n[[grid]]\nname = "A"\n'
    )
    done = run("look", site / up / "L1.sgy", "--picture", tmp_path / "a.png")
    assert done.exit_code == 0, done.stderr
    assert "unit stated by survey.toml: ps" in done.stdout
    assert "radar 400" in done.stdout
    assert "guessed" not in done.stderr
    if up == "lines/day1":
        (site / up / "deep" / "L1.sgy").write_bytes((stick / "L1.sgy").read_bytes())
        done = run("look", site / up / "deep" / "L1.sgy", "--picture", tmp_path / "a.png")
        assert "unit guessed: ps" in done.stdout


def test_look_uses_the_radar_the_register_names(site: Path, tmp_path: Path) -> None:
    """Of two radars the row's own counts; a file no row names is not given either."""
    text = (site / "survey.toml").read_text().replace("[[radar]]", '[[radar]]\nname = "deep"', 1)
    other = (
        '[[radar]]\nname = "fine"\ncentre_frequency_mhz = 500\nantenna_separation_m = 0.1\nsample_interval_ns = 0.2\n'
    )
    text = text.replace('name = "A"', 'name = "A"\nradar = "fine"', 1).replace("[[grid]]", other + "\n[[grid]]", 1)
    (site / "survey.toml").write_text(text)
    done = run("look", site / "lines" / "L2.sgy", "--picture", tmp_path / "a.png")
    assert "0.2 ns (stated by survey.toml)" in done.stdout, done.stderr
    assert "radar fine" in done.stdout
    write_lines(site / "lines", 4)
    done = run("look", site / "lines" / "L4.sgy", "--picture", tmp_path / "a.png")
    assert "does not say which of its radars" in done.stderr
    assert "unit guessed: ps" in done.stdout


def test_look_goes_on_without_a_survey_that_cannot_be_read(site: Path, tmp_path: Path) -> None:
    """A survey.toml with a mistake, or a link that leaves the folder, is named and not used."""
    (site / "survey.toml").write_text("[survey\n")
    done = run("look", site / "lines" / "L1.sgy", "--picture", tmp_path / "a.png")
    assert done.exit_code == 0
    assert "cannot be used" in done.stderr
    assert "unit guessed: ps" in done.stdout
    (site / "survey.toml").rename(tmp_path / "elsewhere.toml")
    (site / "survey.toml").symlink_to(tmp_path / "elsewhere.toml")
    done = run("look", site / "lines" / "L1.sgy", "--picture", tmp_path / "a.png")
    assert "leaves the survey folder" in done.stderr


@pytest.mark.parametrize(
    ("given", "says"),
    [(["--unit", "ps"], "unit stated by --unit: ps"), (["--interval-ns", "0.25"], "stated by --interval-ns")],
)
def test_look_names_who_stated_the_interval(stick: Path, tmp_path: Path, given: list[str], says: str) -> None:
    """A person's option is not the survey."""
    done = run("look", stick / "L1.sgy", "--picture", tmp_path / "a.png", *given)
    assert says in done.stdout
    assert "survey" not in done.stdout


@pytest.mark.parametrize("given", [["--unit", "ps"], ["--interval-ns", "0.25"]])
def test_look_draws_the_line_and_prints_its_facts(stick: Path, tmp_path: Path, given: list[str]) -> None:
    """Facts on standard output, among them the text header; a picture that opens."""
    done = run("look", stick / "L1.sgy", "--picture", tmp_path / "a.png", *given)
    assert done.exit_code == 0, done.stderr
    facts = {line.split("  ")[0]: line for line in done.stdout.splitlines()}
    assert facts["traces"].endswith(" 21")
    assert facts["window"].endswith(" 32 ns")
    assert "A TEST LINE" in done.stdout
    with Image.open(tmp_path / "a.png") as picture:
        assert min(picture.size) > 300


def test_look_does_not_draw_over_the_line_file(stick: Path) -> None:
    """Raw data never change, whatever is typed."""
    before = (stick / "L1.sgy").read_bytes()
    done = run("look", stick / "L1.sgy", "--unit", "ps", "--picture", stick / "L1.sgy")
    assert done.exit_code == 2
    assert (stick / "L1.sgy").read_bytes() == before


def test_look_does_not_make_a_folder_for_its_picture(stick: Path, tmp_path: Path) -> None:
    """A mistyped folder is named as one that does not exist, before the line is read."""
    done = run("look", stick / "L1.sgy", "--picture", tmp_path / "nodir" / "x.png")
    assert done.exit_code == 2
    assert f"the folder {tmp_path / 'nodir'} does not exist" in " ".join(done.stderr.split())
    assert not (tmp_path / "nodir").exists()


def test_look_refuses_two_ways_to_say_one_thing(stick: Path) -> None:
    """Unit and interval exclude each other."""
    assert run("look", stick / "L1.sgy", "--unit", "ps", "--interval-ns", "1").exit_code == 2


def test_recipe_prints_toml_on_standard_output_only(site: Path) -> None:
    """What is printed is TOML with the six steps in their order; what is said beside it goes elsewhere."""
    done = run("recipe", site)
    assert done.exit_code == 0, done.stderr
    recipe = tomllib.loads(done.stdout)["recipe"]
    assert recipe["steps"] == ["dewow", "gain", "bandpass", "background", "migrate", "envelope"]
    assert recipe["migrate"]["velocity_m_per_ns"] > 0
    assert "next: " in done.stderr


def test_recipe_of_unlike_sets_prints_one_and_the_others_as_comments(
    site: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Two sets with two settings: still TOML, and both are to be read."""
    sets = tuple(
        SetOf(name, (StepSpec(name="dewow", version=1, params={"window_ns": ns}),))
        for name, ns in (("A/x", 4.0), ("B/x", 5.0))
    )
    monkeypatch.setattr("planum.pipeline.outlook.plan_site", lambda *_, **__: PlanOf(sets))
    done = run("recipe", site)
    assert tomllib.loads(done.stdout)["recipe"]["dewow"] == {"window_ns": 4.0}
    assert "# window_ns = 5" in done.stdout
    assert "set B/x" in done.stdout


def test_recipe_passes_the_librarys_refusal_on(site: Path) -> None:
    """A recipe that cannot run is the survey's matter."""
    text = (site / "survey.toml").read_text()
    (site / "survey.toml").write_text(text + '\nsteps = ["dewow"]\n')
    done = run("recipe", site)
    assert done.exit_code == 3
    assert "the recipe ends with voltage" in done.stderr


def test_view_without_a_run_names_the_command_that_makes_one(site: Path) -> None:
    """A command whose input is missing names the command that makes it."""
    done = run("view", site)
    assert done.exit_code == 3
    assert "planum map" in done.stderr


@pytest.fixture
def opened(monkeypatch: pytest.MonkeyPatch) -> dict[str, object]:
    """Return what reaches the window, which does not open."""
    seen: dict[str, object] = {}

    def load(out: Path) -> tuple[xr.Dataset, tuple[object, ...]]:
        seen["out"] = out
        return xr.Dataset({"amplitude": ("depth", [1.0])}, coords={"depth": [0.1]}), ()

    monkeypatch.setattr("planum.viewer.load.load_run", load)
    monkeypatch.setattr("planum.viewer.load.statements_of", lambda _: ())
    monkeypatch.setattr("planum.viewer.window.open_window", lambda *_, **named: seen.update(named))
    return seen


def test_view_opens_the_window_on_the_named_run(tmp_path: Path, opened: dict[str, object]) -> None:
    """Level and depth are passed on; the run is the one of that name."""
    done = run("view", tmp_path, "--name", "deep", "--level", "3.5", "--depth", "0.6")
    assert done.exit_code == 0, done.stderr
    assert opened["out"] == tmp_path / "out-deep"
    assert (opened["level"], opened["slice_depth"]) == (3.5, 0.6)


def test_view_of_a_number_out_of_range_is_wrong_usage(
    tmp_path: Path, opened: dict[str, object], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The library's ValueError becomes a usage error."""

    def refuse(*_: object, **__: object) -> None:
        raise ValueError("level 9 is above all amplitudes")

    monkeypatch.setattr("planum.viewer.window.open_window", refuse)
    done = run("view", tmp_path, "--level", "9")
    assert done.exit_code == 2
    assert "level 9 is above" in done.stderr


@pytest.fixture
def drawn(ring: xr.Dataset, monkeypatch: pytest.MonkeyPatch) -> list[object]:
    """Return the scenes that reach the drawing, which does not happen: a ring wall at 0.05 to 1.45 m."""
    scenes: list[object] = []
    monkeypatch.setattr("planum.viewer.load.load_run", lambda _: (ring, ()))
    monkeypatch.setattr("planum.scene.probe.rendering_problem", lambda: None)
    monkeypatch.setattr("planum.scene.picture.render", lambda scene, _: scenes.append(scene))
    return scenes


def test_view_refuses_a_depth_outside_the_slices(tmp_path: Path, drawn: list[object]) -> None:
    """Nothing is drawn, and the range is named."""
    done = run("view", tmp_path, "--picture", tmp_path / "a.png", "--depth", "99")
    assert done.exit_code == 2
    assert "no slice at 99 m; the slices reach from 0.05 to 1.45 m" in done.stderr
    assert drawn == []


@pytest.mark.parametrize("level", ["99", "-5"])
def test_view_says_when_no_isosurface_is_drawn(tmp_path: Path, drawn: list[object], level: str) -> None:
    """A level nothing reaches is no mistake; the slice is drawn, and it is said."""
    done = run("view", tmp_path, "--picture", tmp_path / "a.png", "--level", level)
    assert done.exit_code == 0, done.stderr
    assert "no isosurface is drawn" in done.stderr
    assert len(drawn) == 1
    done = run("view", tmp_path, "--picture", tmp_path / "a.png", "--level", "0.5")
    assert "no isosurface" not in done.stderr


def test_view_says_in_front_of_the_window_when_no_isosurface_is_drawn(
    tmp_path: Path, opened: dict[str, object]
) -> None:
    """The one amplitude there is 1."""
    assert (
        "no isosurface is drawn at 3.5: amplitudes reach from 1 to 1" in run("view", tmp_path, "--level", "3.5").stderr
    )
    assert "no isosurface" not in run("view", tmp_path, "--level", "1").stderr


def test_view_says_which_package_is_missing(
    tmp_path: Path, opened: dict[str, object], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Where the drawing library does not work, the machine is the matter: code 4, before anything is drawn."""
    monkeypatch.setattr(
        "planum.scene.probe.rendering_problem", lambda: Problem("libEGL is missing", do="install libegl1")
    )
    done = run("view", tmp_path, "--picture", tmp_path / "a.png")
    assert done.exit_code == 4
    assert "install libegl1" in done.stderr


def test_about_prints_a_statement_as_aligned_lines(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Long lists of single slices are told by their ends."""
    many = " | ".join(str(i) for i in range(40))
    monkeypatch.setattr("planum.outputs.about.statement_in", lambda _: {"top_m": many, "surface": "as walked"})
    (tmp_path / "a.nc").write_text("")
    done = run("about", tmp_path / "a.nc")
    assert done.stdout == "top m    0 ... 39 (40 slices)\nsurface  as walked\n"


def test_about_gives_every_kind_of_file_in_one_order(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """GeoTIFF tags come by the alphabet: bottom before top."""
    said = {"bottom_m": "0.5", "cautions": "c", "surface": "s", "top_m": "0.4", "zz_of_tomorrow": "z"}
    monkeypatch.setattr("planum.outputs.about.statement_in", lambda _: said)
    (tmp_path / "a.tif").write_text("")
    names = [line.split("  ")[0] for line in run("about", tmp_path / "a.tif").stdout.splitlines()]
    assert names == ["top m", "bottom m", "surface", "cautions", "zz of tomorrow"]


def test_about_keeps_long_values_beside_their_names() -> None:
    """On a terminal of 40 columns nothing runs back to the left edge, and no word is lost."""
    text = "no clearance to dig: " * 8
    rows = aligned(about._wrapped([("cautions", text), ("top m", "0.4")], 40)).splitlines()
    assert max(map(len, rows)) <= 40
    assert all(row.startswith((" " * 10, "cautions  ", "top m     ")) for row in rows)
    assert " ".join(row[10:] for row in rows[:-1]).split() == text.split()


def test_about_a_file_that_says_nothing(tmp_path: Path) -> None:
    """A picture of somebody else carries no statement."""
    Image.new("L", (8, 8)).save(tmp_path / "a.png")
    done = run("about", tmp_path / "a.png")
    assert done.exit_code == 3
    assert "carries no statement" in done.stderr


@pytest.fixture
def example(tmp_path: Path) -> Path:
    """Return a folder that stands for the package's or the checkout's, with an example survey in it."""
    root = tmp_path / "grids"
    write_lines(root / "marrowby" / "lines")
    for name in ("survey.toml", "lines.csv", "README.md", "make.py", "out/slices.nc", "work/x"):
        (root / "marrowby" / name).parent.mkdir(exist_ok=True)
        (root / "marrowby" / name).write_text(name)
    return root


def test_the_demo_is_found_in_the_package_first_then_in_the_checkout(example: Path, tmp_path: Path) -> None:
    """Of two places the first that has it counts; an installation without it says so."""
    package = tmp_path / "package" / "_grids"
    assert demo.find_demo([package, example]) == example / "marrowby"
    (package / "marrowby").mkdir(parents=True)
    (package / "marrowby" / "survey.toml").write_text("")
    assert demo.find_demo([package, example]) == package / "marrowby"
    with pytest.raises(MachineError, match="not part of this installation"):
        demo.find_demo([tmp_path])


def test_the_demo_of_this_checkout_is_found() -> None:
    """Without being told where to look."""
    assert (demo.find_demo() / "survey.toml").is_file()


def test_the_demo_is_copied_mapped_and_on_a_second_call_left_as_it_is(
    example: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Only what belongs to a survey is copied; an edited survey.toml is kept."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(demo, "find_demo", lambda: example / "marrowby")
    calls: list[Path] = []

    def fake(site: Path, **_: object) -> RunResult:
        calls.append(site)
        return RunResult(site / "out", (), (), changed=len(calls) == 1)

    monkeypatch.setattr("planum.pipeline.run.map_site", fake)
    first = run("demo")
    assert first.exit_code == 0, first.stderr
    copied = {p.relative_to("marrowby-demo").as_posix() for p in Path("marrowby-demo").rglob("*")}
    assert copied == {"survey.toml", "lines.csv", "README.md", "lines", *(f"lines/L{i}.sgy" for i in (1, 2, 3))}
    for said in ("report.html", "slices.nc", "planum view marrowby-demo", "out/slices"):
        assert said in first.stderr
    Path("marrowby-demo/survey.toml").write_text("edited")
    second = run("demo")
    assert second.exit_code == 0
    assert "already" in second.stderr
    assert "nothing has changed" in second.stderr
    assert Path("marrowby-demo/survey.toml").read_text() == "edited"
    assert calls == [Path("marrowby-demo")] * 2


def test_the_demo_does_not_touch_another_folder(example: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A folder with something else in it, even a survey, is not taken for the example."""
    monkeypatch.setattr(demo, "find_demo", lambda: example / "marrowby")
    monkeypatch.setattr("planum.pipeline.run.map_site", lambda *_, **__: pytest.fail("was mapped"))
    mine = tmp_path / "mine"
    write_lines(mine / "lines", 2)
    (mine / "survey.toml").write_text("mine")
    done = run("demo", mine)
    assert done.exit_code == 3
    assert "holds something other" in done.stderr
    assert (mine / "survey.toml").read_text() == "mine"
