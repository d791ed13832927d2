"""What a survey would give, before it is mapped: every line is read once, nothing is processed.

It asks what a map asks, with the same functions, but goes on after a mistake to find the next.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from pydantic import BaseModel

from planum.constants import VELOCITY_RANGE
from planum.cube.geometry import trace_spacing
from planum.errors import LineError, PlanumError, Problem, SurveyError
from planum.pipeline.census import Source, facts_of
from planum.pipeline.estimate import Line, set_facts
from planum.pipeline.frames import frame_warnings, from_headers, site_frames
from planum.pipeline.recipe import resolve_chain, settings, toml
from planum.pipeline.resolve import check_cells
from planum.pipeline.run import plan_site, sources_of
from planum.pipeline.sets import Draft, draft_sets
from planum.records import Facts, Similarity, Velocity
from planum.survey.folder import Survey, read_survey
from planum.survey.register import RegisterRow

__all__ = ["Outlook", "SetOutlook", "outlook", "resolved_toml"]

Progress = Callable[[str, int, int], None]

SOIL_M_PER_NS = (0.06, 0.12)
"""Wet to dry soils (common practice), for an outlook only: a map measures or is told its velocity."""


@dataclass
class _Found:
    """What has come to light so far: mistakes that stop a map, lines it would leave out, and what is worth telling."""

    problems: list[Problem] = field(default_factory=list)
    aside: list[Problem] = field(default_factory=list)
    warnings: list[Problem] = field(default_factory=list)

    @contextmanager
    def collect(self) -> Iterator[None]:
        """Keep the problems of an error and go on behind the block."""
        try:
            yield
        except PlanumError as fault:
            self.problems += fault.problems


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
    SurveyError
        With all that has to be corrected first, and behind it what is only worth telling.
    """
    survey = read_survey(Path(site), roots=roots)
    found = _Found(aside=list(survey.set_aside), warnings=list(survey.warnings))
    chosen: dict[str, BaseModel] = {}
    with found.collect():
        chosen = settings(
            {"steps": survey.config.recipe.names(), **survey.config.recipe.settings()},
            centre_ghz=[r.centre_frequency_mhz / 1e3 for r in survey.config.radar],
        )
    lines = _read_all(survey, found, progress)
    if not lines:
        found.problems.insert(0, Problem("no line can be used", do="mend what is wrong with each"))
    drafts = _drafts(survey, lines, found)
    for draft in drafts:
        with found.collect():
            _try_chain(survey, draft, chosen)
        _check_depths(survey, draft, found)
    if drafts:
        _check_raster(survey, drafts, found)
    if found.problems:
        raise SurveyError([*found.problems, *found.aside, *found.warnings])
    return Outlook(
        title=survey.config.survey.title,
        code=survey.config.survey.code,
        crs=survey.config.survey.crs,
        sets=tuple(_set(survey, draft) for draft in drafts),
        steps=tuple(chosen),
        control=len(survey.control),
        set_aside=tuple(found.aside),
        warnings=tuple(found.warnings),
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


def _read_all(survey: Survey, found: _Found, progress: Progress | None) -> list[Line]:
    lines = []
    rows = sources_of(survey)
    for done, (row, source) in enumerate(rows, 1):
        try:
            lines.append(Line(row, source, _facts(row, source)))
        except LineError as error:
            came = f"line {row.grid}/{row.line} is set aside"
            found.aside += [
                replace(p, came=f"{came}: {p.came}", file=row.file, severity="warning") for p in error.problems
            ]
        else:
            facts = lines[-1].facts
            told = [Problem(**p) for p in facts.problems]
            if facts.n_traces == 1:
                came, do = "the file holds a single trace", "look whether the recording is whole"
                told.append(Problem(came, do=do, severity="warning"))
            found.warnings += [replace(p, file=row.file, line=row.line) for p in told]
        if progress:
            progress("reading lines", done, len(rows))
    return lines


def _facts(row: RegisterRow, source: Source) -> Facts:
    """Return what the census would keep of a line.

    Raises
    ------
    LineError
        When it cannot be read, is constant, or ends before the traces the register wants.
    """
    facts = facts_of(source.read(), file_id="", centre_ghz=source.options.centre_frequency_ghz or 0.4)
    if (row.first_trace or 0) >= facts.n_traces:
        came = f"first_trace is {row.first_trace}, and the file holds {facts.n_traces} traces"
        raise LineError(Problem(came, do="mend the register"))
    return facts


def _drafts(survey: Survey, lines: Sequence[Line], found: _Found) -> list[Draft]:
    """Place every set on its cube; where that fails, grid by grid, so that each grid tells its own mistakes."""
    frames: dict[str, Similarity] | None = None
    with found.collect():
        frames = site_frames(survey)
        found.warnings += frame_warnings(frames, survey)
    by_register = [line for line in lines if survey.grid(line.row).positions == "register"]
    if frames is None:
        lines, frames = by_register, {grid.name: Similarity() for grid in survey.config.grid}
    else:
        before = len(found.problems)
        with found.collect():
            lines, frames = from_headers(survey, lines, frames, found.warnings)
        if len(found.problems) > before:
            lines = by_register
    grids = list(dict.fromkeys(line.row.grid for line in lines))
    trial = _Found()
    drafts: list[Draft] = []
    with trial.collect():
        drafts = draft_sets(survey, lines, frames, warnings=trial.warnings, aside=trial.aside)
    if trial.problems and len(grids) > 1:
        trial = _Found()
        for name in grids:
            own = [line for line in lines if line.row.grid == name]
            with trial.collect():
                drafts += draft_sets(survey, own, frames, warnings=trial.warnings, aside=trial.aside)
    found.problems += trial.problems
    found.aside += trial.aside
    found.warnings += trial.warnings
    return drafts


def _velocities(survey: Survey) -> tuple[float, float]:
    given = survey.config.ground.velocity_m_per_ns
    return SOIL_M_PER_NS if given is None else (given, given)


def _try_chain(survey: Survey, draft: Draft, chosen: Mapping[str, BaseModel]) -> None:
    """Let every step learn from the set, at a velocity that is only a guess where none is given."""
    slow, fast = _velocities(survey)
    guess = Velocity.constant((slow + fast) / 2, (fast - slow) / 2 or 0.05 * slow, origin="book")
    facts = set_facts(draft.entries, draft.facts, draft.geometry, draft.radar, guess, pool=draft.pool)
    resolve_chain(chosen, facts)


def _check_depths(survey: Survey, draft: Draft, found: _Found) -> None:
    """Ask whether the record reaches the first slice: surely not is a mistake, perhaps not a warning."""
    table = survey.config.slices
    bottom = table.top_m + table.thickness_m
    last, radar = float(draft.geometry.times()[-1]), draft.radar
    slow, fast = _velocities(survey)
    likely, possible = (
        float(Velocity.constant(v, 0.0, origin="book").depth(last, separation_m=radar.antenna_separation_m))
        for v in (slow, fast if slow == fast else VELOCITY_RANGE[1])
    )
    if likely >= bottom - 1e-9:
        return
    sure = possible < bottom - 1e-9
    problem = Problem(
        f"set {draft.name}: the first slice ends at {bottom:.2f} m, the record {last:.3g} ns after time zero"
        f" ({draft.zero.value:.4g} ns), which reaches {possible if sure else likely:.2f} m"
        + ("" if sure else " in slow ground"),
        do="choose shallower slices, or check time_zero_ns, the sample interval and the velocity",
        file="survey.toml",
        key=f"radar[{radar.name}].time_zero_ns" if draft.zero.origin == "given" else "slices",
        severity="error" if sure else "warning",
    )
    (found.problems if sure else found.warnings).append(problem)


def _check_raster(survey: Survey, drafts: Sequence[Draft], found: _Found) -> None:
    """Compare cells with the lines: no wider than their spacing, and no more of them than a raster can hold."""
    cells, corners = [], []
    for draft in drafts:
        g, typed = draft.geometry, survey.config.grid_named(draft.grid).cell_m
        cells.append(typed or max(0.001, round(g.line_step_m / 5.0, 3)))
        if cells[-1] > g.line_step_m:
            found.problems.append(
                Problem(
                    f"cell_m is {cells[-1]:g}, and the lines are {g.line_step_m:g} m apart",
                    allowed="at most the line spacing; a fifth of it when left out",
                    do="choose a smaller cell",
                    file="survey.toml",
                    key=f"grid[{draft.grid}].cell_m",
                )
            )
        along = (g.along0_m, float(g.along()[-1]))
        across = g.lines()[[0, -1]] + 0.5 * g.line_step_m * np.array([-1.0, 1.0])
        u, v = (np.ravel(a) for a in np.meshgrid(along, across))
        corners.append(np.stack(draft.frame.forward(u, v) if g.direction == "x" else draft.frame.forward(v, u)))
    every = np.concatenate(corners, axis=1)
    (west, south), (east, north) = every.min(axis=1).tolist(), every.max(axis=1).tolist()
    with found.collect():
        check_cells((west, south, east, north), min(cells))


def _set(survey: Survey, draft: Draft) -> SetOutlook:
    g, there = draft.geometry, {e.row for e in draft.entries}
    return SetOutlook(
        name=draft.name,
        lines=len(there),
        direction=g.direction,
        spacing_m=round(g.line_step_m, 3),
        missing_m=tuple(round(float(at), 3) for row, at in enumerate(g.lines()) if row not in there),
        longest_m=max(math.dist(e.start, e.end) for e in draft.entries),
        trace_spacing_m=trace_spacing(draft.entries),
        window_ns=float(np.median([f.interval_ns * f.n_samples for f in draft.facts])),
        centre_frequency_mhz=draft.radar.centre_frequency_mhz,
        velocity_m_per_ns=_velocities(survey),
    )
