"""The frame of the command: help, suggestions, exit codes, the voice."""

from __future__ import annotations

import errno
import os
import re
import subprocess
import sys
import warnings
from dataclasses import replace
from pathlib import Path

import click
import pytest
from click.testing import CliRunner, Result

from planum.constants import CAUTIONS
from planum.errors import (
    EvidenceError,
    FrameError,
    LineError,
    MachineError,
    PlanumError,
    PlanumWarning,
    Problem,
    RecipeError,
    SurveyError,
)
from planum.pipeline.run import RunResult
from planum_cli.commands import tidy as tidy_command
from planum_cli.main import COMMANDS, HEADINGS, cli
from planum_cli.talk import Progress, aligned, several

MAP = "planum.pipeline.run.map_site"


def run(*args: str, **named: object) -> Result:
    return CliRunner().invoke(cli, list(args), **named)  # type: ignore[arg-type]


@pytest.fixture
def raising(monkeypatch: pytest.MonkeyPatch, tmp_path: Path):
    """Return a function that runs `map` on a library call that raises."""

    def call(error: BaseException, *args: str) -> Result:
        def fake(*_: object, **__: object) -> None:
            raise error

        monkeypatch.setattr(MAP, fake)
        return run("map", str(tmp_path), *args)

    return call


def python(code: str, **named: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False, **named)  # type: ignore[call-overload,no-any-return]


def test_help_imports_click_and_the_standard_library_only() -> None:
    """Everything loaded by `planum --help` comes from click, planum's light modules or the standard library."""
    code = """
import sys
before = set(sys.modules)
from planum_cli.main import cli
try:
    cli.main(["--help"])
except SystemExit as stop:
    assert stop.code == 0, stop.code
loaded = {name.split(".")[0] for name in set(sys.modules) - before}
foreign = sorted(n for n in loaded if n not in sys.stdlib_module_names and n not in {"click", "planum", "planum_cli"})
print("FOREIGN", foreign)
print("HEAVY", sorted(n for n in sys.modules if n.split(".")[0] in {"numpy", "xarray", "pydantic", "scipy"}))
print("COMMANDS", sorted(n for n in sys.modules if n.startswith("planum_cli.commands.")))
"""
    done = python(code)
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines()[-3:] == ["FOREIGN []", "HEAVY []", "COMMANDS []"]


def test_help_lists_every_command_under_its_heading_and_ends_with_the_cautions() -> None:
    """The order is that of the headings; the cautions stand at the foot, whole."""
    text = run("--help").output
    flat = " ".join(text.split())
    places = [flat.index(title + ":") for title in HEADINGS.values()]
    assert places == sorted(places)
    for name, (_, _, line) in COMMANDS.items():
        assert f"{name} {line}" in flat
    assert flat.endswith(" ".join(" ".join(c.split()) for c in CAUTIONS))


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_explains_itself_with_an_example(name: str) -> None:
    """Each help has its usage, an example as it is typed, and the name in the table is the command's own."""
    done = run(name, "--help")
    assert done.exit_code == 0
    assert "Example" in done.output
    assert f"  planum {name}" in done.output.split("Example")[1]
    command = cli.get_command(click.Context(cli), name)
    assert command is not None
    assert command.name == name


@pytest.mark.parametrize(("typed", "meant"), [("mpa", "map"), ("tidi", "tidy"), ("viwe", "view"), ("chek", "check")])
def test_a_mistyped_command_gets_the_nearest_one(typed: str, meant: str) -> None:
    """It is named, and not run."""
    done = run(typed)
    assert done.exit_code == 2
    assert f"there is no command '{typed}'; did you mean '{meant}'?" in done.stderr


def test_an_unheard_of_command_gets_all_of_them() -> None:
    """Where none is near, the choice is shown."""
    done = run("xyzzy")
    assert done.exit_code == 2
    assert all(name in done.stderr for name in COMMANDS)


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (SurveyError, 3),
        (RecipeError, 3),
        (FrameError, 3),
        (EvidenceError, 3),
        (LineError, 3),
        (PlanumError, 3),
        (MachineError, 4),
    ],
)
def test_each_class_of_error_has_its_exit_code_and_one_line_per_problem(raising, error, code) -> None:
    """Problems come as sentences on standard error, all of them; never a traceback."""
    done = raising(error([Problem("first", do="mend it", file="a.toml", line="3"), Problem("second")]))
    assert done.exit_code == code
    assert done.stderr.splitlines() == ["error: a.toml, line 3: first; mend it", "error: second"]
    assert done.stdout == ""


