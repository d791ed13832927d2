"""The main job: a survey folder becomes a run folder, whole or not at all.

::

    survey -> census (pass 1) -> estimates -> plan -> line pass (pass 2) -> slice stack -> products -> out/
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable, Sequence
from concurrent.futures import Executor, ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import planum
from planum.engine.steps import check_order, get_step
from planum.errors import LineError, Problem, SurveyError
from planum.lines.recording import RawLayout, ReadOptions
from planum.pipeline import exchange
from planum.pipeline.census import Source, census, in_order
from planum.pipeline.estimate import Line
from planum.pipeline.gridded import grid_stack, open_stack
from planum.pipeline.passes import row_key, set_key, strip_of
from planum.pipeline.products import section_key, section_picture, write_products
from planum.pipeline.repeat import differences, no_plan, of_this_site
from planum.pipeline.resolve import Resolution, check_cells, resolve
from planum.pipeline.store import Store
from planum.pipeline.told import RunFacts
from planum.records import Plan, SetPlan
from planum.survey.folder import Survey, read_survey
from planum.survey.register import RegisterRow

__all__ = ["RunResult", "map_site", "plan_site", "read_run", "sources_of"]

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class RunResult:
    """Where the result lies, what was set aside or noticed, and whether anything had to be made."""

    out: Path
    set_aside: tuple[Problem, ...]
    warnings: tuple[Problem, ...]
    changed: bool
    summary: dict[str, Any] = field(default_factory=dict)


def map_site(
    site: Path,
    *,
    out: Path | None = None,
    name: str | None = None,
    plan: Path | None = None,
    workers: int | None = None,
    roots: Sequence[Path] = (),
    progress: Progress | None = None,
) -> RunResult:
    """Map a survey folder.

    Parameters
    ----------
    site : Path
        The survey folder.
    out, name : Path, str, optional
        The run folder; by default ``out`` in the survey folder, ``out-NAME`` with a name.
    plan : Path, optional
        A ``run.json`` whose plan is repeated instead of being worked out from the survey.
    workers : int, optional
        Threads; the number of processors by default. The result does not depend on it.
    roots : sequence of Path
        Folders beside the survey in which line files may lie.
    progress : callable, optional
        Called with stage, done, total.

    Raises
    ------
    SurveyError, RecipeError, FrameError, MachineError
        When nothing can be mapped; the former run folder is then untouched.
    """
    site = Path(site)
    final = Path(out) if out is not None else site / (f"out-{name}" if name else "out")
    survey = read_survey(site, roots=roots)
    exchange.finish(final)
    exchange.check_place(final)
    store = Store(site / "work")
    with ThreadPoolExecutor(workers or os.cpu_count() or 1) as executor:
        try:
            return _run(survey, final, store, executor, plan, progress)
        except BaseException:
            executor.shutdown(wait=True, cancel_futures=True)
            raise


def _run(
    survey: Survey, final: Path, store: Store, executor: Executor, plan_file: Path | None, progress: Progress | None
) -> RunResult:
    asked = None if plan_file is None else of_this_site(read_run(plan_file)[0], survey.config, plan_file)
    lines, aside = _facts(survey, store, executor, progress)
    if asked is None or plan_file is None:
        resolution = resolve(survey, lines, store=store, executor=executor, set_aside=aside, progress=progress)
    else:
        told = differences(asked, survey.config)
        resolution = Resolution(_same_bytes(asked, lines, plan_file), told, tuple(aside))
    plan, aside = resolution.plan, list(resolution.set_aside)
    warnings = (*survey.warnings, *_noticed(lines), *resolution.warnings)
    run = RunFacts(
        plan=plan,
        control=survey.control,
        facts={line.row.file: line.facts for line in lines},
        warnings=warnings,
        set_aside=tuple(aside),
        curve=dict(resolution.curve),
        visits={v.name: v.conditions for v in survey.config.visit},
    )
    token = run.output_key()
    if _whole(final, token):
        return RunResult(final, run.set_aside, warnings, changed=False, summary=run.summary())
    rows, failed = _second_pass(survey, plan, store, executor, progress)
    if failed:  # named differently from the run that would be whole, so that the next command tries again
        run = run.without(failed)
        token = run.output_key()
    stack = open_stack(grid_stack(plan, rows, store, progress=progress), plan)
    sections = {
        (s.name, row): store.path("sections", section_key(plan, s, row, k), ".png")
        for s in plan.sets
        for row, k in enumerate(rows[s.name])
        if k is not None
    }
    if not bool((stack["coverage"] > 0).any()):
        raise SurveyError(
            Problem(
                came="no cell of the raster holds data",
                do="compare cell_m, the register and control.csv: the lines do not reach the raster",
                file="survey.toml",
            )
        )
    folder = exchange.aside(final, token)
    try:
        run = write_products(folder, stack, run, sections=sections, token=token, progress=progress)
        (folder / exchange.MARK).unlink()
    except BaseException:
        shutil.rmtree(folder, ignore_errors=True)  # half a result is no use, and on a full disk it is in the way
        raise
    exchange.publish(folder, final)
    return RunResult(final, run.set_aside, run.warnings, changed=True, summary=run.summary())


def _same_bytes(plan: Plan, lines: Sequence[Line], plan_file: Path) -> Plan:
    """Refuse to repeat a plan on other bytes than it was made for."""
    now = {line.row.file: line.facts.file_id for line in lines}
    changed = {e.file for s in plan.sets for e in s.entries if now.get(e.file, e.file_id) != e.file_id}
    if changed:
        raise SurveyError(
            [
                Problem(
                    came="this file has changed since the plan was made",
                    allowed="the same bytes",
                    do=f"restore it, or map without --plan {plan_file.name}",
                    file=name,
                )
                for name in sorted(changed)
            ]
        )
    return plan


def plan_site(
    site: Path, *, workers: int | None = None, roots: Sequence[Path] = (), progress: Progress | None = None
) -> Plan:
    """Return the plan of a site without running it."""
    survey = read_survey(Path(site), roots=roots)
    store = Store(Path(site) / "work")
    with ThreadPoolExecutor(workers or os.cpu_count() or 1) as executor:
        lines, aside = _facts(survey, store, executor, progress)
        return resolve(survey, lines, store=store, executor=executor, set_aside=aside, progress=progress).plan


def read_run(path: Path) -> tuple[Plan, dict[str, Any]]:
    """Return the plan in a ``run.json`` and the whole record.

    Raises
    ------
    SurveyError
        When the file holds no plan this version understands.
    """
    try:
        record = json.loads(Path(path).read_text(encoding="utf-8"))
        plan = Plan.model_validate(record["plan"])
        for s in plan.sets:
            check_order([step.name for step in s.chain])
            for step in s.chain:
                get_step(step.name).Params.model_validate(step.params)
        check_cells(plan.bounds, plan.cell_m)
        return plan, record
    except (OSError, ValueError, KeyError, TypeError) as fault:
        raise no_plan(path, fault) from fault


def sources_of(survey: Survey) -> list[tuple[RegisterRow, Source]]:
    """Return every register row with the file it is read from and how."""
    out = []
    for row in survey.rows:
        grid, radar = survey.grid(row), survey.radar(row)
        raw = grid.raw
        layout = (
            None
            if raw is None
            else RawLayout(
                n_samples=raw.samples,
                header_bytes=raw.header_bytes,
                bytes_before_trace=raw.bytes_before_trace,
                sample_type=raw.sample_type,
                byte_order=raw.byte_order_mark,
            )
        )
        options = ReadOptions(
            interval_ns=radar.sample_interval_ns,
            interval_unit=radar.interval_unit,
            centre_frequency_ghz=radar.centre_frequency_mhz / 1e3,
            part=row.part,
            split=grid.split,
            header_positions=grid.positions == "header",
            layout=layout,
            reader="raw" if raw else None,
        )
        out.append((row, Source(survey.path(row), row.file, options)))
    return out


def _facts(
    survey: Survey, store: Store, executor: Executor, progress: Progress | None
) -> tuple[list[Line], list[Problem]]:
    rows = sources_of(survey)
    found = census([source for _, source in rows], store, executor=executor, progress=progress)
    lines, aside = [], list(survey.set_aside)
    for (row, source), facts in zip(rows, found, strict=True):
        if isinstance(facts, Problem):
            aside.append(replace(facts, line=facts.line or row.line))
        else:
            lines.append(Line(row, source, facts))
    if not lines:
        raise SurveyError([Problem(came="no line can be used", do="see below what is wrong with each"), *aside])
    return lines, aside


def _noticed(lines: Sequence[Line]) -> list[Problem]:
    """Return what the census saw: reader's warnings, dead and clipped traces."""
    out = []
    for line in lines:
        where = Problem(came="", file=line.row.file, line=line.row.line, severity="warning")
        out += [replace(Problem(**p), file=where.file, line=where.line) for p in line.facts.problems]
        dead, clipped = len(line.facts.dead), len(line.facts.clipped)
        if dead:
            out.append(
                replace(where, came=f"{dead} dead trace(s)", do="runs of up to 3 are filled, longer ones left out")
            )
        if clipped > 0.02 * line.facts.n_traces:
            share = clipped / line.facts.n_traces
            out.append(replace(where, came=f"{share:.0%} of the traces are clipped", do="amplitudes are lower bounds"))
    return out


