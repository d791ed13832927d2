"""From slices to a block of ground: local coordinates, depth downwards, places without data kept apart.

The points of the block are the cell centres; z is minus depth. Map coordinates lose millimetres in the drawing
library's float32, so large ones are counted from a round local origin, which the picture names.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import pyvista as pv
import xarray as xr
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from planum.schema import check_slices
from planum.slices.structure import FINE, coarse, smoothed

__all__ = ["LARGEST", "Block", "block_from", "contour", "plane", "softened"]

LARGEST = 12_000_000
"""Most points a block may hold; larger stacks are averaged over square groups of cells, and the picture says so."""
FAR_M = 10_000.0
"""Coordinates beyond this are counted from a local origin: float32 keeps 1 mm up to 8 km (24 bits of mantissa)."""
ROUND_M = 100.0


@dataclass(frozen=True, eq=False)
class Block:
    """A stack of slices ready to draw. Arrays are (depth, y, x) with all axes ascending as named here.

    ``z`` (m, ascending, negative down), ``y``, ``x`` (m, from ``origin``) are cell centres; ``amplitude`` holds NaN
    where nothing is known.
    """

    x: np.ndarray
    y: np.ndarray
    z: np.ndarray
    amplitude: np.ndarray
    origin: tuple[float, float]
    bounds_m: np.ndarray
    error_m: np.ndarray
    cell_m: float
    thinned: int

    @property
    def depth(self) -> np.ndarray:
        """Depth of the interval centres in m, downwards (so against the order of ``z``)."""
        return -self.z[::-1]

    def layer(self, index: int) -> np.ndarray:
        """Return the (y, x) layer of the ``index``-th depth, counted downwards."""
        return self.amplitude[self.z.size - 1 - index]

    @cached_property
    def grid(self) -> pv.ImageData | pv.RectilinearGrid:
        """The drawing library's view: 0 where nothing is known, and a point array ``known``."""
        return _grid(self.x, self.y, self.z, self.amplitude)

    @property
    def box(self) -> tuple[float, float, float, float, float, float]:
        """West, east, south, north, bottom of the cells, and 0, the surface (m, local)."""
        half = self.cell_m * self.thinned / 2.0
        bottom = float(self.bounds_m.max())
        return (
            float(self.x[0] - half),
            float(self.x[-1] + half),
            float(self.y[0] - half),
            float(self.y[-1] + half),
            -bottom,
            0.0,
        )


