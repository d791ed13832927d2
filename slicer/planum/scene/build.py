"""From slices to a scene: block, isosurface, one movable slice, lines on the surface, and what is said beside them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pyvista as pv
import xarray as xr
from scipy.ndimage import find_objects, label

from planum.constants import CAUTIONS
from planum.scene.frame import Frame, frame_of
from planum.scene.volume import Block, block_from, contour, plane, softened
from planum.slices.structure import best_slices, structure

__all__ = ["ISO_QUANTILES", "Scene", "build_scene"]

SOFT = 1.0
"""Standard deviation, in line spacings, of the smoothing before the isosurface is cut: what neighbouring lines saw of
one wall becomes one body, and a wall still stands out of its rooms."""
SPECK_SPACINGS, SPECK_M = 4.0, 1.5
"""Bodies whose diagonal in plan is less than the larger of these are left out: what few lines have seen has no shape,
and a square of 1 m is the least that is told from stones."""
ISO_QUANTILES = (0.5, 0.99)
"""The default isosurface lies halfway between these quantiles of the smoothed cells of the slices that show most
structure: half height is where a body's edge is usually read."""
UNCOVERED = 0.6
"""The default slice is moved down until this share of the bodies' volume lies above it: the slice is opaque."""
STANDING = 0.6
"""The default slice is the foot of the best-structured one: from it downwards, the last with this share of its score.
Bodies then stand on the slice; on the best one itself they would lie below it, hidden."""
ISO_ORIGIN = "halfway from the median to the strongest hundredth of the best slices"
STATEMENT = "statement_"
"""How the names of those attributes begin that state what the slices are."""
SPACING_ATTR, SPACING_CELLS = f"{STATEMENT}line_spacing_m", 5.0
STRETCH = (0.02, 0.995)
"""Quantiles of the known cells drawn lightest and darkest, one stretch for all depths."""
SHAPE = 0.16
"""Least height of the block as a share of its width: below it depths are drawn taller, by a whole number, and said."""

Lines = Sequence[tuple[str, np.ndarray]]


@dataclass(frozen=True, eq=False)
class Scene:
    """What is drawn. Meshes are in m from ``block.origin`` with z = -depth, never exaggerated themselves.

    ``isosurface`` is that of ``soft``, the block smoothed along its slices, and empty when nothing reaches ``level``;
    ``plane`` is the slice number ``index`` of the block itself. ``spacing_m`` is the distance of the lines.
    ``statement`` is what the slices say of themselves, ``hidden`` whether the isosurface is switched off.
    """

    title: str
    code: str
    block: Block
    soft: Block
    spacing_m: float
    isosurface: pv.PolyData
    plane: pv.ImageData
    lines: pv.PolyData
    frame: Frame
    level: float
    level_origin: str
    index: int
    stretch: tuple[float, float]
    exaggeration: float
    statement: Mapping[str, Any] = field(default_factory=dict)
    hidden: bool = False

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
        surface = contour(self.soft, level, least_m=_speck(self.spacing_m))
        return replace(self, level=level, level_origin="chosen", isosurface=surface)

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
        if self.hidden:
            return "isosurface off"
        if self.isosurface.n_cells == 0:
            return self._nothing_text()
        return f"isosurface at amplitude {_plain(self.level)} ({self.level_origin})"

    def _nothing_text(self) -> str:
        """Tell a level above all there is from one below it."""
        known = self.soft.amplitude[np.isfinite(self.soft.amplitude)]
        across, level = f"{_speck(self.spacing_m):.2g} m across", _plain(self.level)
        if known.size and float(known.min()) >= self.level:
            return f"everything lies above amplitude {level}: no isosurface"
        if known.size and float(np.median(known)) > self.level:
            return f"everything but places under {across} lies above amplitude {level}: no isosurface"
        return f"nothing {across} reaches amplitude {level}"

    def notes(self) -> tuple[str, ...]:
        """Return what must be known to read the picture: smoothing, what is left out, exaggeration, thinning."""
        notes = []
        if self.isosurface.n_cells:
            width = 2.0 * SOFT * self.spacing_m
            notes.append(f"isosurface of slices smoothed over {width:.2g} m")
            notes.append(f"bodies under {_speck(self.spacing_m):.2g} m across left out")
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
        Amplitude of the isosurface, which is cut from slices smoothed by a Gaussian of one line spacing; by default
        halfway between the median and the 0.99 quantile of what the smoothed slices with most structure hold.
    slice_depth
        Depth in m whose slice is drawn (the nearest); by default the foot of the one with most structure
        (:func:`~planum.slices.structure.structure`): from there down, the last that keeps 0.6 of its score; deeper
        when less than 0.6 of the bodies' volume would lie above it.
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
    spacing = _spacing(slices, block)
    soft = softened(block, SOFT * spacing)
    step = block.cell_m * block.thinned
    scores = [structure(block.layer(i), spacing=spacing / step) for i in range(block.depth.size)]
    origin = "chosen"
    if level is None:
        level, origin = _level(soft, scores), ISO_ORIGIN
    if exaggeration is None:
        exaggeration = _exaggeration(block)
    if not (np.isfinite(level) and np.isfinite(exaggeration) and exaggeration > 0):
        raise ValueError(f"level and exaggeration must be finite, exaggeration above 0; got {level}, {exaggeration}")
    if slice_depth is None:
        index = max(_foot(scores), _under(soft, level, _speck(spacing)))
    else:
        index = _at_depth(block, slice_depth)
    low, high = (float(q) for q in np.quantile(known, STRETCH))
    return Scene(
        title=str(slices.attrs.get("title", "")),
        code=str(slices.attrs.get("code", "")),
        block=block,
        soft=soft,
        spacing_m=spacing,
        isosurface=contour(soft, level, least_m=_speck(spacing)),
        plane=plane(block, index),
        lines=_polylines(lines, block.origin),
        frame=frame_of(block.box, origin=block.origin, exaggeration=exaggeration, placed=_placed(slices)),
        level=level,
        level_origin=origin,
        index=index,
        stretch=(low, high if high > low else low + 1.0),
        exaggeration=exaggeration,
        statement={str(k).removeprefix(STATEMENT): v for k, v in slices.attrs.items() if str(k).startswith(STATEMENT)},
    )


