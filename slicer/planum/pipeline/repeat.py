"""A plan that is repeated: whether it is one, whether it is this site's, and what the survey says otherwise by now."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from planum.errors import Problem, SurveyError, printable
from planum.records import Plan
from planum.slices.intervals import intervals
from planum.survey.config import SurveyConfig

__all__ = ["differences", "no_plan", "of_this_site"]

NEAR = 1e-6
"""Lengths and velocities that differ by less, m and m/ns, are the same number typed or computed in another way."""


def no_plan(path: Path, fault: Exception) -> SurveyError:
    """Return the refusal of a file that holds no plan, in words of ours instead of a parser's."""
    match fault:
        case json.JSONDecodeError() | UnicodeDecodeError():
            came = "run.json of a run is wanted; this is no JSON"
        case ValidationError():
            first = fault.errors(include_url=False, include_input=False)[0]
            where = ".".join(map(str, first["loc"]))
            came = (
                f"no plan can be read ({printable(where, longest=80)}: {printable(first['msg'], longest=80).lower()})"
            )
        case KeyError() | TypeError():
            came = "run.json of a run is wanted; this JSON holds no plan"
        case OSError():
            came = f"cannot be read ({fault.strerror})"
        case _:
            came = f"no plan can be read ({printable(str(fault).partition(chr(10))[0], longest=120)})"
    return SurveyError(Problem(came, "the run.json of a run", "planum map SITE makes one", file=str(path)))


def of_this_site(plan: Plan, config: SurveyConfig, path: Path) -> Plan:
    """Return the plan.

    Raises
    ------
    SurveyError
        When it was made for a survey of another code.
    """
    if plan.code != config.survey.code:
        raise SurveyError(
            Problem(
                came=f"this plan is of {plan.code}, this site is {config.survey.code}",
                do="name the run.json of a run of this site, or map without a plan",
                file=str(path),
            )
        )
    return plan


def differences(plan: Plan, config: SurveyConfig) -> tuple[Problem, ...]:
    """Return one warning on all that ``survey.toml`` says otherwise than a plan that is repeated; empty without any."""
    said = list(_differences(plan, config))
    if not said:
        return ()
    return (
        Problem(
            came=f"says something else than the plan that is repeated: {'; '.join(said)}",
            do="the plan counts; map without it to follow the survey",
            file="survey.toml",
            severity="warning",
        ),
    )


def _differences(plan: Plan, config: SurveyConfig) -> Iterator[str]:
    for word, now, then in (
        ("title", config.survey.title, plan.title),
        ("crs", config.survey.crs or "none", plan.crs or "none"),
    ):
        if now != then:
            yield f"{word} {printable(now, longest=60)!r}, plan {printable(then, longest=60)!r}"
    yield from _velocity(plan, config)
    yield from _slices(plan, config)
    yield from _cell(plan, config)
    steps, chain = list(config.recipe.names()), [step.name for step in plan.sets[0].chain]
    if steps != chain:
        yield f"steps {', '.join(steps)}, plan {', '.join(chain)}"


def _velocity(plan: Plan, config: SurveyConfig) -> Iterator[str]:
    typed, of_plan = config.ground.velocity_m_per_ns, plan.sets[0].velocity
    if typed is None and of_plan.origin == "given":
        yield f"velocity estimated, plan {of_plan.value:g} m/ns"
    elif typed is not None and abs(typed - of_plan.value) > NEAR:
        yield f"velocity {typed:g} m/ns, plan {of_plan.value:.4g} m/ns"


def _slices(plan: Plan, config: SurveyConfig) -> Iterator[str]:
    table = config.slices
    wanted = intervals(table.top_m, table.bottom_m, table.thickness_m, table.step_m)
    # slices below the record were left out of the plan, and would be left out again
    deepest = min(float(s.velocity.depth(s.geometry.times()[-1], separation_m=s.separation_m)) for s in plan.sets)
    now = [w for w in wanted if w[1] <= deepest + NEAR]
    same = len(now) == len(plan.intervals_m) and all(
        math.isclose(a, b, abs_tol=NEAR)
        for n, p in zip(now, plan.intervals_m, strict=True)
        for a, b in zip(n, p, strict=True)
    )
    if not same:
        yield f"slices {_spoken(now)}, plan {_spoken(plan.intervals_m)}"


def _spoken(windows: Any) -> str:
    if not windows:
        return "none"
    (top, first), bottom = windows[0], windows[-1][1]
    return f"{len(windows)} of {first - top:.3g} m from {top:g} to {bottom:.4g} m"


def _cell(plan: Plan, config: SurveyConfig) -> Iterator[str]:
    grids = {grid.name.casefold(): grid for grid in config.grid}
    if gone := sorted({s.grid for s in plan.sets if s.grid.casefold() not in grids}):
        yield f"no grid {', '.join(gone)}"
        return
    typed = [grids[s.grid.casefold()].cell_m or round(s.geometry.line_step_m / 5.0, 3) for s in plan.sets]
    if abs(min(typed) - plan.cell_m) > NEAR:
        yield f"cell {min(typed):g} m, plan {plan.cell_m:g} m"
