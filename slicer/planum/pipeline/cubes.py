"""Open a set as one regular cube, lazily: nothing is read until a value is asked for."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import NamedTuple

import dask
import dask.array as da
import numpy as np
import xarray as xr
from dask.base import tokenize

from planum import schema
from planum.engine.linepass import condition, row_cube
from planum.errors import MachineError, Problem, RecipeError, SurveyError, nearest
from planum.pipeline.passes import read_pieces, row_key
from planum.pipeline.run import read_run
from planum.pipeline.store import Store
from planum.records import FLAG_NONE, SetPlan
from planum.survey.safety import inside

__all__ = ["open_cube"]


def open_cube(
    site: Path, name: str, *, stage: str = "raw", run: str = "out", roots: Sequence[Path] = ()
) -> xr.DataArray:
    """Return one set of a mapped site as a dask-backed cube.

    Parameters
    ----------
    site : Path
        The survey folder; it has been mapped, so that the plan is in its run folder.
    name : str
        The set, such as ``"A/x"``.
    stage : str
        ``"raw"``, or the name of the last step to apply, such as ``"background"`` or ``"migrate"``.
    run : str
        Name of the run folder.
    roots : sequence of Path
        Folders beside the survey in which line files may lie.

    Returns
    -------
    DataArray
        ``amplitude`` (line, along, time), float32; line and along in m, time in ns; one block per line. Where nothing
        was recorded it holds 0 and ``flag`` says so: whole rows, ends of partial lines, gaps, dead traces. ``x``, ``y``
        are the traces' true places in the grid's own m, read together with the amplitudes; ``flag`` is what the run
        kept in ``work/``, otherwise read in the same way.

    Raises
    ------
    SurveyError
        When the site has no run, or the run no such set; when a line file is not the one that was mapped, also later,
        as its values are asked for.
    RecipeError
        When the recipe has no such step.
    """
    site = Path(site)
    plan, _ = read_run(site / run / "run.json")
    sets = {s.name: s for s in plan.sets}
    if name not in sets:
        raise SurveyError(Problem(came=f"there is no set {name!r}", allowed=nearest(name, sets), file=str(site / run)))
    chosen = sets[name]
    steps = [s.name for s in chosen.chain]
    if stage != "raw" and stage not in steps:
        raise RecipeError(Problem(came=f"there is no stage {stage!r}", allowed=nearest(stage, ["raw", *steps])))
    until = 0 if stage == "raw" else steps.index(stage) + 1
    store = _store(site)
    marks = _marks(site, chosen, store, roots)
    g = chosen.geometry
    there = {e.row for e in chosen.entries}
    rows = [
        _recorded(site, chosen, row, until, marks, tuple(roots)) if row in there else _empty(chosen, row)
        for row in range(g.n_lines)
    ]
    flags = [_kept_flag(store, chosen, row) if row in there else rows[row].flag for row in range(g.n_lines)]
    known = [f for f in flags if f is not None]
    flag = np.stack(known) if len(known) == len(flags) else da.stack([r.flag for r in rows])
    return schema.cube(
        da.stack([r.amplitude for r in rows]),
        line=g.lines(),
        along=g.along(),
        time=g.times(),
        flag=flag,
        x=da.stack([r.x for r in rows]),
        y=da.stack([r.y for r in rows]),
    ).assign_attrs(quantity="envelope" if stage == "envelope" else "voltage", set=name, stage=stage)


class _Row(NamedTuple):
    """One row of the cube: (along, time), and three times (along)."""

    amplitude: da.Array
    flag: da.Array
    x: da.Array
    y: da.Array


def _recorded(
    site: Path, plan: SetPlan, row: int, until: int, marks: Mapping[str, tuple[int, int]], roots: tuple[Path, ...]
) -> _Row:
    g = plan.geometry
    own = {e.file: marks[e.file] for e in plan.entries if e.row == row}
    # Named by content: the cubes of two stages share what they read, and their places compare without reading.
    frame = plan.frame.model_dump_json()
    token = tokenize(str(site.absolute()), row_key(plan, row), frame, sorted(own.items()))
    raw = dask.delayed(_raw)(site, plan, row, own, roots, dask_key_name=f"row-{token}")
    done = dask.delayed(condition)(raw, plan.chain[:until], dask_key_name=f"row-{until}-{token}") if until else raw

    def part(of: object, name: str, shape: tuple[int, ...], kind: type) -> da.Array:
        step = until if of is done else 0
        value = dask.delayed(_values)(of, name, kind, dask_key_name=f"{name}-{step}-{token}")
        return da.from_delayed(value, shape, kind)

    return _Row(
        part(done, "amplitude", (g.n_along, g.n_time), np.float32),
        part(done, "flag", (g.n_along,), np.uint8),
        part(raw, "x", (g.n_along,), np.float64),
        part(raw, "y", (g.n_along,), np.float64),
    )


def _empty(plan: SetPlan, row: int) -> _Row:
    """Return a row nobody recorded: zeros, flagged, at its nominal place."""
    g = plan.geometry
    along, across = g.along(), np.full(g.n_along, g.lines()[row])
    x, y = (along, across) if g.direction == "x" else (across, along)
    return _Row(
        da.zeros((g.n_along, g.n_time), chunks=-1, dtype=np.float32),
        da.full(g.n_along, FLAG_NONE, chunks=-1, dtype=np.uint8),
        da.from_array(x, chunks=-1),
        da.from_array(y, chunks=-1),
    )


def _raw(
    site: Path, plan: SetPlan, row: int, marks: Mapping[str, tuple[int, int]], roots: tuple[Path, ...]
) -> xr.DataArray:
    for entry in plan.entries:
        if entry.row == row and entry.file_id:
            path = inside(site, entry.file, roots=roots)
            if _mark(path, entry.file) != marks[entry.file] and _digest(path) != entry.file_id:
                raise SurveyError(_changed(entry.file))
    return row_cube(read_pieces(site, plan, row, roots=roots), plan, row)


def _values(cube: xr.DataArray, name: str, kind: type) -> np.ndarray:
    values = cube.values if name == "amplitude" else cube[name].values
    return np.asarray(values[0], kind)


def _store(site: Path) -> Store | None:
    """Return the site's store; None where it cannot be written to, such as on a read-only disk."""
    try:
        return Store(site / "work")
    except (OSError, MachineError):
        return None


