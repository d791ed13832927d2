"""One line in section: raw, processed and migrated, with time at the left and depth at the right."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from PIL import Image, ImageDraw

from planum.outputs.paper import DPI, round_step, text_height, wrapped, write_text, write_upright
from planum.outputs.writing import save_png
from planum.records import Velocity

__all__ = ["DepthScale", "SectionText", "draw_section", "section_greys"]

# Drawn straight into the picture: a survey has a section per line, and axes objects would take most of the time.
_LEFT, _RIGHT, _TOP, _GAP, _AXIS = 64, 88, 76, 40, 46  # pixels: margins, between panels, below the last one
_WIDE, _TALL = 928, 228  # pixels of one panel
_INK, _SOFT = 28, 90  # greys
_TICKS, _FOOT = 7.5, 6.8  # points


@dataclass(frozen=True)
class DepthScale:
    """What turns time into depth on a picture, and the slices to mark: ``intervals`` are (top, bottom), m."""

    velocity: Velocity
    separation_m: float
    intervals: Sequence[tuple[float, float]] = ()


@dataclass(frozen=True)
class SectionText:
    """What names the line, the survey and visit below it, and the sentence below the panels."""

    title: str
    heading: str = ""
    statement: str = ""


def draw_section(
    path: Path,
    panels: Mapping[str, np.ndarray],
    along: np.ndarray,
    times: np.ndarray,
    scale: DepthScale,
    *,
    text: SectionText,
    recorded: np.ndarray | None = None,
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
    text
        Above and below the panels.
    recorded
        (n_along of the unthinned line) bool: columns without a recording are hatched as unknown ground is in slices.

    Raises
    ------
    ValueError
        When there is no panel or an axis has no length.
    """
    if not panels:
        raise ValueError("a section needs at least one panel")
    span, window = _edges(along, "along"), _edges(times, "times")
    foot = wrapped(text.statement, width_px=_WIDE, points=_FOOT) if text.statement else ""
    below = _TOP + len(panels) * (_TALL + _GAP) - _GAP + _AXIS
    height = below + (round(text_height(foot, _FOOT)) + 24 if foot else 8)
    picture = Image.new("L", (_LEFT + _WIDE + _RIGHT, height), 255)
    if recorded is not None:
        hatching, gaps = _hatching(), _gaps(recorded)
    for index, (name, values) in enumerate(panels.items()):
        top = _TOP + index * (_TALL + _GAP)
        greys = Image.fromarray(np.ascontiguousarray(section_greys(values).T))
        method = Image.Resampling.BOX if greys.width > _WIDE else Image.Resampling.BILINEAR
        picture.paste(greys.resize((_WIDE, _TALL), method), (_LEFT, top))
        if recorded is not None:
            picture.paste(hatching, (_LEFT, top), gaps)
        ImageDraw.Draw(picture).rectangle((_LEFT - 1, top - 1, _LEFT + _WIDE, top + _TALL), outline=_INK)
        write_text(picture, (_LEFT, top - 19), name, 8, bold=True)
        _draw_distance(picture, top + _TALL, span, labels=index == len(panels) - 1)
        _draw_times(picture, top, window)
        _draw_depths(picture, top, window, scale)
    write_text(picture, (_LEFT, 12), text.title, 12, bold=True)
    write_text(picture, (_LEFT, 36), text.heading, 7.5, fill=_SOFT)
    if foot:
        write_text(picture, (_LEFT, below + 6), foot, _FOOT, fill=_SOFT)
    save_png(path, picture, title=text.title, sentence=text.statement, dpi=DPI)


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


def _hatching() -> Image.Image:
    lines = np.add.outer(np.arange(_TALL), np.arange(_WIDE)) % 7 == 0
    return Image.fromarray(np.where(lines, 205, 255).astype(np.uint8))


