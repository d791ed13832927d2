"""One picture per slice and a contact sheet of all: grey, strong = dark, one stretch."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.patches import Polygon, Rectangle
from PIL import Image, ImageDraw

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
from planum.outputs.raster import Raster, check_statements, plane, raster_of, slice_label, slice_name
from planum.outputs.stretch import GREY_NODATA, Stretch, grey
from planum.outputs.writing import joined, save_png, statement_text
from planum.records import Statement

__all__ = ["SlicePainter", "draw_contact_sheet", "draw_slices"]

_LONGEST, _SHORTEST, _COLUMN = 7.0, 3.1, 1.95  # in: map's longer side, height and width of the column at the right
_LEFT, _RIGHT, _TOP, _GAP, _BELOW = 0.62, 0.2, 0.62, 0.3, 0.48  # in: margins; below the map for its tick labels
_CAPTION, _CAUTIONS = 7.0, 6.2  # points


def draw_slices(
    folder: Path,
    slices: xr.Dataset,
    statements: Sequence[Statement],
    stretch: Stretch,
    *,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[Path, ...]:
    """Draw ``<code>_d040-050cm.png`` for every slice and return the paths in depth order.

    Parameters
    ----------
    slices
        Slice stack, north-up; read one plane at a time.
    progress
        Called with (done, total).

    Raises
    ------
    ValueError
        When the stack is not north-up and square, or statements do not belong to it.
    """
    check_statements(slices, statements)
    code, title = str(slices.attrs["code"]), str(slices.attrs.get("title", ""))
    painter = SlicePainter(raster_of(slices), stretch, title=title or code, sample=statements[0])
    paths = []
    for index, statement in enumerate(statements):
        path = folder / f"{slice_name(code, statement.top_m, statement.bottom_m)}.png"
        painter.draw(path, plane(slices, index), statement)
        paths.append(path)
        if progress is not None:
            progress(index + 1, len(statements))
    return tuple(paths)


class SlicePainter:
    """Draws slices of one raster: frame, key and scale are drawn once, every slice is laid over them."""

    def __init__(self, raster: Raster, stretch: Stretch, *, title: str, sample: Statement) -> None:
        self._stretch, self._title = stretch, title
        span_x, span_y = raster.width * raster.cell_m, raster.height * raster.cell_m
        per_m = _LONGEST / max(span_x, span_y)
        map_w, map_h = span_x * per_m, span_y * per_m
        width = _LEFT + max(map_w, 3.2) + _GAP + _COLUMN + _RIGHT
        # A flat map leaves room for the caption beside the column, a tall one below it.
        text_in = width - _LEFT - _RIGHT if map_h + _BELOW >= _SHORTEST else max(map_w, 3.2)
        self._text_px = text_in * DPI
        self._text_top = (_TOP + map_h + _BELOW) * DPI
        foot = (self._foot(sample)[2] + 24) / DPI
        height = max(_TOP + map_h + _BELOW + foot, _TOP + _SHORTEST + 0.15)
        fig, canvas = figure(width, height)
        width, height = (float(v) for v in fig.get_size_inches())

        def axes(left: float, top: float, wide: float, tall: float) -> Axes:
            return fig.add_axes((left / width, 1 - (top + tall) / height, wide / width, tall / height))

        _draw_frame(axes(_LEFT, _TOP, map_w, map_h), raster, per_m)
        _draw_column(axes(_LEFT + map_w + _GAP, _TOP, _COLUMN, _SHORTEST), stretch, per_m=per_m, north=bool(raster.crs))
        canvas.draw()
        self._ground = picture_of(canvas)
        self._box = (round(_LEFT * DPI) + 1, round(_TOP * DPI) + 1, round(map_w * DPI) - 1, round(map_h * DPI) - 1)
        right = self._ground.width - _RIGHT * DPI
        write_text(self._ground, (right, 0.22 * DPI), title, 9, anchor="ra", fill=90)

    def draw(self, path: Path, values: np.ndarray, statement: Statement) -> None:
        """Draw one slice (y, x) with its statement."""
        left, top, wide, tall = self._box
        picture = self._ground.copy()
        greys = Image.fromarray(grey(values, self._stretch)).resize((wide, tall), Image.Resampling.NEAREST)
        picture.paste(greys, (left, top), greys.point([255] * GREY_NODATA + [0] * (256 - GREY_NODATA)))
        label = slice_label(statement.top_m, statement.bottom_m)
        write_text(picture, (_LEFT * DPI, 0.14 * DPI), f"{label}  ± {statement.depth_error_m:.2f} m", 14, bold=True)
        if statement.in_noise:
            write_text(picture, (_LEFT * DPI, 0.38 * DPI), "in noise: only strong reflectors show", 8, fill=90)
        caption, cautions, _ = self._foot(statement)
        write_text(picture, (_LEFT * DPI, self._text_top), caption, _CAPTION)
        below = self._text_top + text_height(caption, _CAPTION) + 14
        write_text(picture, (_LEFT * DPI, below), cautions, _CAUTIONS, fill=90)
        save_png(
            path,
            picture,
            title=f"{self._title}, {label}",
            sentence=statement.sentence(),
            statement=statement_text(statement),
            dpi=DPI,
        )

    def _foot(self, statement: Statement) -> tuple[str, str, float]:
        """Return caption and cautions, broken into lines, and their height in pixels."""
        sentence = statement.sentence()
        caption = wrapped(sentence[:1].upper() + sentence[1:], width_px=self._text_px, points=_CAPTION)
        cautions = wrapped(" ".join(statement.cautions), width_px=self._text_px, points=_CAUTIONS)
        return caption, cautions, text_height(caption, _CAPTION) + 14 + text_height(cautions, _CAUTIONS)


def _draw_frame(axes: Axes, raster: Raster, per_m: float) -> None:
    """Draw the map's frame with its coordinates; what no slice covers shows the hatching."""
    west, south, east, north = raster.bounds
    axes.add_patch(Rectangle((west, south), east - west, north - south, fc="white", ec=FAINT, hatch="////", lw=0))
    axes.set_xlim(west, east)
    axes.set_ylim(south, north)
    calm(axes)
    longest = max(east - west, north - south)
    for axis, low, high in ((axes.xaxis, west, east), (axes.yaxis, south, north)):
        step = round_step(high - low, max(2.5, 6 * (high - low) / longest))
        at = step * np.arange(math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9) + 1)
        digits = 0 if step >= 1 else 1 if step >= 0.1 else 2
        clear = 0.4 / per_m  # labels near a corner would meet those of the other axis
        labels = [f"{v:.{digits}f}" if low + clear <= v <= high - clear / 2 else "" for v in at]
        axis.set_ticks(at, labels)
    axes.tick_params(axis="y", labelrotation=90)
    for label in axes.get_yticklabels():
        label.set_verticalalignment("center")
    names = ("easting, m", "northing, m") if raster.crs else ("x, m", "y, m")
    axes.set_xlabel(names[0], fontsize=7, color=SOFT, labelpad=2)
    axes.set_ylabel(names[1], fontsize=7, color=SOFT, labelpad=2)


