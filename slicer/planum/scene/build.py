"""From slices to a scene: block, isosurface, one movable slice, lines on the surface, and what is said beside them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import pyvista as pv
import xarray as xr

from planum.constants import CAUTIONS
from planum.scene.frame import Frame, frame_of
from planum.scene.volume import Block, block_from, contour, plane

__all__ = ["ISO_QUANTILES", "Scene", "build_scene"]

ISO_QUANTILES = (0.5, 0.999)
"""The default isosurface lies halfway between these quantiles of the known cells: half height is where a body's edge
is usually read, and neither quantile heeds a few wild cells."""
SPECK_CELLS = 5
"""Bodies less wide in plan are left out: a cell is a fifth of the line spacing by default, and what one line alone
has seen has no shape."""
STRETCH = (0.02, 0.995)
"""Quantiles of the known cells drawn lightest and darkest, one stretch for all depths."""
SHAPE = 0.16
"""Least height of the block as a share of its width: below it depths are drawn taller, by a whole number, and said."""

Lines = Sequence[tuple[str, np.ndarray]]


@dataclass(frozen=True, eq=False)
class Scene:
    """What is drawn. Meshes are in m from ``block.origin`` with z = -depth, never exaggerated themselves.

    ``isosurface`` is empty when nothing reaches ``level``; ``plane`` is the slice number ``index``.
    """

    title: str
    code: str
    block: Block
    isosurface: pv.PolyData
    plane: pv.ImageData
    lines: pv.PolyData
    frame: Frame
    level: float
    level_origin: str
    index: int
    stretch: tuple[float, float]
    exaggeration: float

    @property
    def depth_m(self) -> float:
        """Centre of the drawn slice, m below the surface."""
        return float(self.block.depth[self.index])

    @property
    def width_m(self) -> float:
        """Longer side of the block in plan, m."""
        west, east, south, north, _, _ = self.block.box
        return max(east - west, north - south)

    def at_level(self, level: float) -> Scene:
        """Return the scene with its isosurface at another level."""
        return replace(
            self, level=level, level_origin="chosen", isosurface=contour(self.block, level, least_m=_speck(self.block))
        )

    def at_slice(self, index: int) -> Scene:
        """Return the scene with another slice; indices beyond the ends give the end."""
        index = min(max(index, 0), self.block.depth.size - 1)
        return replace(self, index=index, plane=plane(self.block, index))

    def slice_text(self) -> str:
        """Return the depth interval of the slice with its error."""
        top, bottom = self.block.bounds_m[self.index]
        return f"slice {top:.2f} to {bottom:.2f} m, ± {self.block.error_m[self.index]:.2f} m"

    def level_text(self) -> str:
        """Return the level of the isosurface and where it comes from."""
        if self.block.depth.size < 2:
            return "one slice: no isosurface"
        if self.isosurface.n_cells == 0:
            return f"nothing reaches amplitude {_plain(self.level)}"
        return f"isosurface at amplitude {_plain(self.level)} ({self.level_origin})"

    def notes(self) -> tuple[str, ...]:
        """Return what must be known to read the picture: exaggeration, thinning."""
        notes = []
        if self.isosurface.n_cells:
            notes.append(f"bodies under {_speck(self.block):.2g} m across left out")
        if self.exaggeration != 1.0:
            notes.append(f"depths drawn {self.exaggeration:g} times taller")
        if self.block.thinned > 1:
            notes.append(f"drawn as means of {self.block.thinned} x {self.block.thinned} cells")
        return tuple(notes)

    @property
    def caution(self) -> str:
        """The caution every picture carries."""
        return CAUTIONS[0]


def build_scene(
    slices: xr.Dataset,
    *,
    lines: Lines = (),
    level: float | None = None,
    slice_depth: float | None = None,
    exaggeration: float | None = None,
) -> Scene:
    """Return the scene of a slice stack.

    Parameters
    ----------
    slices
        ``amplitude(depth, y, x)`` with NaN where nothing is known, ``depth_bounds``, ``depth_error``; m.
    lines
        Name and (n, 2) map x, y in m of each recorded line.
    level
        Amplitude of the isosurface; by default halfway between the median and the 0.999 quantile.
    slice_depth
        Depth in m whose slice is drawn (the nearest); by default the depth with the strongest features, measured
        as the 0.99 quantile above the median.
    exaggeration
        How many times taller depths are drawn; by default 1, or the whole number that keeps a flat site readable.

    Raises
    ------
    ValueError
        When it is not a slice stack, when all of it is unknown, or when a number is out of range.
    """
    block = block_from(slices)
    known = block.amplitude[np.isfinite(block.amplitude)]
    if known.size == 0:
        raise ValueError("the slices hold no known cell; there is nothing to draw")
    origin = "chosen"
    if level is None:
        level = float(np.mean(np.quantile(known, ISO_QUANTILES)))
        origin = "halfway from the median to the strongest thousandth"
    if exaggeration is None:
        exaggeration = _exaggeration(block)
    if not (np.isfinite(level) and np.isfinite(exaggeration) and exaggeration > 0):
        raise ValueError(f"level and exaggeration must be finite, exaggeration above 0; got {level}, {exaggeration}")
    index = _strongest(block) if slice_depth is None else int(np.argmin(np.abs(block.depth - slice_depth)))
    low, high = (float(q) for q in np.quantile(known, STRETCH))
    return Scene(
        title=str(slices.attrs.get("title", "")),
        code=str(slices.attrs.get("code", "")),
        block=block,
        isosurface=contour(block, level, least_m=_speck(block)),
        plane=plane(block, index),
        lines=_polylines(lines, block.origin),
        frame=frame_of(block.box, origin=block.origin, exaggeration=exaggeration),
        level=level,
        level_origin=origin,
        index=index,
        stretch=(low, high if high > low else low + 1.0),
        exaggeration=exaggeration,
    )


def _plain(value: float) -> str:
    """Three digits, or whole numbers in groups of three where they are large; never a power of ten for people."""
    return f"{value:.3g}" if abs(value) < 1000 else f"{value:,.0f}".replace(",", " ")


def _speck(block: Block) -> float:
    return SPECK_CELLS * block.cell_m * block.thinned


def _exaggeration(block: Block) -> float:
    west, east, south, north, bottom, top = block.box
    wide = max(east - west, north - south)
    return float(max(1, round(SHAPE * wide / (top - bottom))))


def _strongest(block: Block) -> int:
    contrast = np.full(block.depth.size, -np.inf)
    for index in range(contrast.size):
        layer = block.layer(index)
        layer = layer[np.isfinite(layer)]
        if layer.size:
            middle, high = np.quantile(layer, (0.5, 0.99))
            contrast[index] = high - middle
    return int(np.argmax(contrast))


def _polylines(lines: Lines, origin: tuple[float, float]) -> pv.PolyData:
    """Return the lines on the surface; the cell array ``number`` is the place in ``lines``."""
    points: list[np.ndarray] = []
    cells: list[int] = []
    number: list[int] = []
    start = 0
    for place, (_, given) in enumerate(lines):
        path = np.asarray(given, float)
        if path.ndim != 2 or path.shape[1] != 2 or len(path) < 2:
            raise ValueError(f"a line is an (n, 2) array of x, y with n of at least 2, got {path.shape}")
        points.append(np.column_stack([path - origin, np.zeros(len(path))]))
        cells += [len(path), *range(start, start + len(path))]
        number.append(place)
        start += len(path)
    if not points:
        return pv.PolyData()
    result = pv.PolyData(np.concatenate(points), lines=np.array(cells))
    result.cell_data["number"] = np.array(number)
    return result
