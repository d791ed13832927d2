"""Interpolation weights that keep planes, whatever taps are missing. Plain arrays only."""

from __future__ import annotations

import numpy as np
import scipy.sparse

__all__ = ["ALONG_TAPS", "LINE_TAPS", "along_kernel", "averages", "from_rows", "line_kernel", "with_taps"]

LINE_TAPS = np.arange(-3, 5)
"""Rows read for a cell, from the row below it: 8 taps."""

ALONG_TAPS = np.arange(-1, 3)
"""Places read along a row: 4 taps."""

_LOBES = 4


def line_kernel(d: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the Lanczos kernel of 4 lobes at distances ``d`` (line spacings) and its window, sinc(d/4).

    Lanczos (1956) sigma factors on the sinc; Duchon 1979, J. Appl. Meteor. 18 (from memory).
    """
    window = np.where(np.abs(d) < _LOBES, np.sinc(d / _LOBES), 0.0)
    return np.sinc(d) * window, window


def along_kernel(d: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return cubic convolution at distances ``d`` (steps) and a triangular window.

    Keys 1981, IEEE Trans. ASSP 29, a = -1/2: exact for quadratics.
    """
    a = np.abs(d)
    near = 1.0 + a * a * (1.5 * a - 2.5)
    far = 2.0 + a * (-4.0 + a * (2.5 - 0.5 * a))
    return np.where(a < 1.0, near, np.where(a < 2.0, far, 0.0)), np.maximum(1.0 - a / 2.0, 0.0)


def with_taps(weights: np.ndarray, window: np.ndarray, d: np.ndarray, present: np.ndarray) -> np.ndarray:
    """Return weights (..., tap) on the taps that are ``present``, summing to 1 and reproducing straight lines.

    Dropping a tap (or the window itself) disturbs the sum and the first moment; the smallest correction
    window * (alpha + beta d) that restores both is added. Where the present taps lie on one side only, a straight line
    would be an extrapolation: the nearest tap is held. Without a present tap all weights are 0.

    Parameters
    ----------
    weights, window : (..., tap)
        Kernel and its positive window at ``d``.
    d : (..., tap)
        Tap position minus the place, in steps, ascending.
    present : (..., tap) bool
    """
    w = np.where(present, weights, 0.0)
    g = np.where(present, window, 0.0)
    m0, m1 = 1.0 - w.sum(axis=-1), -(w * d).sum(axis=-1)
    g0, g1, g2 = g.sum(axis=-1), (g * d).sum(axis=-1), (g * d * d).sum(axis=-1)
    det = g0 * g2 - g1 * g1
    both = (present & (d <= 1e-9)).any(axis=-1) & (present & (d >= -1e-9)).any(axis=-1) & (det > 1e-9)
    safe = np.where(both, det, 1.0)
    alpha, beta = (m0 * g2 - m1 * g1) / safe, (m1 * g0 - m0 * g1) / safe
    corrected = w + g * (alpha[..., None] + beta[..., None] * d)
    away = np.where(present, np.abs(d), np.inf)
    held = (np.arange(d.shape[-1]) == np.argmin(away, axis=-1)[..., None]) & present
    # A place on a present tap is that tap, not a mixture.
    on = held & (away < 1e-9)
    return np.where((both & ~on.any(axis=-1))[..., None], corrected, held.astype(float))


def averages(present: np.ndarray, *, width: float) -> scipy.sparse.csr_matrix:
    """Return the matrix that averages each place of a strip along its row over ``width`` steps.

    Edges count by their fraction. Near an end of a recorded run the window shrinks to both sides alike, so that a
    straight line stays one. Rows of absent places are empty.

    Parameters
    ----------
    present : (line, along) bool
    width : float
        Length of the average in steps, 1 or more.
    """
    n_lines, n_along = present.shape
    size = n_lines * n_along
    room = np.minimum(
        _run(present), _run(present[:, ::-1])[:, ::-1]
    )  # present places to the nearer end, itself counted
    half = np.minimum(width / 2.0, room - 0.5)
    reach = int(np.ceil(width / 2.0 - 0.5))
    k = np.arange(-reach, reach + 1)
    near, far = (np.abs(k) - 0.5).astype(np.float32), (np.abs(k) + 0.5).astype(np.float32)
    h = np.where(present, half, 0.0).astype(np.float32).reshape(size, 1)
    share = np.clip(np.minimum(h, far) - np.maximum(-h, near), 0.0, None) / np.maximum(2.0 * h, 1e-6)
    columns = np.clip(np.arange(size)[:, None] + k, 0, size - 1)
    return from_rows(share, columns, size)


def from_rows(data: np.ndarray, columns: np.ndarray, width: int) -> scipy.sparse.csr_matrix:
    """Return the (len(data), width) matrix with ``data`` (row, entry) at ``columns``; zeros are not kept."""
    rows, entries = data.shape
    kind = np.int32 if max(width, rows * entries) < 2**31 else np.int64
    start = np.arange(rows + 1, dtype=kind) * kind(entries)
    full = scipy.sparse.csr_matrix(
        (data.astype(np.float32).ravel(), columns.astype(kind).ravel(), start), (rows, width)
    )
    full.eliminate_zeros()
    return full


def _run(present: np.ndarray) -> np.ndarray:
    """Length of the unbroken run of present places ending at each place."""
    i = np.arange(1, present.shape[1] + 1)
    last_gap = np.maximum.accumulate(np.where(present, 0, i), axis=1)
    return i - last_gap