def _draw_column(axes: Axes, stretch: Stretch, *, per_m: float, north: bool) -> None:
    """Draw key, scale bar and north arrow; the axes are in inches from the lower left."""
    text: dict[str, Any] = {"fontsize": 7.5, "color": SOFT, "va": "center"}
    # Key: white at the bottom, black at the top, as grey() paints.
    top, tall = _SHORTEST - 0.01, 1.3
    ramp = np.linspace(0, 254, 255)[:, None]
    axes.imshow(ramp, cmap="gray", vmin=0, vmax=254, extent=(0.01, 0.21, top - tall, top), aspect="auto")
    axes.set_xlim(0, _COLUMN)
    axes.set_ylim(0, _SHORTEST)
    axes.axis("off")
    axes.add_patch(Rectangle((0.01, top - tall), 0.2, tall, fc="none", ec=INK, lw=0.7))
    axes.text(0.3, top - 0.06, f"{stretch.high:.4g} and more", **text)
    axes.text(0.3, top - tall / 2, "amplitude,\nlinear", linespacing=1.3, **text)
    axes.text(0.3, top - tall + 0.06, f"{stretch.low:.4g} and less", **text)
    low = top - tall - 0.34
    axes.add_patch(Rectangle((0.01, low), 0.2, 0.18, fc="white", ec=FAINT, hatch="//////", lw=0))
    axes.add_patch(Rectangle((0.01, low), 0.2, 0.18, fc="none", ec=INK, lw=0.7))
    axes.text(0.3, low + 0.09, "no data", **text)
    _scale_bar(axes, low - 0.58, per_m, text)
    _arrow(axes, 0.12, low - 1.3, north=north)