def block_from(slices: xr.Dataset, *, largest: int = LARGEST) -> Block:
    """Return the block of a slice stack; lazy stacks are read one depth at a time.

    Parameters
    ----------
    slices
        ``amplitude(depth, y, x)`` with NaN where nothing is known, ``depth_bounds``, ``depth_error``; y may run
        either way.
    largest
        Most points to keep.

    Raises
    ------
    ValueError
        When it is not a slice stack, or a plan axis holds fewer than 2 cells.
    """
    check_slices(slices)
    slices = slices.sortby("depth").sortby("y").sortby("x")
    n_depth, n_y, n_x = (slices.sizes[d] for d in ("depth", "y", "x"))
    if min(n_y, n_x) < 2:
        raise ValueError(f"a block needs at least 2 x 2 cells in plan, got {n_y} x {n_x}")
    thin = 1
    while n_depth * -(-n_y // thin) * -(-n_x // thin) > largest:
        thin += 1
    x, y = np.asarray(slices.x.values, float), np.asarray(slices.y.values, float)
    cell = float((x[-1] - x[0]) / (x.size - 1))
    layers = [coarse(np.asarray(slices.amplitude.isel(depth=i).values, np.float32), thin) for i in range(n_depth)]
    amplitude = np.stack(layers[::-1])
    origin = _origin(x, y)
    x, y = _centres(x, thin) - origin[0], _centres(y, thin) - origin[1]
    z = -np.asarray(slices.depth.values, float)[::-1]
    return Block(
        x=x,
        y=y,
        z=z,
        amplitude=amplitude,
        origin=origin,
        bounds_m=np.asarray(slices.depth_bounds.values, float),
        error_m=np.asarray(slices.depth_error.values, float),
        cell_m=cell,
        thinned=thin,
    )


def softened(block: Block, sigma_m: float) -> Block:
    """Return the block with each depth smoothed by a Gaussian of ``sigma_m`` (m), on cells the Gaussian can fill.

    Cells finer than 0.4 standard deviations are joined first: the surface loses nothing and has a fraction of the
    triangles. A joined cell is known where all its cells are, so nothing is drawn on unknown ground.
    """
    step = block.cell_m * block.thinned
    by = max(1, int(sigma_m / step / FINE))
    layers = []
    for layer in block.amplitude:
        joined = coarse(layer, by)
        whole = coarse(np.isfinite(layer).astype(np.float32), by) == 1.0
        layers.append(np.where(whole, smoothed(joined, sigma=sigma_m / step / by), np.float32(np.nan)))
    x, y = _centres(block.x, by), _centres(block.y, by)
    return replace(block, x=x, y=y, amplitude=np.stack(layers), thinned=block.thinned * by)


def contour(block: Block, level: float, *, least_m: float = 0.0) -> pv.PolyData:
    """Return the surface where amplitude passes ``level``, with normals pointing to the weaker side.

    Only voxels whose eight corners are all known carry a face: the rim of the surveyed ground is no find. Triangles
    of the flying-edges method (Schroeder, Maynard & Geveci 2015) never leave their voxel, so it suffices to drop
    those whose centre lies in a voxel with an unknown corner.

    Parameters
    ----------
    level
        Amplitude of the surface.
    least_m
        Connected pieces whose plan diagonal is shorter (m) are left out.
    """
    if block.z.size < 2:
        return pv.PolyData()
    surface = block.grid.contour([level], scalars="amplitude", compute_normals=False, compute_scalars=False)
    if surface.n_cells == 0:
        return pv.PolyData()
    faces = surface.regular_faces
    centre = surface.points[faces].astype(float).mean(axis=1)
    known = np.isfinite(block.amplitude)
    whole = np.ones(tuple(n - 1 for n in known.shape), bool)
    for k in range(8):
        corner = tuple(slice(b, n - 1 + b) for b, n in zip((k & 1, k >> 1 & 1, k >> 2), known.shape, strict=True))
        whole &= known[corner]
    at = tuple(
        np.clip(np.searchsorted(axis, centre[:, column], side="right") - 1, 0, axis.size - 2)
        for axis, column in ((block.z, 2), (block.y, 1), (block.x, 0))
    )
    kept = faces[whole[at]]
    if least_m > 0 and kept.size:
        kept = kept[_diagonal(surface.points, kept) >= least_m]
    if kept.size == 0:
        return pv.PolyData()
    used, renumbered = np.unique(kept, return_inverse=True)
    result = pv.PolyData.from_regular_faces(surface.points[used], renumbered.reshape(-1, 3))
    return result.compute_normals(
        cell_normals=False, split_vertices=False, consistent_normals=False, auto_orient_normals=False
    )


def plane(block: Block, index: int) -> pv.ImageData:
    """Return one depth slice as a flat image: one cell per map cell, ``amplitude`` on the cells, NaN kept."""
    west, _, south, _, _, _ = block.box
    step = block.cell_m * block.thinned
    image = pv.ImageData(
        dimensions=(block.x.size + 1, block.y.size + 1, 1),
        spacing=(step, step, 1.0),
        origin=(west, south, float(-block.depth[index])),
    )
    image.cell_data["amplitude"] = block.layer(index).ravel()
    return image


def _diagonal(points: np.ndarray, faces: np.ndarray) -> np.ndarray:
    """Return for each triangle the plan diagonal (m) of the connected piece it belongs to."""
    first, second = np.concatenate([faces[:, :2], faces[:, 1:]]).T
    size = len(points)
    links = coo_array((np.ones(first.size, bool), (first, second)), shape=(size, size))
    count, piece = connected_components(links, directed=False)
    low, high = np.full((count, 2), np.inf), np.full((count, 2), -np.inf)
    np.minimum.at(low, piece, points[:, :2])
    np.maximum.at(high, piece, points[:, :2])
    return np.hypot(*(high - low).T)[piece[faces[:, 0]]]


def _grid(x: np.ndarray, y: np.ndarray, z: np.ndarray, amplitude: np.ndarray) -> pv.ImageData | pv.RectilinearGrid:
    # an irregular depth axis (a thinner last interval) must not be drawn as a regular one
    steps = np.diff(z)
    if z.size == 1 or np.ptp(steps) < 1e-3 * steps.mean():
        grid = pv.ImageData(
            dimensions=(x.size, y.size, z.size),
            spacing=(_step(x), _step(y), _step(z) if z.size > 1 else 1.0),
            origin=(x[0], y[0], z[0]),
        )
    else:
        grid = pv.RectilinearGrid(x, y, z)
    known = np.isfinite(amplitude)
    grid.point_data["amplitude"] = np.where(known, amplitude, np.float32(0.0)).ravel()
    grid.point_data["known"] = known.ravel().astype(np.uint8)
    return grid


def _step(axis: np.ndarray) -> float:
    return float((axis[-1] - axis[0]) / (axis.size - 1))


def _origin(x: np.ndarray, y: np.ndarray) -> tuple[float, float]:
    if max(abs(x[0]), abs(x[-1]), abs(y[0]), abs(y[-1])) <= FAR_M:
        return 0.0, 0.0
    return float(np.floor(x[0] / ROUND_M) * ROUND_M), float(np.floor(y[0] / ROUND_M) * ROUND_M)


def _centres(axis: np.ndarray, thin: int) -> np.ndarray:
    step = _step(axis)
    return axis[0] + step * (thin - 1) / 2.0 + step * thin * np.arange(-(-axis.size // thin))
