"""Draft a survey folder from a folder of line files: what the files say, what a person answers, the rest guessed.

What is guessed is said to be guessed, in the draft itself. The line files are copied, never moved or changed.
"""

from __future__ import annotations

import math
import os
import re
import shutil
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import reduce
from pathlib import Path
from typing import Literal

from planum.errors import MachineError, Problem, SurveyError, printable
from planum.pipeline.found import LOWERED, Found, FoundLine, look_through
from planum.survey.config import name_or_complaint
from planum.survey.register import RegisterRow
from planum.survey.safety import is_device
from planum.survey.template import SurveyDraft, lines_csv, survey_toml

__all__ = ["Answers", "Draft", "draft", "free_for", "guesses", "write_draft"]

Progress = Callable[[str, int, int], None]
Walk = Literal["zigzag", "one-way"]
Point = tuple[float, float]

GRID = "A"
TRACE_SPACING_M = 0.02
"""Assumed between traces when nobody says how long the lines are (common practice for hand-drawn antennas)."""
LINE_SPACING_M = 0.5
"""Assumed between lines when nobody says (the coarse spacing of common practice)."""
FAR_LINES_M = 2.0
"""Lines farther apart are hardly meant to be mapped together (common practice is 0.25 to 1 m)."""
CLOSE_TRACES_M = 0.005
"""Traces closer than this are hardly a walked line's (common practice is 1 to 5 cm)."""
ROUNDED_M = 0.01
"""Drafted places are rounded to the millimetre: coordinates this near to them are the same ones."""
SHORT = 0.9
"""Share of the usual trace count below which a line is drafted as a shorter one."""
_SPREAD = 3
"""Numbers in file names are taken for line numbers when they leave at most this many times as many places as lines."""


@dataclass(frozen=True)
class Answers:
    """What a person says of the survey; None is guessed. MHz and m."""

    title: str | None = None
    centre_frequency_mhz: float | None = None
    antenna_separation_m: float | None = None
    line_spacing_m: float | None = None
    line_length_m: float | None = None
    walk: Walk | None = None


@dataclass(frozen=True)
class Draft:
    """A survey folder that is not written yet: two texts and the files that go beside them.

    ``files`` pairs each line file with its path in the folder; ``guessed`` and ``notes`` are sentences for people.
    """

    site: Path
    toml: str
    register: str
    files: tuple[tuple[Path, str], ...]
    rows: tuple[RegisterRow, ...]
    guessed: tuple[str, ...] = ()
    notes: tuple[Problem, ...] = ()
    copies: bool = field(default=True)


def guesses(found: Found, site: Path) -> Answers:
    """Return an answer to every question, as good as the files allow."""
    frequency = found.nominal_mhz
    spacing, length = found.spacing_m(), found.length_m()
    return Answers(
        title=_title(site),
        centre_frequency_mhz=frequency,
        # antennas are built to scale: 0.16 m at 400 MHz is a usual shielded pair
        antenna_separation_m=round(min(0.16 * 400.0 / frequency, 10.0), 2),
        line_spacing_m=LINE_SPACING_M if spacing is None else spacing,
        line_length_m=round((found.n_traces - 1) * TRACE_SPACING_M, 1) or 1.0 if length is None else length,
        walk="zigzag",
    )


def draft(lines: Path | Found, answers: Answers = Answers(), *, site: Path) -> Draft:
    """Return a draft of a survey.

    Parameters
    ----------
    lines : Path or Found
        A folder of line files, or what was found in it.
    answers : Answers
        What a person says; the rest is guessed and named in ``Draft.guessed``.
    site : Path
        The survey folder to be; line files outside it will be copied into its folder ``lines``.

    Raises
    ------
    SurveyError
        When no line can be read, or the interval's unit is not the same in all.
    """
    found = look_through(lines) if isinstance(lines, Path) else lines
    guessed = guesses(found, site)
    given = {k: v for k, v in vars(answers).items() if v is not None}
    full = Answers(**{**vars(guessed), **given})
    files = _targets(found, site)
    rows, notes = _rows(found, full, files)
    title = printable(full.title or "", longest=200).strip() or _title(site)
    unit = found.units[0] if found.units else None
    text = survey_toml(
        SurveyDraft(
            title=title,
            code=_code(title),
            centre_frequency_mhz=full.centre_frequency_mhz,
            antenna_separation_m=full.antenna_separation_m,
            sample_interval_ns=found.given_interval_ns,
            interval_unit=unit,  # type: ignore[arg-type]
        )
    )
    said = tuple(_guessed(found, full, given))
    head = "".join(f"#   {line}\n" for line in said)
    return Draft(
        site=site,
        toml=(f"# Drafted from the line files. Guessed, so check before you trust a map:\n{head}\n" if said else "")
        + text,
        register=lines_csv(rows),
        files=tuple(files.items()),
        rows=tuple(rows),
        guessed=said,
        notes=(*found.problems, *notes, *_kept(found), *_unlikely(found, full, given)),
        copies=not _inside(found, site),
    )