def _at_depth(block: Block, depth_m: float) -> int:
    """Return the slice nearest to a depth that lies in the block."""
    top, bottom = float(block.bounds_m.min()), float(block.bounds_m.max())
    if not top - 5e-4 <= depth_m <= bottom + 5e-4:  # half a millimetre only covers float32 files
        raise ValueError(f"there is no slice at {depth_m:g} m; the slices reach from {top:g} to {bottom:g} m")
    return int(np.argmin(np.abs(block.depth - depth_m)))


def _plain(value: float) -> str:
    """Three digits, or whole numbers in groups of three where they are large; never a power of ten for people."""
    return f"{value:.3g}" if abs(value) < 1000 else f"{value:,.0f}".replace(",", " ")


def _speck(spacing_m: float) -> float:
    return max(SPECK_SPACINGS * spacing_m, SPECK_M)


def _spacing(slices: xr.Dataset, block: Block) -> float:
    """Return the distance of the lines (m) as the run states it, otherwise five cells, as the run chooses cells."""
    stated = float(slices.attrs.get(SPACING_ATTR, 0.0))
    return max(stated if stated > 0.0 else SPACING_CELLS * block.cell_m, block.cell_m)


def _level(soft: Block, scores: Sequence[float]) -> float:
    # slices with little to show would only dilute the quantile
    best = [index for index in best_slices(scores) if scores[index] >= STANDING * max(scores)]
    layers = np.concatenate([soft.layer(index).ravel() for index in best])
    return float(np.mean(np.quantile(layers[np.isfinite(layers)], ISO_QUANTILES)))


def _foot(scores: Sequence[float]) -> int:
    best = int(np.argmax(scores))
    weaker = np.flatnonzero(np.array(scores[best:]) < STANDING * scores[best])
    return best + int(weaker[0]) - 1 if weaker.size else len(scores) - 1


def _under(soft: Block, level: float, least_m: float) -> int:
    """Return the first slice that has enough of the bodies' volume above it."""
    inside = np.where(np.isfinite(soft.amplitude), soft.amplitude, -np.inf) >= level
    numbers, _ = label(inside)
    step = soft.cell_m * soft.thinned
    for number, (layers, rows, columns) in enumerate(find_objects(numbers), 1):
        if step * np.hypot(rows.stop - rows.start, columns.stop - columns.start) < least_m:
            part = (layers, rows, columns)
            inside[part] &= numbers[part] != number
    volume = inside[::-1].sum(axis=(1, 2), dtype=float)
    if not volume.any():
        return 0
    above = np.cumsum(volume) - volume / 2.0  # a slice is drawn in the middle of its layer
    return (
        int(np.argmax(above >= UNCOVERED * volume.sum())) if above[-1] >= UNCOVERED * volume.sum() else volume.size - 1
    )


def _placed(slices: xr.Dataset) -> bool:
    """Tell whether x and y are map coordinates: named as an attribute, or as the grid mapping of a file."""
    return bool(slices.attrs.get("crs")) or "crs" in slices.variables


def _exaggeration(block: Block) -> float:
    west, east, south, north, bottom, top = block.box
    wide = max(east - west, north - south)
    return float(max(1, round(SHAPE * wide / (top - bottom))))


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
