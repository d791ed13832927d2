"""Positions in SEG-Y trace headers: scalars, units, which of three places holds them."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from planum.errors import Problem
from planum.lines.segy_format import TRACE

__all__ = ["header_positions"]

_FOOT = 0.3048  # m, international foot, exact (by definition, 1959)
_ANGULAR = {2: "arc-seconds", 3: "decimal degrees", 4: "degrees, minutes, seconds"}
_INSTEAD = "give start and end in the line register, or a projected track"
_SCALARS = (1, 10, 100, 1000, 10000)


def header_positions(
    heads: np.ndarray, order: str, *, feet: bool, file: str
) -> tuple[np.ndarray | None, np.ndarray | None, list[Problem]]:
    """Return x, y (trace) in m and problems, from trace headers (trace, 240) uint8.

    The midpoint of source and group where both are filled in, else the one that is, else the ensemble's place.
    The scalar's magnitude multiplies, or divides when it is negative; 0 counts as 1 (SEG-Y, trace bytes 71-72).
    Angles need a projection and are not read: x, y are None and a problem says so.
    """

    def column(name: str) -> np.ndarray:
        return TRACE[name].column(heads, order)

    def problem(came: str, do: str, at: str) -> Problem:
        return Problem(came=came, do=do, file=file, byte=TRACE[at].byte, key="header positions", severity="warning")

    angular = sorted(set(np.unique(column("unit")).tolist()) - {0, 1})
    if angular:
        names = ", ".join(_ANGULAR.get(u, f"unknown unit {u}") for u in angular)
        came = f"header coordinates in {names} are not used: they need a projection, which is not yet supported"
        return None, None, [problem(came, _INSTEAD, "unit")]
    x, y = _raw(column)
    if x is None or y is None:
        return None, None, [problem("no coordinates in the trace headers", _INSTEAD, "source_x")]
    scalar = column("scalar")
    problems = []
    odd = sorted(set(np.abs(scalar).tolist()) - {0, *_SCALARS})
    if odd:
        problems.append(
            problem(
                f"coordinate scalar {odd[0]} is none of the standard's ±1 to ±10000", "check the coordinates", "scalar"
            )
        )
    magnitude = np.maximum(np.abs(scalar), 1).astype(float)
    factor = (_FOOT if feet else 1.0) * np.where(scalar < 0, 1.0 / magnitude, magnitude)
    return x * factor, y * factor, problems


def _raw(column: Callable[[str], np.ndarray]) -> tuple[np.ndarray | None, np.ndarray | None]:
    """Unscaled coordinates of the fullest place."""
    places = [(column(f"{p}_x").astype(float), column(f"{p}_y").astype(float)) for p in ("source", "group", "ensemble")]
    source, group, ensemble = places
    filled = [bool(x.any() or y.any()) for x, y in places]
    if filled[0] and filled[1]:
        return (source[0] + group[0]) / 2, (source[1] + group[1]) / 2
    for place, there in zip((source, group, ensemble), filled, strict=True):
        if there:
            return place
    return None, None