@pytest.mark.parametrize(
    ("error", "says"),
    [
        (OSError(errno.ENOSPC, "No space left on device", "/x/y"), "/x: the disk of this folder is full"),
        (PermissionError(errno.EACCES, "Permission denied", "/x/y"), "no permission"),
        (FileNotFoundError(errno.ENOENT, "No such file or directory", "/y"), "/y: No such file"),
        (MemoryError(), "--workers 1"),
        (ZeroDivisionError("division by zero"), "something unforeseen happened (ZeroDivisionError: division by zero)"),
        (KeyError("a\nb"), "--debug"),
    ],
)
def test_the_machine_and_the_unforeseen_are_one_sentence_and_code_4(raising, error, says) -> None:
    """Each says what to do next; a traceback is not shown."""
    done = raising(error)
    assert done.exit_code == 4
    assert says in done.stderr
    assert len(done.stderr.splitlines()) == 1
    assert "Traceback" not in done.stderr


def test_a_full_disk_is_named_by_the_folder_that_was_written_to(raising, tmp_path) -> None:
    """A copy from the cache to another disk fills that disk (shutil names the source first)."""
    full = errno.ENOSPC, "No space left on device"
    building = tmp_path / "far" / ".out-0123456789abcdef" / "pictures" / "a.png"
    said = raising(OSError(*full, "/site/work/sections/k.png", None, str(building))).stderr
    assert said.startswith(f"error: {tmp_path / 'far' / 'out'}: the disk of this folder is full")
    assert "--out DIR" in said
    assert "tidy" not in said
    wrapped = MachineError(Problem("cannot write", file=str(building)))
    for cause in (OSError(*full, str(building)), OSError("Can't write data (No space left on device)")):
        wrapped.__cause__ = cause
        done = raising(wrapped)
        assert done.exit_code == 4
        assert done.stderr == said


def test_a_full_disk_under_the_work_folder_is_the_surveys_own(raising, tmp_path) -> None:
    """There --out would not help."""
    (tmp_path / "work").mkdir()
    (tmp_path / "work" / "CACHEDIR.TAG").touch()
    said = raising(OSError(errno.ENOSPC, "No space left", str(tmp_path / "work" / "rows" / "k.npy"))).stderr
    assert said.startswith(f"error: {tmp_path / 'work'}: the disk of this work folder is full")
    assert "--out" not in said


def test_an_error_of_the_survey_that_came_after_a_full_disk_stays_what_it_is(raising) -> None:
    """Only the machine's errors are looked behind."""
    error = SurveyError(Problem("no line"))
    error.__context__ = OSError(errno.ENOSPC, "No space left on device")
    assert raising(error).stderr == "error: no line\n"


@pytest.mark.parametrize("place", ["behind", "before", "environment"])
def test_debug_shows_the_traceback(raising, monkeypatch, tmp_path, place) -> None:
    """The option may stand before or behind the command, or in the environment; the code stays."""
    if place == "environment":
        monkeypatch.setenv("PLANUM_DEBUG", "1")
        done = raising(ZeroDivisionError("none"))
    elif place == "behind":
        done = raising(ZeroDivisionError("none"), "--debug")
    else:
        raising(ZeroDivisionError("none"))
        done = run("--debug", "map", str(tmp_path))
    assert done.exit_code == 4
    assert "Traceback (most recent call last)" in done.stderr
    assert "ZeroDivisionError: none" in done.stderr


@pytest.mark.parametrize(("args", "folder"), [((), "out"), (("--name", "deep"), "out-deep")])
def test_an_interrupt_is_130_and_says_what_became_of_the_run(raising, tmp_path, args, folder) -> None:
    """The reader who pressed the keys learns whether there is a former run; none is promised where there is none."""
    done = raising(KeyboardInterrupt(), *args)
    assert done.exit_code == 130
    assert done.stderr.strip() == "stopped; there is no run yet, and the next goes on from here"
    (tmp_path / folder).mkdir()
    (tmp_path / folder / "run.json").touch()
    assert raising(KeyboardInterrupt(), *args).stderr.strip() == "stopped; the former run is untouched"


def test_an_interrupt_of_a_command_that_makes_no_run_promises_nothing(tmp_path, monkeypatch) -> None:
    """Stopped is stopped."""

    def stop(_: object) -> int:
        raise KeyboardInterrupt

    monkeypatch.setattr("planum.pipeline.tidy.tidy", stop)
    assert run("tidy", str(tmp_path)).stderr.strip() == "stopped"


def test_a_folder_that_does_not_exist_is_named_without_our_temporary_file(raising) -> None:
    """What a library wanted to call its file is no help."""
    said = raising(FileNotFoundError(errno.ENOENT, "No such file or directory", "/nodir/.x.png-k3x.part")).stderr
    assert said == "error: /nodir: the folder does not exist; make it, or name another\n"


