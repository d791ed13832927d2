"""Processing steps by name, from the entry-point group ``planum.steps``; a broken plug-in warns, the rest goes on."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from functools import cache
from importlib.metadata import entry_points
from typing import cast

from planum.errors import PlanumWarning, Problem, RecipeError, nearest
from planum.records import Step

__all__ = ["check_order", "find_steps", "get_step"]

GROUP = "planum.steps"


@cache
def find_steps() -> dict[str, Step]:
    """Return the installed steps by name."""
    found: dict[str, Step] = {}
    for entry in entry_points(group=GROUP):
        try:
            step = entry.load()
            for attribute in ("name", "version", "reach", "takes", "gives", "Params"):
                getattr(step, attribute)
        except Exception as fault:  # a plug-in may fail in any way
            problem = Problem(
                came=f"the step {entry.name!r} from {entry.value!r} cannot be loaded ({fault})",
                do="mend or remove that package; the other steps work",
                severity="warning",
            )
            warnings.warn(PlanumWarning(problem), stacklevel=2)
            continue
        found[entry.name] = cast(Step, step)
    return found


def get_step(name: str) -> Step:
    """Return one step.

    Raises
    ------
    RecipeError
        When no step of that name is installed.
    """
    steps = find_steps()
    if name not in steps:
        raise RecipeError(
            Problem(
                came=f"there is no step {name!r}", allowed=nearest(name, steps), key="recipe.steps", do="mend the name"
            )
        )
    return steps[name]


def check_order(names: Sequence[str]) -> None:
    """Refuse an impossible order before any work.

    Raises
    ------
    RecipeError
        When a step does not take what the step before it gives, when a step comes twice, or when the last one does
        not give an envelope.
    """
    problems = []
    quantity, before = "voltage", "the recorded traces"
    for name in names:
        step = get_step(name)
        if step.takes != quantity:
            problems.append(
                Problem(
                    came=f"{name!r} cannot follow {before}: it takes {step.takes}, and gets {quantity}",
                    allowed="linear steps first, 'envelope' last",
                    do="change the order of steps",
                    key="recipe.steps",
                )
            )
        quantity, before = step.gives, f"{name!r}"
    for name in sorted({n for n in names if list(names).count(n) > 1}):
        problems.append(Problem(came=f"{name!r} comes twice", do="keep one", key="recipe.steps"))
    if quantity != "envelope":
        problems.append(
            Problem(
                came=f"the recipe ends with {quantity}",
                allowed="an envelope: slices average amplitude without its sign",
                do="end with 'envelope'",
                key="recipe.steps",
            )
        )
    if problems:
        raise RecipeError(problems)
