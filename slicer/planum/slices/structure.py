"""How much extended structure a slice shows: walls and ditches count, stones do not, however strong they are.

Smoothing over about one line spacing leaves what several lines have seen together and levels what one line alone has
seen. What then stands out of the plane's own scatter has extent. Plain arrays only.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.ndimage import gaussian_filter
from scipy.special import ndtri

__all__ = ["FINE", "best_slices", "coarse", "smoothed", "structure"]

SPACINGS = 1.25
"""Standard deviation of the smoothing in line spacings: more than one, or a stone shared by two lines would pass."""
HIGH = 0.985
"""A wall of 60 cm and 10 m on a field of 20 m square covers 1.5 % of it: the part that stands out may be as small.
A strip along the rim, where the first and last lines often differ, covers more and gains nothing from it."""
WEAK = (0.05, 0.25)
"""Quantiles of the weak side."""
CUT = 20.0
"""Standard deviations: a good wall has ten to twenty in unsmoothed cells, a stone may have hundreds."""
FINE = 2.5
"""Cells per standard deviation that are kept: a Gaussian of 2.5 cells holds nothing a coarser cell would lose."""
REACH = 3.0
"""Standard deviations after which the Gaussian is cut: it has fallen to a hundredth."""
MOST_BEST = 6


def structure(plane: np.ndarray, *, spacing: float) -> float:
    """Return how far extended features stand out of one slice, in robust standard deviations.

    Cells are cut off at 20 standard deviations, or one stone could outweigh a wall; the plane is smoothed over 1.25
    line spacings; its 0.985 quantile is told in standard deviations from the middle. Middle and deviation are those
    of the normal distribution with the plane's own 0.05 and 0.25 quantiles (common practice): features are strong, so
    the weak side shows the ground even where walls fill half a plane. A plane of smoothed normal noise gives 2.17,
    the 0.985 quantile of the normal distribution.

    Parameters
    ----------
    plane : (y, x)
        Amplitude, NaN where nothing is known.
    spacing
        Distance of the lines in cells of the plane.

    Returns
    -------
    float
        0 or more; does not heed the unit of amplitude. 0 for a plane that is unknown or all the same.
    """
    plane = np.asarray(plane, np.float32)
    if not np.isfinite(plane).any():
        return 0.0
    middle, scatter = _ground(plane)
    if scatter > 0.0:
        plane = np.minimum(plane, np.float32(middle + CUT * scatter))
    sigma = SPACINGS * spacing
    by = max(1, int(sigma / FINE))
    known = smoothed(coarse(plane, by), sigma=sigma / by)
    middle, scatter = _ground(known)
    high = float(np.quantile(known[np.isfinite(known)].astype(float), HIGH))
    # ground that is all the same but for the features has no deviation of its own
    scatter = scatter or float(np.nanstd(known, dtype=float))
    return max((high - middle) / scatter, 0.0) if scatter > 0.0 else 0.0


def _ground(plane: np.ndarray) -> tuple[float, float]:
    """Return middle and standard deviation of the ground of a plane with a known cell, from its weak side."""
    weak, less_weak = np.quantile(plane[np.isfinite(plane)].astype(float), WEAK)
    scatter = float((less_weak - weak) / (ndtri(WEAK[1]) - ndtri(WEAK[0])))
    return float(less_weak - ndtri(WEAK[1]) * scatter), scatter


def best_slices(scores: Sequence[float], *, most: int = MOST_BEST) -> list[int]:
    """Return the slices with the highest scores, at least two apart, in depth order."""
    chosen: list[int] = []
    for i in sorted(range(len(scores)), key=lambda k: -scores[k]):
        if all(abs(i - j) >= 2 for j in chosen):
            chosen.append(i)
        if len(chosen) == most:
            break
    return sorted(chosen)


def smoothed(plane: np.ndarray, *, sigma: float) -> np.ndarray:
    """Return a plane smoothed by a Gaussian over its known cells, float32; unknown cells stay NaN.

    The Gaussian of the values is divided by the Gaussian of what is known (normalised convolution, Knutsson & Westin
    1993, from memory), so a constant stays one to the very rim of the known ground.

    Parameters
    ----------
    plane : (y, x)
        Amplitude, NaN where nothing is known.
    sigma
        Standard deviation in cells; 0 gives the plane itself.
    """
    plane = np.asarray(plane, np.float32)
    if sigma == 0.0:
        return plane
    known = np.isfinite(plane)
    values = gaussian_filter(np.where(known, plane, np.float32(0.0)), sigma, mode="constant", truncate=REACH)
    weight = gaussian_filter(known.astype(np.float32), sigma, mode="constant", truncate=REACH)
    return np.divide(values, weight, out=np.full_like(plane, np.nan), where=known)


def coarse(plane: np.ndarray, by: int) -> np.ndarray:
    """Return the mean of the known cells of each ``by`` x ``by`` group, float32; groups without any stay NaN."""
    if by == 1:
        return plane
    n_y, n_x = plane.shape
    padded = np.pad(plane, ((0, -n_y % by), (0, -n_x % by)), constant_values=np.nan)
    known = np.isfinite(padded)
    groups = (padded.shape[0] // by, by, padded.shape[1] // by, by)
    count = known.reshape(groups).sum(axis=(1, 3))
    total = np.where(known, padded, 0.0).reshape(groups).sum(axis=(1, 3), dtype=float)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan).astype(np.float32)