@pytest.mark.parametrize(
    "args",
    [
        ["map"],
        ["map", "nowhere"],
        ["map", ".", "--workers", "0"],
        ["map", ".", "--out", "x", "--name", "y"],
        ["map", ".", "--name", "../x"],
        ["look", "nowhere.sgy"],
        ["view", ".", "--picture", "x.gif"],
        ["--nonsense"],
    ],
)
def test_wrong_usage_is_2(args: list[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The command was typed wrongly: nothing has been tried."""
    monkeypatch.chdir(tmp_path)
    done = run(*args)
    assert done.exit_code == 2
    assert "Usage:" in done.stderr


def test_no_command_at_all_shows_the_help() -> None:
    """Somebody who types the name alone wants to know what it can do."""
    done = run()
    assert "First steps" in done.output


def test_a_run_may_not_take_the_place_of_a_persons_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """--out takes the place of a whole folder: one that holds something else is refused before the library is asked."""
    monkeypatch.setattr(MAP, lambda *_, **__: pytest.fail("was called"))
    (tmp_path / "photos").mkdir()
    (tmp_path / "photos" / "a.jpg").write_text("mine")
    done = run("map", str(tmp_path), "--out", str(tmp_path / "photos"))
    assert done.exit_code == 2
    assert "holds something that is no run" in done.stderr


@pytest.mark.parametrize(("aside", "code"), [((), 0), ((Problem("line 7 is set aside", severity="warning"),), 1)])
def test_a_run_says_where_it_is_and_what_is_next(monkeypatch, tmp_path, aside, code) -> None:
    """Results are on standard output, the rest beside it; lines set aside make the code 1."""
    result = RunResult(tmp_path / "out", aside, (), changed=True, summary={"lines": 3, "missing": []})
    monkeypatch.setattr(MAP, lambda *_, **__: result)
    done = run("map", str(tmp_path))
    assert done.exit_code == code
    rows = [["results", str(tmp_path / "out")], ["lines", "3"]] + [["set aside", "1: line 7"]] * bool(aside)
    assert [re.split(r"  +", line) for line in done.stdout.splitlines()] == rows
    assert "report.html" in done.stderr
    assert f"planum view {tmp_path}" in done.stderr
    assert ("1 line set aside" in done.stderr) == bool(aside)


def test_many_alike_problems_are_one_sentence_and_single_lines_come_last(monkeypatch, tmp_path) -> None:
    """25 lines with one complaint: a range and three files; then single ones; set-aside lines above the table."""
    alike = [
        Problem("20% clipped", do="lower bounds", file=f"A_{i}.sgy", line=str(i), severity="warning")
        for i in range(1, 26)
    ]
    single = Problem("4 dead traces", file="A_3.sgy", line="3", severity="warning")
    aside = [Problem("no samples", file=f"A_{i}.sgy", line=str(i)) for i in (30, 40)] + [
        Problem("line A/50 is set aside: A_50.sgy is not there", file="lines.csv", line="9", severity="warning")
    ]
    result = RunResult(tmp_path / "out", tuple(aside), (single, *alike), changed=True, summary={"lines": 3})
    monkeypatch.setattr(MAP, lambda *_, **__: result)
    done = run("map", str(tmp_path))
    assert done.stderr.splitlines()[:5] == [
        "warning: 25 lines (1 to 25; A_1.sgy, A_2.sgy, A_3.sgy and 22 more): 20% clipped; lower bounds",
        "warning: A_3.sgy, line 3: 4 dead traces",
        "warning: 2 lines (30, 40; A_30.sgy, A_40.sgy): set aside: no samples",
        "warning: lines.csv, line 9: line A/50 is set aside: A_50.sgy is not there",
        "3 lines set aside; the report names each and why",
    ]
    assert done.stdout.splitlines()[2:] == [
        "set aside  3: lines 30, 40 (no samples)",
        "              line A/50 (A_50.sgy is not there)",
    ]


@pytest.mark.parametrize(
    ("names", "text"),
    [
        (["3", "1", "2"], "1 to 3"),
        (["1", "2"], "1, 2"),
        (["1", "2", "4"], "1, 2, 4"),
        (["a", "b", "c", "d"], "a, b, c, d"),
        (["1", "3", "5", "7", "9"], "1, 3, 5 and 2 more"),
    ],
)
def test_names_are_a_range_or_the_first_three(names: list[str], text: str) -> None:
    """A range only where no number is missing from it."""
    assert several(names) == text


def test_mistakes_that_differ_in_more_than_their_place_stay_apart(raising) -> None:
    """Same words about two keys, or with another cure, are two sentences; a text file's lines are counted in it."""
    rows = [Problem("no number", file="lines.csv", line=str(i), key="start_x_m") for i in (2, 3, 4)]
    done = raising(SurveyError([*rows, replace(rows[0], key="end_x_m"), replace(rows[0], do="mend it")]))
    assert done.stderr.splitlines() == [
        "error: lines.csv, 3 lines (2 to 4), start_x_m: no number",
        "error: lines.csv, line 2, end_x_m: no number",
        "error: lines.csv, line 2, start_x_m: no number; mend it",
    ]


def test_the_librarys_warnings_are_sentences_and_come_once(monkeypatch, tmp_path) -> None:
    """Other packages' warnings are for developers and stay away without --debug."""

    def fake(*_: object, **__: object) -> RunResult:
        for _ in range(3):
            warnings.warn(PlanumWarning(Problem("time zero is uncertain", severity="warning")), stacklevel=1)
            warnings.warn("internal matters", DeprecationWarning, stacklevel=1)
        return RunResult(tmp_path, (), (), changed=True)

    monkeypatch.setattr(MAP, fake)
    done = run("map", str(tmp_path), "--quiet")
    assert done.stderr == "warning: time zero is uncertain\n"
    assert "internal matters" in run("--debug", "map", str(tmp_path)).stderr


def test_progress_off_a_terminal_is_a_few_plain_lines(capsys: pytest.CaptureFixture[str]) -> None:
    """A thousand steps that take no time give the start and the end of each stage."""
    show = Progress(live=False, quiet=False)
    for stage in ("reading", "migrating"):
        for i in range(1001):
            show(stage, i, 1000)
    told = [line.split(" (")[0] for line in capsys.readouterr().err.splitlines()]
    assert told == [
        "reading ...",
        "reading 100 %",
        "migrating ...",
        "migrating 100 %",
    ]


def test_slow_progress_speaks_at_every_quarter(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ten seconds a step: each quarter is told once."""
    clock = iter(range(0, 10_000, 10))
    monkeypatch.setattr("planum_cli.talk.time.monotonic", lambda: float(next(clock)))
    show = Progress(live=False, quiet=False)
    for i in range(9):
        show("reading", i, 8)
    told = [line.split(" (")[0] for line in capsys.readouterr().err.splitlines()]
    assert told == ["reading ...", "reading 25 %", "reading 50 %", "reading 75 %", "reading 100 %"]


def test_progress_on_a_terminal_is_one_line_redrawn(capsys: pytest.CaptureFixture[str]) -> None:
    """The bar goes back to the start of its line; only the end of a stage goes to the next."""
    show = Progress(live=True, quiet=False)
    for i in range(5):
        show("reading", i, 4)
    show.close()
    text = capsys.readouterr().err
    assert text.count("\n") == 1
    assert text.count("\r") >= 2
    assert "4/4" in text


def test_quiet_progress_says_nothing(capsys: pytest.CaptureFixture[str]) -> None:
    """--quiet is for scripts."""
    Progress(live=True, quiet=True)("reading", 1, 1)
    assert capsys.readouterr().err == ""


def test_aligned_text_loses_control_characters() -> None:
    """What comes from a file may not drive the terminal."""
    assert aligned([("a", "x\x1b[31my"), ("long", 1)]) == "a     x [31my\nlong  1"


def test_a_reader_who_has_seen_enough_is_no_error(tmp_path: Path) -> None:
    """`planum --help | head -1` ends quietly."""
    code = "import sys; sys.argv=['planum','--help']; from planum_cli.main import main; main()"
    reading, writing = os.pipe()
    os.close(reading)
    try:
        done = subprocess.run(
            [sys.executable, "-c", code], stdout=writing, stderr=subprocess.PIPE, text=True, check=False
        )
    finally:
        os.close(writing)
    assert done.returncode == 0
    assert done.stderr == ""


def test_the_installed_command_tells_its_version() -> None:
    """The version is the library's."""
    import planum

    done = python("from planum_cli.main import main; import sys; sys.argv = ['planum', '--version']; main()")
    assert done.stdout == f"planum {planum.__version__}\n"


def test_tidy_tells_what_it_freed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Bytes in a unit people read; a site without a work folder is no mistake."""
    assert "is no survey folder" in run("tidy", str(tmp_path)).stderr
    (tmp_path / "survey.toml").touch()
    assert "nothing to free" in run("tidy", str(tmp_path)).stdout
    monkeypatch.setattr("planum.pipeline.tidy.tidy", lambda _: 2_500_000)
    assert run("tidy", str(tmp_path)).stdout == "2.5 MB freed\n"
    assert tidy_command.command.name == "tidy"


def test_tidy_refuses_a_folder_that_is_not_ours(tmp_path: Path) -> None:
    """A person's folder called work stays, and the code says that the survey folder is the matter."""
    (tmp_path / "work").mkdir()
    (tmp_path / "work" / "thesis.txt").write_text("mine")
    done = run("tidy", str(tmp_path))
    assert done.exit_code == 3
    assert (tmp_path / "work" / "thesis.txt").is_file()
