"""One line in section: raw, processed and migrated, with time at the left and depth at the right."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Rectangle
from PIL import Image

from planum.outputs.paper import (
    DPI,
    FAINT,
    INK,
    SOFT,
    calm,
    figure,
    picture_of,
    round_step,
    text_height,
    wrapped,
    write_text,
)
from planum.outputs.writing import save_png
from planum.records import Velocity

__all__ = ["DepthScale", "draw_section", "section_greys"]

_LEFT, _RIGHT, _TOP, _GAP, _FOOT = 0.56, 0.78, 0.62, 0.34, 0.5  # in
_WIDTH, _PANEL = 9.0, 1.9  # in


@dataclass(frozen=True)
class DepthScale:
    """What turns time into depth on a picture, and the slices to mark: ``intervals`` are (top, bottom), m."""

    velocity: Velocity
    separation_m: float
    intervals: Sequence[tuple[float, float]] = ()


def draw_section(
    path: Path,
    panels: Mapping[str, np.ndarray],
    along: np.ndarray,
    times: np.ndarray,
    scale: DepthScale,
    *,
    title: str,
    statement: str = "",
) -> None:
    """Draw the panels of one line below each other and write a PNG.

    Parameters
    ----------
    panels
        Name to (n_along, n_time): uint8 greys are drawn as they are, other numbers with :func:`section_greys`.
        Thinned arrays are welcome; all cover the same distances and times.
    along
        Distance of the columns, m, ascending (only its ends are used).
    times
        Two-way time from time zero of the rows, ns, ascending (only its ends are used).
    scale
        Depths at the right and the slices marked there.
    title
        Names the line; the statement's sentence goes below the panels.

    Raises
    ------
    ValueError
        When there is no panel or an axis has no length.
    """
    if not panels:
        raise ValueError("a section needs at least one panel")
    west, east = _edges(along, "along")
    first, last = _edges(times, "times")
    foot = wrapped(statement, width_px=(_WIDTH - _LEFT - _RIGHT) * DPI, points=6.6) if statement else ""
    height = _TOP + len(panels) * (_PANEL + _GAP) - _GAP + _FOOT
    foot_px = text_height(foot, 6.6) + 26 if foot else 0
    fig, canvas = figure(_WIDTH, height + foot_px / DPI)
    total = float(fig.get_size_inches()[1])
    wide = _WIDTH - _LEFT - _RIGHT
    boxes = []
    for index in range(len(panels)):
        top = _TOP + index * (_PANEL + _GAP)
        boxes.append((round(_LEFT * DPI), round(top * DPI), round(wide * DPI), round(_PANEL * DPI)))
        axes = fig.add_axes((_LEFT / _WIDTH, 1 - (top + _PANEL) / total, wide / _WIDTH, _PANEL / total))
        axes.set_xlim(west, east)
        axes.set_ylim(last, first)
        _draw_axes(axes, scale, (first, last), lowest=index == len(panels) - 1)
    canvas.draw()
    picture = picture_of(canvas)
    for (name, values), (left, top, wide_px, tall_px) in zip(panels.items(), boxes, strict=True):
        greys = Image.fromarray(np.ascontiguousarray(section_greys(values).T))
        method = Image.Resampling.BOX if greys.width > wide_px else Image.Resampling.BILINEAR
        picture.paste(greys.resize((wide_px - 2, tall_px - 2), method), (left + 1, top + 1))
        write_text(picture, (left, top - 17), name, 7.5, bold=True)
    write_text(picture, (_LEFT * DPI, 14), title, 11, bold=True)
    if foot:
        write_text(picture, (_LEFT * DPI, height * DPI + 6), foot, 6.6, fill=90)
    save_png(path, picture, title=title, sentence=statement, dpi=DPI)


def section_greys(values: np.ndarray, *, percentile: float = 98.0) -> np.ndarray:
    """Return uint8 greys of a section: 0 is mid grey, positive dark, both signs to the same strength.

    Parameters
    ----------
    values
        (n_along, n_time) numbers of both signs; the percentile of their absolute value is black or white. uint8 comes
        back as it is.
    percentile
        Share of the cells inside the stretch, %.
    """
    if values.dtype == np.uint8:
        return values
    values = np.nan_to_num(np.asarray(values, np.float32))
    full = float(np.percentile(np.abs(values), percentile)) or float(np.abs(values).max(initial=0.0)) or 1.0
    return np.rint(127.5 - 127.0 * np.clip(values / full, -1.0, 1.0)).astype(np.uint8)


def _edges(axis: np.ndarray, name: str) -> tuple[float, float]:
    low, high = float(axis[0]), float(axis[-1])
    if not high > low:
        raise ValueError(f"{name} runs from {low:g} to {high:g}; a section needs an ascending axis")
    return low, high


def _draw_axes(axes: Axes, scale: DepthScale, window: tuple[float, float], *, lowest: bool) -> None:
    """Distance below, time at the left, depth and slices at the right."""
    calm(axes)
    first, last = window
    west, east = axes.get_xlim()
    step = round_step(east - west, 10)
    at = step * np.arange(math.ceil(west / step - 1e-9), math.floor(east / step + 1e-9) + 1)
    axes.set_xticks(at, [f"{v:g}" for v in at] if lowest else [""] * at.size)
    step = round_step(last - first, 5)
    axes.set_yticks(step * np.arange(math.ceil(first / step - 1e-9), math.floor(last / step + 1e-9) + 1))
    axes.set_ylabel("two-way time, ns", fontsize=7, color=SOFT, labelpad=2)
    if lowest:
        axes.set_xlabel("distance along the line, m", fontsize=7, color=SOFT, labelpad=2)
    _draw_depths(axes, scale, window)


def _draw_depths(axes: Axes, scale: DepthScale, window: tuple[float, float]) -> None:
    """Depth ticks where the velocity puts them, slices as a ruler of alternating blocks."""
    first, last = window
    deepest = float(scale.velocity.depth(last, separation_m=scale.separation_m))
    across = axes.get_yaxis_transform()
    ruler = 1.004
    blocks = [
        (scale.velocity.time(interval, separation_m=scale.separation_m), index)
        for index, interval in enumerate(_side_by_side(scale.intervals))
    ]
    for (top, bottom), index in blocks:
        if top >= last:
            continue
        axes.add_patch(
            Rectangle(
                (ruler, top), 0.007, min(bottom, last) - top, transform=across, clip_on=False, lw=0.5, ec=INK,
                fc=INK if index % 2 == 0 else "white",
            )
        )  # fmt: skip
    start = ruler + (0.007 if blocks else 0.0)
    step = round_step(max(deepest, 1e-3), 6)
    for depth in step * np.arange(math.floor(deepest / step + 1e-9) + 1):
        at = float(scale.velocity.time(depth, separation_m=scale.separation_m))
        if first <= at <= last:
            axes.plot([start, start + 0.005], [at, at], transform=across, clip_on=False, color=INK, lw=0.7)
            axes.text(start + 0.009, at, f"{depth:g}", transform=across, fontsize=7.5, color=SOFT, va="center_baseline")
    axes.text(
        1.075, 0.5, "depth, m", transform=axes.transAxes, rotation=90, fontsize=7, color=SOFT, va="center", ha="center"
    )
    zero = float(scale.velocity.time(0.0, separation_m=scale.separation_m))
    if first < zero < last:
        axes.axhline(zero, color=FAINT, lw=0.6)


def _side_by_side(intervals: Sequence[tuple[float, float]]) -> list[tuple[float, float]]:
    """Return those intervals that do not overlap an earlier one, so that the ruler can be read."""
    kept: list[tuple[float, float]] = []
    for top, bottom in intervals:
        if not kept or top >= kept[-1][1] - 1e-9:
            kept.append((top, bottom))
    return kept
