"""Slices along lines to cells of a plan grid: band-limited across the lines, limited to what the neighbours show.

A cell's value is a weighted sum of strip places; the weights depend on the geometry and the flags only, so they are
built once per block of cells and applied to every slice.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import scipy.sparse

from planum.constants import LIMIT_MARGIN, MASK_BETWEEN, MASK_OUTSIDE
from planum.records import FLAG_DEAD, FLAG_NONE, CubeGeometry
from planum.slices import kernels

__all__ = ["CellWeights", "LineGridder"]

_HAIR = 1e-6
"""Steps; a cell exactly on a limit does not hang on the last bit."""


@dataclass(eq=False)
class CellWeights:
    """Weights of a block of cells.

    Attributes
    ----------
    coverage : (cell,) uint8
        0 not surveyed, 1 measured (within half a cell of a recorded row), 2 filled between lines or just outside them.
    limited : int
        Cells whose value had to be limited in the strip applied last.
    """

    coverage: np.ndarray
    _full: scipy.sparse.csr_matrix
    _low: scipy.sparse.csr_matrix
    _high: scipy.sparse.csr_matrix
    _share: np.ndarray
    limited: int = field(default=0, init=False)

    def apply(self, strip: np.ndarray, *, limit: bool = True) -> np.ndarray:
        """Return the cells' values for one strip, and count limited cells in :attr:`limited`.

        Parameters
        ----------
        strip : (line, along) float32
            One slice along the lines of a set; places flagged as not recorded or dead are never read.
        limit : bool
            Keep each value within the range of the two neighbouring lines at its place, which it may leave by 2 % of
            the range's width, and at 0 or above. Without it the kernel alone: band-limited, may overshoot.

        Returns
        -------
        (cell,) float32
            NaN where masked.
        """
        values, self.limited = self.apply_counted(strip, limit=limit)
        return values

    def apply_counted(self, strip: np.ndarray, *, limit: bool = True) -> tuple[np.ndarray, int]:
        """Return values and the number of limited cells; changes nothing, so any thread may call it."""
        flat = np.ascontiguousarray(strip, np.float32).ravel()
        out = self._full @ flat
        count = 0
        if limit:
            a, b = self._low @ flat, self._high @ flat
            low, high = np.minimum(a, b), np.maximum(a, b)
            margin = np.float32(LIMIT_MARGIN) * (high - low)
            bound = np.maximum(np.clip(out, low - margin, high + margin), 0.0)
            # More than float32 rounding of the sum counts as limited.
            count = int(np.count_nonzero(np.abs(bound - out) > 1e-5 * np.maximum(np.abs(high), np.abs(low))))
            out = bound
        return np.where(self.coverage > 0, out, np.nan).astype(np.float32), count

    def between(self, strip: np.ndarray) -> np.ndarray:
        """Return values drawn linearly between the two neighbouring lines; a line that holds NaN is left out.

        For quantities that are not amplitudes, such as the leave-one-line-out error.
        """
        flat = np.ascontiguousarray(strip, np.float32).ravel()
        known = np.isfinite(flat)
        flat = np.where(known, flat, np.float32(0.0))
        total, weight = np.zeros(self.coverage.size), np.zeros(self.coverage.size)
        for rows, share in ((self._low, 1.0 - self._share), (self._high, self._share)):
            whole = (abs(rows) @ (~known).astype(np.float32)) == 0
            # A cell on a line whose value is unknown takes what its other neighbour says.
            part = np.where(whole, np.maximum(share, 1e-6), 0.0)
            total, weight = total + part * (rows @ flat), weight + part
        ok = (self.coverage > 0) & (weight > 0)
        return np.where(ok, total / np.where(ok, weight, 1.0), np.nan).astype(np.float32)


class LineGridder:
    """Weights from the strip places of one set to any cells.

    Parameters
    ----------
    geometry : CubeGeometry
        Rows and places; cells are given in the same local frame.
    flag : (n_lines, n_along) uint8
        Places with FLAG_NONE or FLAG_DEAD are not data.
    cell_m : float, optional
        Size of the cells, m: sets the average along the line, what counts as on a row, and how far beyond a line's end
        a cell may reach (half). A fifth of the line spacing when left out.

    Raises
    ------
    ValueError
        When the flags do not fit the geometry or the cell is not positive.
    """

    def __init__(self, geometry: CubeGeometry, flag: np.ndarray, *, cell_m: float | None = None) -> None:
        shape = (geometry.n_lines, geometry.n_along)
        if flag.shape != shape:
            raise ValueError(f"flag has shape {flag.shape}, the geometry {shape}")
        self.geometry = geometry
        self.cell_m = geometry.line_step_m / 5.0 if cell_m is None else cell_m
        if not self.cell_m > 0:
            raise ValueError(f"cell_m is {self.cell_m:g}; a cell has a positive size")
        self.present = (flag & (FLAG_NONE | FLAG_DEAD)) == 0
        self._away = _steps_to_present(self.present)
        width = self.cell_m / geometry.along_step_m
        self._average = kernels.averages(self.present, width=width) if width > 1.0 + _HAIR else None

    def weights(self, x_local: np.ndarray, y_local: np.ndarray) -> CellWeights:
        """Return the weights of cells at local places (1-D, m). Memory: some 4 kB a cell while they are built."""
        g = self.geometry
        x, y = np.asarray(x_local, float).ravel(), np.asarray(y_local, float).ravel()
        along, across = (x, y) if g.direction == "x" else (y, x)
        u, v = (across - g.line0_m) / g.line_step_m, (along - g.along0_m) / g.along_step_m
        near = np.round(u)
        u = np.where(np.abs(u - near) < _HAIR, near, u)
        base = np.clip(np.floor(u), -1, g.n_lines - 1).astype(np.int64)  # -1: beyond the first row
        rows = base[:, None] + kernels.LINE_TAPS
        here = self._recorded(rows, v)
        coverage, keep_low, keep_high = self._cover(u, base, v, here)
        d = rows - u[:, None]
        # Beyond the outer lines or beside a missing one only one neighbour counts: its value is held.
        between = keep_low & keep_high
        usable = here.copy()
        alone = ~between[:, None] & (np.where(keep_low, 0, 1)[:, None] != kernels.LINE_TAPS)
        usable[alone] = False
        across_w = kernels.with_taps(*kernels.line_kernel(d), d, usable)
        across_w[coverage == 0] = 0.0
        low = np.where(keep_low, base, base + 1)
        high = np.where(keep_high, base + 1, base)
        seen = coverage > 0
        full = self._matrix(rows, across_w, v)
        one = seen.astype(float)[:, None]
        share = np.where(between, u - base, 0.0)
        return CellWeights(
            coverage=coverage,
            _full=full,
            _low=self._matrix(low[:, None], one, v),
            _high=self._matrix(high[:, None], one, v),
            _share=share,
        )

    def left_out(self, strip: np.ndarray) -> np.ndarray:
        """Return |recorded - predicted| of every line, predicted from its neighbours without itself.

        The same kernel and limits at doubled spacing: rows 1, 3, 5 and 7 away. NaN where the line or one of the two
        nearest neighbours is not recorded, so at the outer lines always.

        Parameters
        ----------
        strip : (line, along) float32

        Returns
        -------
        (line, along) float32
        """
        strip = np.asarray(strip, np.float32)
        out = np.full(strip.shape, np.nan, np.float32)
        n = self.geometry.n_lines
        taps = np.arange(-7, 8, 2)
        bits = 1 << np.arange(taps.size)
        for r in range(1, n - 1):
            held = np.clip(r + taps, 0, n - 1)
            there = self.present[held] & (held == r + taps)[:, None]
            ok = self.present[r] & self.present[r - 1] & self.present[r + 1]
            # Few patterns of missing neighbours occur along a line, mostly one.
            codes, which = np.unique(bits @ there, return_inverse=True)
            d = np.broadcast_to(taps / 2.0, (codes.size, taps.size))
            w = kernels.with_taps(*kernels.line_kernel(d), d, (codes[:, None] & bits) > 0).astype(np.float32)
            values = np.where(there, strip[held], np.float32(0.0))
            summed = w[0] @ values if codes.size == 1 else np.einsum("ta,at->a", values, w[which])
            low, high = np.minimum(strip[r - 1], strip[r + 1]), np.maximum(strip[r - 1], strip[r + 1])
            margin = np.float32(LIMIT_MARGIN) * (high - low)
            guess = np.maximum(np.clip(summed, low - margin, high + margin), 0.0)
            out[r, ok] = np.abs(strip[r] - guess)[ok]
        return out

    def _recorded(self, rows: np.ndarray, v: np.ndarray) -> np.ndarray:
        """Whether each of the rows (cell, tap) is recorded within half a cell of the place ``v`` along it."""
        g = self.geometry
        j = np.clip(np.round(v).astype(np.int64), 0, g.n_along - 1)
        inside = (rows >= 0) & (rows < g.n_lines)
        held = np.clip(rows, 0, g.n_lines - 1)
        nearest = j[:, None] + self._away[held, j[:, None]]
        reach = max(self.cell_m / 2.0 / g.along_step_m, 0.5) + _HAIR
        return inside & (np.abs(nearest - v[:, None]) <= reach)

    def _cover(
        self, u: np.ndarray, base: np.ndarray, v: np.ndarray, here: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Coverage of the cells, and whether their lower and upper neighbour may be read."""
        g = self.geometry
        zero = int(np.flatnonzero(kernels.LINE_TAPS == 0)[0])
        low_there, high_there = here[:, zero], here[:, zero + 1]
        down, up = u - base, base + 1 - u
        j = np.clip(np.round(v).astype(np.int64), 0, g.n_along - 1)
        # Recorded rows below and above at this place: without one on the far side the cell lies outside the lines.
        any_row = self.present.any(axis=0)
        first = np.where(any_row, np.argmax(self.present, axis=0), g.n_lines)[j]
        last = np.where(any_row, g.n_lines - 1 - np.argmax(self.present[::-1], axis=0), -1)[j]
        far_low = np.where(last > base, MASK_BETWEEN, MASK_OUTSIDE) + _HAIR
        far_high = np.where(first <= base, MASK_BETWEEN, MASK_OUTSIDE) + _HAIR
        both = low_there & high_there
        keep_low = low_there & (both | (down <= far_low))
        keep_high = high_there & (both | (up <= far_high))
        half = self.cell_m / 2.0 / g.line_step_m + _HAIR
        measured = (low_there & (down <= half)) | (high_there & (up <= half))
        seen = keep_low | keep_high
        return np.where(~seen, 0, np.where(measured, 1, 2)).astype(np.uint8), keep_low, keep_high

    def _matrix(self, rows: np.ndarray, weights: np.ndarray, v: np.ndarray) -> scipy.sparse.csr_matrix:
        """Cells by strip places: ``weights`` (cell, tap) of the rows times the weights along each row."""
        g = self.geometry
        held = np.clip(rows, 0, g.n_lines - 1)
        j = np.clip(np.round(v).astype(np.int64), 0, g.n_along - 1)[:, None]
        nearest = j + self._away[held, j]
        # A step or more past a line's end (or into a gap) its last place is held, however large the cells are.
        place = np.where(np.abs(nearest - v[:, None]) >= 1.0, nearest, v[:, None])
        taps = np.floor(place + _HAIR).astype(np.int64)[:, :, None] + kernels.ALONG_TAPS
        d = taps - place[:, :, None]
        safe = np.clip(taps, 0, g.n_along - 1)
        there = self.present[held[:, :, None], safe] & (taps == safe)
        along_w = np.empty(d.shape)
        # Mostly nothing is missing: then all rows share one set of weights.
        plain = there.all(axis=(1, 2)) & (place == v[:, None]).all(axis=1)
        for some, here in ((plain, slice(0, 1)), (~plain, slice(None))):
            part = d[some][:, here]
            along_w[some] = kernels.with_taps(*kernels.along_kernel(part), part, there[some][:, here])
        full = weights[:, :, None] * along_w
        columns = held[:, :, None] * g.n_along + safe
        size = (v.size, -1)
        matrix = kernels.from_rows(full.reshape(size), columns.reshape(size), g.n_lines * g.n_along)
        if self._average is not None:
            matrix = matrix @ self._average
        return matrix


def _steps_to_present(present: np.ndarray) -> np.ndarray:
    """Signed steps from each place to the nearest present one of its row; very many where the row has none."""
    n = present.shape[1]
    i = np.arange(n)
    far = 4 * n + 1_000_000
    left = np.maximum.accumulate(np.where(present, i, -far), axis=1) - i
    right = np.minimum.accumulate(np.where(present, i, far)[:, ::-1], axis=1)[:, ::-1] - i
    return np.where(-left <= right, left, right)
