"""Drafts of the hand-typed files: a ``survey.toml`` that teaches its own keys, and a ``lines.csv``.

What a draft does not know it leaves as a commented line to fill in, so that reading it names what is missing.
"""

from __future__ import annotations

import csv
import datetime as dt
import io
import json
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

from planum.survey.register import NEEDED, OPTIONAL, RegisterRow

__all__ = ["GridDraft", "SurveyDraft", "lines_csv", "survey_toml"]


@dataclass(frozen=True)
class GridDraft:
    """A grid to be written down: from a register, or in the short form when ``files`` is given. Lengths in m."""

    name: str = "A"
    register: str = "lines.csv"
    files: str | None = None
    first_line: int = 1
    first_line_m: float = 0.0
    line_spacing_m: float | None = None
    line_length_m: float | None = None
    along: Literal["x", "y"] = "x"
    walk: Literal["zigzag", "one-way"] | None = None


@dataclass(frozen=True)
class SurveyDraft:
    """What is known of a survey when its folder is begun; None is left for the user to fill in."""

    title: str
    code: str
    crs: str | None = None
    centre_frequency_mhz: float | None = None
    antenna_separation_m: float | None = None
    sample_interval_ns: float | None = None
    interval_unit: Literal["ps", "ns", "us"] | None = None
    date: dt.date | None = None
    conditions: str = ""
    grids: tuple[GridDraft, ...] = (GridDraft(),)


def survey_toml(draft: SurveyDraft) -> str:
    """Return the text of a ``survey.toml``: the given values, and every other key as a comment that explains it."""
    interval = [
        _line("sample_interval_ns", draft.sample_interval_ns, "time between samples; or, in its place,", "0.15"),
        _line(
            "interval_unit", draft.interval_unit, 'what the file\'s interval field holds: "ps", "ns" or "us"', '"ps"'
        ),
    ]
    lines = [
        "# What the crew wrote down. Lengths in m, times in ns, frequencies in MHz; # starts a comment.",
        "",
        "[survey]",
        _line("title", draft.title, "used in reports"),
        _line("code", draft.code, "used in file names: 1 to 16 letters, digits, _ and -"),
        _line(
            "crs",
            draft.crs,
            "system of control.csv and positions; without it outputs stay in the local frame",
            '"EPSG:25832"',
        ),
        "",
        "[[radar]]                         # one table per antenna",
        _line("centre_frequency_mhz", draft.centre_frequency_mhz, "needed: nominal centre frequency", "400"),
        _line("antenna_separation_m", draft.antenna_separation_m, "needed: transmitter to receiver", "0.16"),
        *interval,
        _line("time_zero_ns", None, "from sample 0; otherwise picked and reported", "6.0"),
        _line("antenna_axis", None, "direction from transmitter to receiver; or across", '"along"'),
        _line("recorded_gain", None, 'gain already in the files; or "none"', '"unknown"'),
        "",
        "[[visit]]                         # one table per day" if draft.date else "# [[visit]]",
        _line("date", draft.date, "the day of the survey", "2026-04-18"),
        _line("conditions", draft.conditions or None, "weather before, ground, vegetation", '"short grass, dry"')
        if draft.date
        else '# conditions = "short grass, dry for ten days"',
    ]
    for grid in draft.grids:
        lines += ["", *_grid(grid)]
    lines += [
        "",
        "[ground]",
        _line("velocity_m_per_ns", None, "otherwise estimated from the data, with its error", "0.085"),
        _line("velocity_error_m_per_ns", None, "goes with it, 1 sigma", "0.005"),
        "",
        "[slices]                          # m below the ground surface",
        *(_line(k, v, "") for k, v in (("top_m", 0.0), ("bottom_m", 2.0), ("thickness_m", 0.1), ("step_m", 0.05))),
        "",
        "[recipe]                          # changes to the default steps only",
        _line("steps", None, "the default order", '["dewow", "gain", "bandpass", "background", "migrate", "envelope"]'),
    ]
    return "\n".join(lines) + "\n"


def _grid(grid: GridDraft) -> list[str]:
    lines = [
        "[[grid]]                          # one table per rectangle of parallel lines",
        _line("name", grid.name, ""),
    ]
    if grid.files is None:
        lines.append(_line("register", grid.register, "one row per line: file, start and end in walking order"))
    else:
        lines += [
            _line("files", grid.files, "{line} stands for the number; a missing number leaves a gap"),
            _line("first_line", grid.first_line, ""),
            _line("first_line_m", grid.first_line_m, "its place across"),
            _line("line_spacing_m", grid.line_spacing_m, "needed: may be negative", "0.25"),
            _line("line_length_m", grid.line_length_m, "needed", "20.0"),
            _line("along", grid.along, "the local axis the lines run along"),
            _line("walk", grid.walk, 'or "one-way"', '"zigzag"'),
            _line("first_walk", None, 'the way of the first line; or "-"', '"+"'),
        ]
    return [
        *lines,
        _line("positions", None, "places from coordinates in the line files; name their crs above", '"header"'),
        _line("trace_spacing_m", None, "from trace to trace", "0.02"),
        _line("cell_m", None, "cell of the maps; a fifth of the line spacing otherwise", "0.05"),
    ]


def _line(key: str, value: object, comment: str, example: str = "") -> str:
    """One key with its comment; a comment altogether when its value is not known."""
    text = f"{key} = {_value(value)}" if value is not None else f"# {key} = {example}"
    return f"{text:<33} # {comment}" if comment else text


def _value(value: object) -> str:
    if isinstance(value, str):
        clean = "".join(c if c.isprintable() else " " for c in value)
        return json.dumps(clean, ensure_ascii=False)  # a TOML basic string, once no control characters are left
    if isinstance(value, dt.date):
        return value.isoformat()
    return repr(value) if isinstance(value, int) else _number(float(str(value)), point=True)


def _number(value: float, *, point: bool = False) -> str:
    text = f"{value:.6f}".rstrip("0").rstrip(".")
    text = "0" if text in ("-0", "") else text
    return text + ".0" if point and "." not in text else text


def lines_csv(rows: Iterable[RegisterRow]) -> str:
    """Return the text of a line register; optional columns appear when a row uses them, lengths to the micrometre."""
    rows = list(rows)
    used = [c for c in OPTIONAL if any(getattr(row, c) not in (None, "") for row in rows)]
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([*NEEDED, *used])
    for row in rows:
        optional = [getattr(row, c) for c in used]
        writer.writerow([row.grid, row.line, row.file, *map(_number, (*row.start, *row.end)), *optional])
    return stream.getvalue()