def _second_pass(
    survey: Survey, plan: Plan, store: Store, executor: Executor, progress: Progress | None
) -> tuple[dict[str, list[str | None]], list[Problem]]:
    """Run every row that is not there yet; return the rows' keys and what failed."""
    rows: dict[str, list[str | None]] = {s.name: [None] * s.geometry.n_lines for s in plan.sets}
    jobs: list[tuple[SetPlan, int, str]] = []
    for s in plan.sets:
        common = set_key(s)
        for row in sorted({e.row for e in s.entries}):
            rows[s.name][row] = row_key(s, row, common=common)
            jobs.append((s, row, str(rows[s.name][row])))

    def one(job: tuple[SetPlan, int, str]) -> Problem | None:
        s, row, name = job
        picture = store.path("sections", section_key(plan, s, row, name), ".png")
        if (
            store.load_array("rows", name) is not None
            and store.load_array("flags", name) is not None
            and picture.is_file()
        ):
            return None
        strip = strip_of(survey.folder, s, row, section=True, roots=survey.roots)
        if isinstance(strip, Problem):
            return strip
        store.save_array("flags", name, strip.flag)
        store.save_array("rows", name, strip.values)
        section_picture(picture, plan, s, strip)
        return None

    failed = []
    for done, ((s, row, _), problem) in enumerate(zip(jobs, in_order(executor, one, jobs), strict=True), 1):
        if problem is not None:
            failed.append(problem)
            rows[s.name][row] = None
        if progress:
            progress("migrating lines", done, len(jobs))
    if len(failed) == len(jobs):
        raise LineError([Problem(came="no line can be used", do="see below what is wrong with each"), *failed])
    return rows, failed


def _whole(final: Path, token: str) -> bool:
    """Tell whether the run folder holds this very result, with every file it lists."""
    try:
        record = json.loads((final / "run.json").read_text(encoding="utf-8"))
        return (
            record["output_key"] == token
            and record["version"] == planum.__version__
            and all((final / name).stat().st_size == size for name, size in record["files"].items())
        )
    except (OSError, ValueError, KeyError, TypeError):
        return False
