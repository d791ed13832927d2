"""Open a set as one regular cube, lazily: nothing is read until a value is asked for."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import dask
import dask.array as da
import numpy as np
import xarray as xr

from planum import schema
from planum.engine.linepass import condition, row_cube
from planum.errors import Problem, RecipeError, SurveyError, nearest
from planum.pipeline.passes import read_pieces
from planum.pipeline.run import read_run
from planum.records import FLAG_NONE, SetPlan

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
        ``amplitude`` (line, along, time), float32; line and along in m, time in ns; one block per line. Rows without a
        recording hold 0 and are flagged.

    Raises
    ------
    SurveyError
        When the site has no run, or the run no such set.
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
    g = chosen.geometry
    there = {e.row for e in chosen.entries}
    rows = [
        da.from_delayed(_row(site, chosen, row, until, tuple(roots)), (g.n_along, g.n_time), np.float32)[None]
        if row in there
        else da.zeros((1, g.n_along, g.n_time), chunks=-1, dtype=np.float32)
        for row in range(g.n_lines)
    ]
    flag = np.zeros((g.n_lines, g.n_along), np.uint8)
    flag[[r for r in range(g.n_lines) if r not in there]] = FLAG_NONE
    x, y = np.meshgrid(g.along(), g.lines())
    if g.direction == "y":
        x, y = y, x
    return schema.cube(
        da.concatenate(rows), line=g.lines(), along=g.along(), time=g.times(), flag=flag, x=x, y=y
    ).assign_attrs(quantity="envelope" if stage == "envelope" else "voltage", set=name, stage=stage)


@dask.delayed(pure=True)
def _row(site: Path, plan: SetPlan, row: int, until: int, roots: tuple[Path, ...]) -> np.ndarray:
    raw = row_cube(read_pieces(site, plan, row, roots=roots), plan, row)
    return np.asarray(condition(raw, plan.chain[:until]).values[0], np.float32)