def free_for(site: Path) -> None:
    """Raise SurveyError when a draft would overwrite something in ``site``."""
    problems = [
        Problem("is already there, and is not overwritten", do="name another folder, or move it away", file=str(path))
        for path in (site / "survey.toml", site / "lines.csv")
        if os.path.lexists(path)
    ]
    if os.path.lexists(site) and not site.is_dir():
        problems.append(Problem("is not a folder", do="name another folder", file=str(site)))
    if problems:
        raise SurveyError(problems)


def write_draft(made: Draft, *, progress: Progress | None = None) -> None:
    """Write a draft: copies of the line files, ``lines.csv``, and last ``survey.toml``.

    Raises
    ------
    SurveyError
        When something of that name is already there; then nothing is written.
    MachineError
        When a copy does not have its original's size.
    OSError
        When the system cannot write.
    """
    site = made.site
    free_for(site)
    if made.copies:
        if os.path.lexists(site / "lines"):
            do = "name another folder, or keep the line files inside this one and name them with --lines"
            raise SurveyError(Problem("is already there, and is not overwritten", do=do, file=str(site / "lines")))
        site.mkdir(parents=True, exist_ok=True)
        _copy(made, progress)
    for name, text in (("lines.csv", made.register), ("survey.toml", made.toml)):
        with (site / name).open("x", encoding="utf-8", newline="\n") as file:
            file.write(text)


def _copy(made: Draft, progress: Progress | None) -> None:
    """Copy the line files into a folder aside, then give it its name."""
    aside = made.site / ".lines-part"
    shutil.rmtree(aside, ignore_errors=True)
    aside.mkdir()
    try:
        for done, (source, target) in enumerate(made.files, 1):
            copy = aside / Path(target).name
            shutil.copy2(source, copy)
            if copy.stat().st_size != source.stat().st_size:
                raise MachineError(Problem("the copy is not as long as the file", do="copy again", file=str(source)))
            if progress:
                progress("copying lines", done, len(made.files))
        aside.rename(made.site / "lines")
    except BaseException:
        shutil.rmtree(aside, ignore_errors=True)
        raise


def _inside(found: Found, site: Path) -> bool:
    top = Path(os.path.realpath(site))
    return all(Path(os.path.realpath(line.file)).is_relative_to(top) for line in found.lines)


def _targets(found: Found, site: Path) -> dict[Path, str]:
    """Path of each file in the survey folder, as the register names it."""
    files = dict.fromkeys(line.file for line in found.lines)
    if _inside(found, site):
        top = os.path.realpath(site)
        return {f: Path(os.path.relpath(os.path.realpath(f), top)).as_posix() for f in files}
    return {f: f"lines/{f.name}" for f in files}


def _rows(found: Found, full: Answers, files: dict[Path, str]) -> tuple[list[RegisterRow], list[Problem]]:
    names, steps, notes = _numbers(found)
    if found.placed is not None:
        ends: Sequence[tuple[Point, Point, str]] = [(a, b, "") for a, b in found.placed]
    else:
        ends = [_end(line, step, found.n_traces, full) for line, step in zip(found.lines, steps, strict=True)]
    rows = [
        RegisterRow(GRID, name, files[line.file], start, end, part=line.part, note=note)
        for line, name, (start, end, note) in zip(found.lines, names, ends, strict=True)
    ]
    short = [row.line for row in rows if row.note]
    if short:
        came = f"lines with fewer traces than the others are drafted shorter: {', '.join(short[:20])}"
        notes.append(Problem(came, do="check their ends in lines.csv", severity="note"))
    return rows, notes


def _end(line: FoundLine, step: int, usual: int, full: Answers) -> tuple[Point, Point, str]:
    """Start and end of a line along x, ``step`` spacings from the first, and a note when it is a short one."""
    length, spacing = full.line_length_m or 1.0, full.line_spacing_m or LINE_SPACING_M
    across = round(step * spacing, 6)
    back = full.walk == "zigzag" and step % 2 == 1
    begin, note = (length if back else 0.0), ""
    if line.n_traces < SHORT * usual:
        length = round(length * max(line.n_traces - 1, 1) / max(usual - 1, 1), 2) or 0.01
        note = f"{line.n_traces} traces: check where it ends"
    return (begin, across), (round(begin + (-length if back else length), 6), across), note