def _scale_bar(axes: Axes, y: float, per_m: float, text: dict[str, Any]) -> None:
    """Draw the longest bar of 1, 2 or 5 times a power of ten that fits the column, in four parts."""
    room = (_COLUMN - 0.3) / per_m
    power = 10.0 ** math.floor(math.log10(room))
    length = max(f * power for f in (1, 2, 5) if f * power <= room * (1 + 1e-9))
    for part in range(4):
        colour = INK if part % 2 == 0 else "white"
        quarter = length * per_m / 4
        axes.add_patch(Rectangle((0.01 + part * quarter, y), quarter, 0.07, fc=colour, ec=INK, lw=0.7))
    axes.text(0.01, y + 0.16, "0", ha="left", **text)
    axes.text(0.01 + length * per_m, y + 0.16, f"{length:g} m", ha="center", **text)


def _arrow(axes: Axes, x: float, y: float, *, north: bool) -> None:
    """North arrow; in a local frame the arrow shows the frame's y, whose direction is not known."""
    axes.add_patch(Polygon([(x, y + 0.42), (x - 0.1, y), (x, y + 0.09)], closed=True, fc=INK, ec=INK, lw=0.7))
    axes.add_patch(Polygon([(x, y + 0.42), (x + 0.1, y), (x, y + 0.09)], closed=True, fc="white", ec=INK, lw=0.7))
    words = "grid north" if north else "y of the local frame"
    axes.text(x + 0.2, y + 0.19, words, fontsize=7.5, color=SOFT, va="center")


def draw_contact_sheet(
    path: Path, slices: xr.Dataset, statements: Sequence[Statement], stretch: Stretch, *, width_px: int = 1600
) -> None:
    """Draw all slices small, in reading order, shallow to deep; thumbnails are averaged over cells.

    Raises
    ------
    ValueError
        When the stack is not north-up and square, or statements do not belong to it.
    """
    check_statements(slices, statements)
    raster = raster_of(slices)
    n, aspect = len(statements), raster.width / raster.height
    edge, gap, label = 40, 14, 26
    columns = min(n, max(1, round(math.sqrt(n * 1.35 / aspect))))
    wide = min((width_px - 2 * edge - (columns - 1) * gap) // columns, 620)
    tall = max(1, round(wide / aspect))
    rows = math.ceil(n / columns)
    across = max(columns * wide + (columns - 1) * gap, 560)
    cautions = wrapped(" ".join(statements[0].cautions), width_px=across, points=_CAUTIONS)
    foot = round(text_height(cautions, _CAUTIONS)) + 40
    name = str(slices.attrs.get("title") or slices.attrs["code"])
    first, last = statements[0], statements[-1]
    facts = (
        f"{n} depth slices, {first.top_m:.2f} to {last.bottom_m:.2f} m below {first.surface}; amplitude {stretch.text};"
        f" {'north is up' if raster.crs else 'y of the local frame is up'}; hatched: no data"
    )
    facts = wrapped(facts, width_px=across, points=8)
    head = 70 + round(text_height(facts, 8))
    size = (2 * edge + across, head + rows * (tall + label + gap) + foot)
    sheet = Image.new("L", size, 255)
    write_text(sheet, (edge, 24), name, 13, bold=True)
    write_text(sheet, (edge, 58), facts, 8, fill=90)
    for index, statement in enumerate(statements):
        left = edge + (index % columns) * (wide + gap)
        top = head + (index // columns) * (tall + label + gap)
        write_text(sheet, (left, top + 6), slice_label(statement.top_m, statement.bottom_m), 8)
        if statement.in_noise and wide >= 190:
            write_text(sheet, (left + wide, top + 8), "in noise", 6.5, anchor="ra", fill=90)
        sheet.paste(_thumbnail(grey(plane(slices, index), stretch), (wide, tall)), (left, top + label))
    write_text(sheet, (edge, size[1] - foot + 12), cautions, _CAUTIONS, fill=90)
    said = statement_text(joined([s.tags() for s in statements]))
    save_png(path, sheet, title=f"{name}, {n} depth slices", sentence=facts.replace("\n", " "), statement=said)


def _thumbnail(greys: np.ndarray, size: tuple[int, int]) -> Image.Image:
    """Return greys (y, x) averaged to a size, hatched where nothing is known; such cells do not count."""
    pair = np.stack([greys, np.where(greys == GREY_NODATA, 0, 255).astype(np.uint8)], -1)
    small = Image.fromarray(pair, "LA").resize(size, Image.Resampling.BOX)
    # tight and never quite white, or a missing line, a few pixels wide, would pass for weak ground
    paper = Image.fromarray(
        np.where(np.add.outer(np.arange(size[1]), np.arange(size[0])) % 4 == 0, 150, 236).astype("u1")
    )
    paper.paste(small.getchannel("L"), (0, 0), small.getchannel("A"))
    ImageDraw.Draw(paper).rectangle((0, 0, size[0] - 1, size[1] - 1), outline=150)
    return paper
