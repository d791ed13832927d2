"""What all drawn pictures share: figure without a window, greys, round steps, wrapped text."""

from __future__ import annotations

import math
from functools import lru_cache
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image, ImageDraw, ImageFont

__all__ = [
    "DPI",
    "FAINT",
    "INK",
    "SOFT",
    "calm",
    "figure",
    "font",
    "picture_of",
    "round_step",
    "text_height",
    "wrapped",
    "write_text",
]

DPI = 120.0
INK, SOFT, FAINT = "#1c1c1c", "#5a5a5a", "#c4c4c4"


def figure(width_in: float, height_in: float) -> tuple[Figure, FigureCanvasAgg]:
    """Return a white figure and its canvas; sizes are whole pixels at :data:`DPI`."""
    size = (math.ceil(width_in * DPI) / DPI, math.ceil(height_in * DPI) / DPI)
    fig = Figure(figsize=size, dpi=DPI, facecolor="white")
    return fig, FigureCanvasAgg(fig)


def picture_of(canvas: FigureCanvasAgg) -> Image.Image:
    """Return the drawn canvas as a grey picture; everything drawn here is grey."""
    return Image.fromarray(np.ascontiguousarray(np.asarray(canvas.buffer_rgba())[..., 0]))


def round_step(length: float, at_most: float) -> float:
    """Return the smallest of 1, 2, 5 times a power of ten that divides ``length`` into at most ``at_most`` parts.

    >>> round_step(8.0, 5), round_step(8.0, 4), round_step(0.3, 5)
    (2.0, 2.0, 0.1)
    """
    least = length / at_most
    power = 10.0 ** math.floor(math.log10(least))
    for factor in (1.0, 2.0, 5.0, 10.0):
        if factor * power >= least * (1 - 1e-9):
            return float(f"{factor * power:.6g}")
    raise AssertionError("unreachable")


@lru_cache
def font(points: float, *, bold: bool = False) -> ImageFont.FreeTypeFont:
    """Return the typeface matplotlib brings, for text drawn straight into a finished picture."""
    name = "DejaVuSans-Bold.ttf" if bold else "DejaVuSans.ttf"
    path = Path(mpl.get_data_path()) / "fonts" / "ttf" / name
    return ImageFont.truetype(str(path), points * DPI / 72, layout_engine=ImageFont.Layout.BASIC)


def wrapped(text: str, *, width_px: float, points: float) -> str:
    """Break running text into lines no wider than ``width_px``."""
    face, lines = font(points), [""]
    for word in text.split():
        longer = f"{lines[-1]} {word}" if lines[-1] else word
        if lines[-1] and face.getlength(longer) > width_px:
            lines.append(word)
        else:
            lines[-1] = longer
    return "\n".join(lines)


def write_text(picture: Image.Image, at: tuple[float, float], text: str, points: float, **more: Any) -> None:
    """Write text into a grey picture; ``at`` is the upper left corner in pixels, ``fill`` a grey, ``bold`` allowed."""
    face = font(points, bold=bool(more.pop("bold", False)))
    ImageDraw.Draw(picture).text(at, text, font=face, **{"spacing": points * 0.75, "fill": 28, **more})


def write_upright(picture: Image.Image, at: tuple[float, float], text: str, points: float, *, fill: int = 90) -> None:
    """Write text that reads upwards, its middle at ``at`` (pixels)."""
    face = font(points)
    right, bottom = (math.ceil(v) for v in face.getbbox(text)[2:])
    ink = Image.new("L", (right + 2, bottom + 2), 0)
    ImageDraw.Draw(ink).text((0, 0), text, font=face, fill=255)
    ink = ink.rotate(90, expand=True)
    picture.paste(fill, (round(at[0] - ink.width / 2), round(at[1] - ink.height / 2)), ink)


def text_height(text: str, points: float) -> float:
    """Height in pixels of text written by :func:`write_text`."""
    lines = text.count("\n") + 1
    return lines * points * DPI / 72 * 1.0 + (lines - 1) * points * 0.75


def calm(axes: Axes) -> None:
    """Thin frame, small outward ticks, soft labels."""
    for spine in axes.spines.values():
        spine.set_linewidth(0.7)
        spine.set_color(INK)
    axes.tick_params(width=0.7, length=3.5, color=INK, labelsize=7.5, labelcolor=SOFT, pad=2.5)
