"""What a survey would give, before it is mapped: every line is read once, nothing is processed."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import NamedTuple

import numpy as np

from planum.cube.geometry import line_spacing
from planum.errors import LineError, Problem, SurveyError
from planum.lines.reading import read_line
from planum.pipeline.frames import site_frames
from planum.pipeline.recipe import settings, toml
from planum.pipeline.run import plan_site, sources_of
from planum.records import LineEntry
from planum.survey.folder import Survey, read_survey
from planum.survey.places import direction
from planum.survey.register import RegisterRow

__all__ = ["Outlook", "SetOutlook", "outlook", "resolved_toml"]

Progress = Callable[[str, int, int], None]

SOIL_M_PER_NS = (0.06, 0.12)
"""Wet to dry soils (common practice), for an outlook only: a map measures or is told its velocity."""


class _Read(NamedTuple):
    row: RegisterRow
    n_traces: int
    window_ns: float


@dataclass(frozen=True)
class SetOutlook:
    """Lines of one grid, direction, radar and visit. Lengths m, window ns, frequency MHz."""

    name: str
    lines: int
    direction: str
    spacing_m: float
    missing_m: tuple[float, ...]
    longest_m: float
    trace_spacing_m: float
    window_ns: float
    centre_frequency_mhz: float
    velocity_m_per_ns: tuple[float, float]

    @property
    def reach_m(self) -> tuple[float, float]:
        """Depth the window reaches, m, for the slowest and the fastest ground that is thought of."""
        slow, fast = (v * self.window_ns / 2 for v in self.velocity_m_per_ns)
        return slow, fast

    def resolution(self) -> str:
        """Say what can be told apart: the sampling theorem across, a quarter wavelength in depth (common practice)."""
        fine, coarse = (100 * v / (4 * self.centre_frequency_mhz / 1e3) for v in self.velocity_m_per_ns)
        depth = f"{fine:.0f} cm" if round(fine) == round(coarse) else f"{fine:.0f} to {coarse:.0f} cm"
        across = (
            f"lines stand {self.spacing_m:g} m apart: what is narrower can fall between them, and two things nearer"
            f" than {2 * self.spacing_m:g} m run together"
            if self.lines > 1
            else "a single line shows what lies under it, and nothing beside it"
        )
        return f"{across}; in depth, things closer than {depth} run together"


@dataclass(frozen=True)
class Outlook:
    """A survey read through: what would be mapped, what would be set aside, what is worth telling."""

    title: str
    code: str
    crs: str | None
    sets: tuple[SetOutlook, ...]
    steps: tuple[str, ...]
    control: int
    set_aside: tuple[Problem, ...]
    warnings: tuple[Problem, ...]


def outlook(site: Path, *, roots: Sequence[Path] = (), progress: Progress | None = None) -> Outlook:
    """Read a survey and each of its lines, and say what a map of it would hold.

    Parameters
    ----------
    site : Path
        The survey folder.
    roots : sequence of Path
        Folders beside the survey in which line files may lie.
    progress : callable, optional
        Called with stage, done, total.

    Raises
    ------
    SurveyError, RecipeError, FrameError
        With all that has to be corrected first.
    """
    survey = read_survey(Path(site), roots=roots)
    chosen = settings({"steps": survey.config.recipe.names(), **survey.config.recipe.settings()})
    site_frames(survey)  # raises where control points do not fit
    read, aside, warnings = _read_all(survey, progress)
    if not read:
        raise SurveyError([Problem("no line can be used", do="mend what is wrong with each"), *aside])
    groups: dict[tuple[str, str, str, str], list[_Read]] = {}
    for line in read:
        row = line.row
        groups.setdefault((row.grid, direction(row), row.radar, row.visit), []).append(line)
    return Outlook(
        title=survey.config.survey.title,
        code=survey.config.survey.code,
        crs=survey.config.survey.crs,
        sets=tuple(_set(survey, group) for group in groups.values()),
        steps=tuple(chosen),
        control=len(survey.control),
        set_aside=(*survey.set_aside, *aside),
        warnings=(*survey.warnings, *warnings),
    )


def resolved_toml(site: Path, *, roots: Sequence[Path] = (), progress: Progress | None = None) -> str:
    """Return the recipe of a survey with every automatic setting filled in, as TOML.

    Where the sets of a survey learn different numbers, the first set's are the text and the others' are comments.

    Raises
    ------
    SurveyError, RecipeError, FrameError
        As a map of the survey would.
    """
    first, *others = plan_site(Path(site), roots=roots, progress=progress).sets
    text = toml(first.chain)
    unlike = [(one.name, toml(one.chain)) for one in others if toml(one.chain) != text]
    if unlike:
        text = f"# set {first.name}\n{text}"
    for name, other in unlike:
        text += f"\n# set {name}\n" + "".join(f"# {row}".rstrip() + "\n" for row in other.splitlines())
    return text


def _read_all(survey: Survey, progress: Progress | None) -> tuple[list[_Read], list[Problem], list[Problem]]:
    read: list[_Read] = []
    aside: list[Problem] = []
    warnings: list[Problem] = []
    rows = sources_of(survey)
    for done, (row, source) in enumerate(rows, 1):
        try:
            recording = read_line(source.path, source.options)
        except LineError as error:
            came = f"line {row.grid}/{row.line} is set aside"
            aside += [replace(p, came=f"{came}: {p.came}", file=row.file, severity="warning") for p in error.problems]
        else:
            last = row.last_trace if row.last_trace is not None else len(recording.data) - 1
            if last >= len(recording.data):
                came = f"last_trace is {last}, and the file holds {len(recording.data)} traces"
                warnings.append(Problem(came, do="mend the register", file=row.file, line=row.line, severity="warning"))
            n_traces = last - (row.first_trace or 0) + 1
            read.append(_Read(row, n_traces, recording.interval_ns * recording.data.shape[1]))
            warnings += [replace(p, file=row.file) for p in recording.problems]
        if progress:
            progress("reading lines", done, len(rows))
    return read, aside, warnings


def _set(survey: Survey, group: Sequence[_Read]) -> SetOutlook:
    rows = [line.row for line in group]
    way = direction(rows[0])
    radar, ground = survey.radar(rows[0]), survey.config.ground.velocity_m_per_ns
    spacing = line_spacing([_entry(row) for row in rows], direction="x" if way == "x" else "y")
    across = np.array([(row.start[way == "x"] + row.end[way == "x"]) / 2 for row in rows])
    steps = {round(s) for s in (across - across.min()) / spacing}
    gaps = [round(float(across.min() + s * spacing), 3) for s in range(max(steps)) if s not in steps]
    traces = [row.length_m / (line.n_traces - 1) for row, line in zip(rows, group, strict=True) if line.n_traces > 1]
    return SetOutlook(
        name=f"{rows[0].grid}/{way}" + (f"@{rows[0].visit}" if rows[0].visit else ""),
        lines=len(steps),
        direction=way,
        spacing_m=round(spacing, 3),
        missing_m=tuple(gaps),
        longest_m=max(row.length_m for row in rows),
        trace_spacing_m=float(np.median(traces)) if traces else float("nan"),
        window_ns=float(np.median([line.window_ns for line in group])),
        centre_frequency_mhz=radar.centre_frequency_mhz,
        velocity_m_per_ns=SOIL_M_PER_NS if ground is None else (ground, ground),
    )


def _entry(row: RegisterRow) -> LineEntry:
    """Return what the geometry needs to know of a row."""
    return LineEntry(
        key=row.source,
        set="",
        grid=row.grid,
        line=row.line,
        row=0,
        file=row.file,
        first_trace=0,
        last_trace=1,
        start=row.start,
        end=row.end,
    )
