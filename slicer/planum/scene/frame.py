"""What surrounds the block: its edges, staffs banded like a surveyor's ranging rod, labels, the north arrow."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pyvista as pv

__all__ = ["Frame", "Label", "frame_of", "round_step"]

Side = Literal["left", "centre", "right"]


@dataclass(frozen=True)
class Label:
    """A text at a place of the scene (m, local, z negative down); ``side`` is the part of the text that sits there."""

    at: tuple[float, float, float]
    text: str
    side: Side = "centre"
    strong: bool = False


@dataclass(frozen=True, eq=False)
class Frame:
    """Edges of the block, dark and light bands of the staffs, north arrow, and the labels."""

    edges: pv.PolyData
    dark: pv.PolyData
    light: pv.PolyData
    north: pv.PolyData
    labels: tuple[Label, ...]


def round_step(length: float, *, parts: int) -> float:
    """Return the least 1-2-5 step that cuts ``length`` into no more than ``parts`` pieces."""
    if length <= 0 or parts < 1:
        raise ValueError(f"a length above 0 and at least 1 part are needed, got {length:g} and {parts}")
    raw = length / parts
    power = 10.0 ** math.floor(math.log10(raw))
    return next(m * power for m in (1, 2, 5, 10) if m * power >= raw * (1 - 1e-9))


def frame_of(
    box: tuple[float, float, float, float, float, float],
    *,
    origin: tuple[float, float],
    exaggeration: float,
    placed: bool = True,
) -> Frame:
    """Return the frame of a block.

    Parameters
    ----------
    box
        West, east, south, north, bottom, top in m, local, true depths.
    origin
        Map coordinates of local (0, 0), m: named in the axes' titles when not zero.
    exaggeration
        How many times taller depths will be drawn: only the thickness of the staffs depends on it.
    placed
        Whether x and y are east and north; otherwise they are the grid's own and are named so.
    """
    west, east, south, north, bottom, top = box
    wide = max(east - west, north - south)
    thick = 0.004 * wide
    off = 0.025 * wide
    dark: list[pv.PolyData] = []
    light: list[pv.PolyData] = []
    labels: list[Label] = []

    def staff(axis: int, ends: tuple[float, float], step: float, at: tuple[float, float, float]) -> None:
        for number, (low, high) in enumerate(_bands(*ends, step)):
            half = [thick, thick, thick / exaggeration]
            middle = list(at)
            middle[axis], half[axis] = (low + high) / 2.0, (high - low) / 2.0
            bar = pv.Box([v for m, h in zip(middle, half, strict=True) for v in (m - h, m + h)])
            (dark if number % 2 == 0 else light).append(bar)

    step = round_step(wide, parts=9)
    staff(0, (west, east), step, (0.0, south - thick, bottom))
    staff(1, (south, north), step, (west - thick, 0.0, bottom))
    low = bottom - 0.012 * wide / exaggeration
    labels += [Label((v, south - off, low), f"{v:g}", "right") for v in _ticks(west, east, step)]
    labels += [Label((west - off, v, low), f"{v:g}", "right") for v in _ticks(south, north - 0.3 * step, step)]
    title = 5.0 * off
    across, up = _axis_titles(origin, placed=placed)
    labels.append(Label(((west + east) / 2, south - title, low), across, "centre", strong=True))
    labels.append(Label((west - title, (south + north) / 2, low), up, "right", strong=True))

    # labels nearer than this would touch
    deep = round_step(top - bottom, parts=max(1, min(5, int((top - bottom) * exaggeration / (0.035 * wide)))))
    corner = (west - thick, north + thick)
    staff(2, (top, bottom), deep, (*corner, 0.0))
    beside = (west - off, north + off / 2.0)
    labels += [Label((*beside, -v), f"{v:g} m", "right") for v in _ticks(-top, -bottom, deep)]
    labels.append(Label((*beside, (top + 0.055 * wide / exaggeration)), "depth", "right", strong=True))

    arrow, tip = _north(east + 0.07 * wide, north - 0.16 * wide, 0.13 * wide)
    labels.append(Label(tip, "N" if placed else "y", "centre", strong=True))
    return Frame(_edges(box), pv.merge(dark), pv.merge(light) if light else pv.PolyData(), arrow, tuple(labels))


def _axis_titles(origin: tuple[float, float], *, placed: bool) -> tuple[str, str]:
    names, link = (("m east", "m north"), " of ") if placed else (("x, m", "y, m"), " from ")
    across, up = (
        name + (f"{link}{o:,.0f}".replace(",", " ") if o else "") for name, o in zip(names, origin, strict=True)
    )
    return across, up


def _bands(start: float, stop: float, step: float) -> list[tuple[float, float]]:
    """Cut from ``start`` to ``stop`` at the multiples of ``step``, lowest value first of each pair."""
    low, high = min(start, stop), max(start, stop)
    cuts = [low, *[float(t) for t in _ticks(low, high, step) if low + 1e-9 < t < high - 1e-9], high]
    bands = list(itertools.pairwise(cuts))
    return bands if start <= stop else bands[::-1]


def _ticks(low: float, high: float, step: float) -> np.ndarray:
    first = math.ceil(low / step - 1e-6)
    last = math.floor(high / step + 1e-6)
    return np.round(step * np.arange(first, last + 1), 9) + 0.0  # the sum turns -0 into 0


def _edges(box: tuple[float, float, float, float, float, float]) -> pv.PolyData:
    west, east, south, north, bottom, top = box
    corners = np.array([(x, y, z) for z in (bottom, top) for y in (south, north) for x in (west, east)], float)
    pairs = [(0, 1), (1, 3), (3, 2), (2, 0), (4, 5), (5, 7), (7, 6), (6, 4), (0, 4), (1, 5), (2, 6), (3, 7)]
    return pv.PolyData(corners, lines=np.array([(2, a, b) for a, b in pairs]).ravel())


def _north(x: float, y: float, length: float) -> tuple[pv.PolyData, tuple[float, float, float]]:
    """Return a flat arrow on the surface pointing along y (north where placed), and the place of its letter."""
    half = 0.2 * length
    points = np.array([(x - half, y, 0), (x, y + 0.22 * length, 0), (x + half, y, 0), (x, y + length, 0)], float)
    faces = np.array([3, 0, 1, 3, 3, 1, 2, 3])
    return pv.PolyData(points, faces=faces), (x, y + 1.25 * length, 0.0)
