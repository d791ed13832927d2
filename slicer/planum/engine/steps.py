"""Processing steps by name, from the entry-point group ``planum.steps``; a broken plug-in warns, the rest goes on."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

from planum import plugins
from planum.errors import Problem, RecipeError, nearest
from planum.records import Step

__all__ = ["check_order", "find_steps", "get_step"]

GROUP = "planum.steps"


@cache
def find_steps() -> dict[str, Step]:
    """Return the installed steps by name."""
    return plugins.load(GROUP, Step, "step")  # type: ignore[type-abstract]


def get_step(name: str) -> Step:
    """Return one step.

    Raises
    ------
    RecipeError
        When no step of that name is installed.
    """
    steps = find_steps()
    if name not in steps:
        raise RecipeError(_unknown(name))
    return steps[name]


def _unknown(name: str) -> Problem:
    return Problem(
        came=f"there is no step {name!r}", allowed=nearest(name, find_steps()), key="recipe.steps", do="mend the name"
    )


def check_order(names: Sequence[str]) -> None:
    """Refuse an impossible order before any work.

    Raises
    ------
    RecipeError
        With all mistakes: a step that is not installed, that does not take what the step before it gives or comes
        twice, and a last one that does not give an envelope.
    """
    steps, problems = find_steps(), []
    quantity, before = "voltage", "the recorded traces"
    for name in names:
        if name not in steps:
            problems.append(_unknown(name))
            continue
        step = steps[name]
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
    if quantity != "envelope" and not (names and names[-1] not in steps):
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