def _gaps(recorded: np.ndarray) -> Image.Image:
    """Return the mask of the picture's columns whose nearest trace was not recorded."""
    nearest = np.floor((np.arange(_WIDE) + 0.5) / _WIDE * recorded.size).astype(int)
    row = np.where(recorded[nearest], 0, 255).astype(np.uint8)
    return Image.fromarray(np.ascontiguousarray(np.broadcast_to(row, (_TALL, _WIDE))))


def _edges(axis: np.ndarray, name: str) -> tuple[float, float]:
    low, high = float(axis[0]), float(axis[-1])
    if not high > low:
        raise ValueError(f"{name} runs from {low:g} to {high:g}; a section needs an ascending axis")
    return low, high


def _ticks(low: float, high: float, at_most: float) -> np.ndarray:
    step = round_step(high - low, at_most)
    return step * np.arange(math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9) + 1)


def _draw_distance(picture: Image.Image, y: int, span: tuple[float, float], *, labels: bool) -> None:
    draw = ImageDraw.Draw(picture)
    for at in _ticks(*span, 10):
        x = round(_LEFT + (at - span[0]) / (span[1] - span[0]) * (_WIDE - 1))
        draw.line((x, y, x, y + 5), fill=_INK)
        if labels:
            write_text(picture, (x, y + 8), f"{at:g}", _TICKS, anchor="ma", fill=_SOFT)
    if labels:
        write_text(picture, (_LEFT + _WIDE / 2, y + 24), "distance along the line, m", _TICKS, anchor="ma", fill=_SOFT)


def _draw_times(picture: Image.Image, top: int, window: tuple[float, float]) -> None:
    draw = ImageDraw.Draw(picture)
    for at in _ticks(*window, 5):
        y = _row(at, top, window)
        draw.line((_LEFT - 6, y, _LEFT - 1, y), fill=_INK)
        write_text(picture, (_LEFT - 9, y), f"{at:g}", _TICKS, anchor="rm", fill=_SOFT)
    write_upright(picture, (18, top + _TALL / 2), "two-way time, ns", _TICKS, fill=_SOFT)


def _draw_depths(picture: Image.Image, top: int, window: tuple[float, float], scale: DepthScale) -> None:
    """Depth ticks where the velocity puts them, slices as a ruler of alternating blocks."""
    draw = ImageDraw.Draw(picture)
    separation = scale.separation_m
    left = _LEFT + _WIDE + 5
    right = left
    for index, interval in enumerate(_side_by_side(scale.intervals)):
        first, last = (float(t) for t in scale.velocity.time(interval, separation_m=separation))
        if first < window[1] and last > window[0]:
            right = left + 6
            rows = _row(max(first, window[0]), top, window), _row(min(last, window[1]), top, window)
            draw.rectangle((left, rows[0], right, rows[1]), outline=_INK, fill=_INK if index % 2 == 0 else 255)
    deepest = float(scale.velocity.depth(window[1], separation_m=separation))
    previous = -math.inf
    for depth in _ticks(0.0, max(deepest, 1e-3), 6):
        at = float(scale.velocity.time(depth, separation_m=separation))
        if not window[0] <= at <= window[1]:
            continue
        y = _row(at, top, window)
        draw.line((right + 1, y, right + 6, y), fill=_INK)
        if y - previous >= 13:
            write_text(picture, (right + 10, y), f"{depth:g}", _TICKS, anchor="lm", fill=_SOFT)
            previous = y
    write_upright(picture, (picture.width - 18, top + _TALL / 2), "depth, m", _TICKS, fill=_SOFT)


def _row(time: float, top: int, window: tuple[float, float]) -> int:
    return round(top + (time - window[0]) / (window[1] - window[0]) * (_TALL - 1))


def _side_by_side(intervals: Sequence[tuple[float, float]]) -> list[tuple[float, float]]:
    """Return those intervals that do not overlap an earlier one, so that the ruler can be read."""
    kept: list[tuple[float, float]] = []
    for top, bottom in intervals:
        if not kept or top >= kept[-1][1] - 1e-9:
            kept.append((top, bottom))
    return kept