def _kept_flag(store: Store | None, plan: SetPlan, row: int) -> np.ndarray | None:
    """Return the flags the run kept of a row, which no step changes; None when there are none."""
    kept = store.load_array("flags", row_key(plan, row)) if store else None
    if kept is None or kept.shape != (plan.geometry.n_along,) or kept.dtype != np.uint8:
        return None
    return np.array(kept)


def _marks(site: Path, plan: SetPlan, store: Store | None, roots: Sequence[Path]) -> dict[str, tuple[int, int]]:
    """Return size and time of every line file, and refuse those whose bytes are not the ones that were mapped."""
    marks: dict[str, tuple[int, int]] = {}
    problems = []
    for entry in plan.entries:
        if entry.file in marks:
            continue
        path = inside(site, entry.file, roots=roots)
        marks[entry.file] = _mark(path, entry.file)
        if entry.file_id and entry.file_id != (store.file_id(path, entry.file) if store else _digest(path)):
            problems.append(_changed(entry.file))
    if problems:
        raise SurveyError(problems)
    return marks


def _mark(path: Path, name: str) -> tuple[int, int]:
    try:
        stat = path.stat()
    except OSError as fault:
        came = f"cannot be read ({fault.strerror or fault})"
        raise SurveyError(Problem(came, do="put the file that was mapped back", file=name)) from fault
    return stat.st_size, stat.st_mtime_ns


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _changed(name: str) -> Problem:
    return Problem(
        came="this file has changed since the run",
        allowed="the bytes that were mapped",
        do="planum map SITE makes the run anew",
        file=name,
    )