def _numbers(found: Found) -> tuple[list[str], list[int], list[Problem]]:
    """Line names, steps from the first line in spacings, and notes.

    Where file names differ in one number alone and it may be the line's, a number that is missing leaves a gap.
    """
    stems = [line.file.stem for line in found.lines]
    count = len(stems)
    last = [re.fullmatch(r"(.*?)([0-9]{1,6})(\D*)", stem) for stem in stems]
    frames = {(fit[1], fit[3]) for fit in last if fit}
    if not found.several_per_file and all(last) and len(frames) == 1:
        values = [int(fit[2]) for fit in last if fit]
        unit = reduce(math.gcd, (v - values[0] for v in values[1:]), 0) or 1
        steps = [(v - values[0]) // unit for v in values]
        if len(set(steps)) == count and min(steps) >= 0 and max(steps) < _SPREAD * count:
            notes = []
            if gaps := [str(values[0] + unit * s) for s in range(max(steps)) if s not in set(steps)]:
                came = f"no file of the number(s) {', '.join(gaps[:20])}: a gap is left there"
                notes.append(Problem(came, do="if no line is missing, mend the places in lines.csv", severity="note"))
            return [str(v) for v in values], steps, notes
    usable = len(set(map(str.casefold, stems))) == count and not any(name_or_complaint(s, longest=40) for s in stems)
    names = stems if usable else [str(i + 1) for i in range(count)]
    came = "the file names give no line numbers: lines are taken to follow each other in the order of their names"
    note = Problem(came, do="check the places in lines.csv", severity="note")
    return names, list(range(count)), [note] if count > 1 and found.placed is None else []


def _guessed(found: Found, full: Answers, given: dict[str, object]) -> list[str]:
    """Sentences on what nobody said."""
    out = []
    if "centre_frequency_mhz" not in given:
        out.append(f"centre_frequency_mhz {full.centre_frequency_mhz:g}: {_why_frequency(found)}")
    if "antenna_separation_m" not in given:
        out.append(f"antenna_separation_m {full.antenna_separation_m:g}: usual at this frequency")
    if found.units:
        rest = f"; {' or '.join(found.units[1:])} would also be believable" if found.units[1:] else ""
        out.append(
            f"interval_unit {found.units[0]}: it gives {found.interval_ns:g} ns per sample and a window of"
            f" {found.window_ns:.4g} ns{rest}"
        )
    if found.placed is not None:
        out.append("lines.csv: starts and ends are from the coordinates in the files, straightened")
        return out
    if "line_spacing_m" not in given and len(found.lines) > 1:
        out.append(f"lines.csv: {full.line_spacing_m:g} m between lines")
    if "line_length_m" not in given:
        out.append(f"lines.csv: lines {full.line_length_m:g} m long, as if traces were {TRACE_SPACING_M:g} m apart")
    if "walk" not in given and len(found.lines) > 1:
        out.append("lines.csv: walked zigzag, every second line back")
    return out


def _why_frequency(found: Found) -> str:
    """Say what was measured, and why another number is guessed from it."""
    measured, nominal = found.strongest_mhz, found.nominal_mhz
    text = f"measured is that the files are strongest near {measured:.0f} MHz"
    if nominal < LOWERED * measured:
        return f"{text}; guessed is the antenna, whose usual frequencies above have fewer than 4 samples a period here"
    if measured < nominal:
        return f"{text}; guessed is the antenna, the nearest usual one whose frequency the ground has lowered"
    return f"{text}; guessed is the antenna, the nearest usual one"


def _kept(found: Found) -> list[Problem]:
    """Say what becomes of coordinates in the files that the drafted local places do not show."""
    first = found.lines[0].start
    if found.placed is None or first is None or math.dist(first, found.placed[0][0]) <= ROUNDED_M:
        return []
    came = f"the files' coordinates begin at E {first[0]:.2f} N {first[1]:.2f}; lines.csv holds local places instead"
    do = 'they are kept when the survey says positions = "header" and names a crs: both lines wait in survey.toml'
    return [Problem(came, do=do, severity="note")]


def _unlikely(found: Found, full: Answers, given: dict[str, object]) -> list[Problem]:
    """Warn of lengths and spacings that a person gave, or the coordinates, and that are hardly meant so."""
    length, spacing = full.line_length_m or 0.0, full.line_spacing_m or 0.0
    several, placed = len(found.lines) > 1, found.placed is not None
    spaced, long = several and ("line_spacing_m" in given or placed), "line_length_m" in given or placed
    traces = length / max(found.n_traces - 1, 1)
    told = []
    if spaced and long and spacing > length:
        told.append(f"lines are {spacing:g} m apart and only {length:g} m long, as if spacing and length were swapped")
    if spaced and spacing > FAR_LINES_M:
        told.append(f"lines are {spacing:g} m apart, more than {FAR_LINES_M:g} m: between them nothing will be known")
    if long and traces < CLOSE_TRACES_M:
        told.append(f"{found.n_traces} traces on {length:g} m are {1e3 * traces:.2g} mm apart, closer than 5 mm")
    do = "correct lines.csv, or draft again with other numbers"
    return [Problem(came, do=do, severity="warning") for came in told]


def _title(site: Path) -> str:
    name = printable(Path(os.path.abspath(site)).name, longest=100)
    return re.sub(r"[_\s]+", " ", name).strip() or "Survey"


def _code(title: str) -> str:
    """Return a code from the title: initials of several words, else its first letters."""
    words = re.findall(r"[A-Za-z0-9]+", title)
    code = ("".join(w if w.isdigit() else w[0] for w in words) if len(words) > 1 else "".join(words))[:8].upper()
    return code if code and not is_device(code) else "SITE"
