"""The depth intervals slices are taken over."""

from __future__ import annotations

import math

from planum.errors import Problem, RecipeError

__all__ = ["intervals"]

_MOST = 10_000


def intervals(top_m: float, bottom_m: float, thickness_m: float, step_m: float) -> tuple[tuple[float, float], ...]:
    """Return (top, bottom) of every interval, in m below the surface, from the top down.

    Intervals start at ``top_m`` and every ``step_m`` below it, as long as they end at or above ``bottom_m``. They
    overlap when the step is smaller than the thickness. Edges are rounded to the nanometre, so that 0.1 is 0.1.

    Raises
    ------
    RecipeError
        For a thickness or step that is not positive, a range that holds no interval, or more than 10 000 of them.
    """
    for name, value in (("thickness_m", thickness_m), ("step_m", step_m)):
        if not (math.isfinite(value) and value > 0):
            raise RecipeError(Problem(f"{name} is {value:g}", allowed="a positive number of m", key=f"slices.{name}"))
    room = bottom_m - top_m - thickness_m
    if not (top_m >= 0 and math.isfinite(room) and room >= -1e-9):
        raise RecipeError(
            Problem(
                f"top_m {top_m:g}, bottom_m {bottom_m:g} and thickness_m {thickness_m:g} leave no interval",
                allowed="0 <= top_m, and bottom_m at least one thickness below",
                key="slices",
            )
        )
    count = math.floor(room / step_m + 1e-6) + 1
    if count > _MOST:
        raise RecipeError(
            Problem(f"{count} intervals", allowed=f"at most {_MOST}", do="widen step_m", key="slices.step_m")
        )
    tops = [top_m + k * step_m for k in range(count)]
    return tuple((round(t, 9), round(t + thickness_m, 9)) for t in tops)
