"""`planum demo`: the example survey, copied and mapped."""

from __future__ import annotations

import filecmp
import shutil
from collections.abc import Sequence
from pathlib import Path

import click

import planum
from planum.errors import MachineError, Problem, SurveyError
from planum_cli import options
from planum_cli.running import quoted, tell_run
from planum_cli.talk import Talk

__all__ = ["command", "find_demo"]

NAME = "marrowby"
HERE = Path("marrowby-demo")


def find_demo(roots: Sequence[Path] | None = None) -> Path:
    """Return the folder of the example survey: inside the installed package, or in the checkout beside it.

    Raises
    ------
    MachineError
        When neither has it.
    """
    package = Path(planum.__file__).resolve().parent
    for root in (package / "_grids", package.parents[1] / "grids") if roots is None else roots:
        if (root / NAME / "survey.toml").is_file():
            return root / NAME
    raise MachineError(
        Problem(
            "the example survey is not part of this installation", do="install planum again from a complete package"
        )
    )


@click.command(
    "demo",
    cls=options.PlainCommand,
    examples=(
        "planum demo                             in ./marrowby-demo",
        "planum demo /tmp/try                    in a folder of your choice",
    ),
)
@click.argument("folder", metavar="[DIR]", default=HERE, type=click.Path(file_okay=False, path_type=Path))
@options.manner
@click.pass_obj
def command(talk: Talk, folder: Path) -> int:
    """Copy the example survey to DIR and make its slices.

    The survey is a made one, so the answer is known: its README tells what is buried where. Running it again finds
    everything done.
    """
    from planum.pipeline.run import map_site

    source = find_demo()
    if place(source, folder):
        talk.say(f"the example survey is in {quoted(folder)}: survey.toml and lines.csv are worth a look")
    else:
        talk.say(f"the example survey is already in {quoted(folder)}; going on from there")
    talk.run = folder / "out"
    with talk.progress() as progress:
        result = map_site(folder, progress=progress)
    code = tell_run(talk, result, site=folder)
    talk.say(
        f"then your own lines: planum new MYSITE --lines FOLDER ({quoted(folder / 'README.md')} tells what is buried)"
    )
    return code


def place(source: Path, folder: Path) -> bool:
    """Copy the survey where it is not yet; False when it is there already.

    Raises
    ------
    SurveyError
        When the folder holds something else.
    """
    files = [
        p.relative_to(source) for p in sorted(source.rglob("*")) if p.is_file() and not _made(p.relative_to(source))
    ]
    if folder.exists() and any(folder.iterdir()):
        lines = [f for f in files if f.parts[0] == "lines"]
        if all((folder / f).is_file() for f in files) and all(
            filecmp.cmp(source / f, folder / f, shallow=True) or filecmp.cmp(source / f, folder / f, shallow=False)
            for f in lines
        ):
            return False
        raise SurveyError(
            Problem(
                "holds something other than the example survey",
                do="name a new folder: planum demo DIR",
                file=str(folder),
            )
        )
    aside = folder.parent / f".{folder.name}-part"
    shutil.rmtree(aside, ignore_errors=True)
    try:
        for file in files:
            (aside / file).parent.mkdir(parents=True, exist_ok=True)
            shutil.copy2(source / file, aside / file)
        if folder.exists():
            folder.rmdir()
        aside.rename(folder)
    except BaseException:
        shutil.rmtree(aside, ignore_errors=True)
        raise
    return True


def _made(file: Path) -> bool:
    """Whether a file of the checkout is no part of the survey: results, caches, how it was made."""
    top = file.parts[0]
    return top in {"out", "work", "__pycache__"} or top.startswith(("out-", ".")) or file.suffix in {".py", ".pyc"}
