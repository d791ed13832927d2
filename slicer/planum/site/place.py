"""Place a grid on the map: a least-squares similarity on its control points, residuals reported.

Coordinates in m. Only shift, rotation and scale are fitted (EPSG method 9621, similarity transformation); a frame
whose y axis points to the other hand is recognised when it fits clearly better mirrored, and named.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from planum.errors import FrameError, Problem
from planum.records import Similarity

__all__ = ["fit_similarity"]

SCALE_TOLERANCE = 0.02
"""Map metres per tape metre differ from 1 by far less than this (projection 0.04 %, tape and slope 1 %); beyond it a
control point is mistyped."""


def fit_similarity(
    names: Sequence[str], local: np.ndarray, mapped: np.ndarray, *, grid: str, source: str = "control.csv"
) -> Similarity:
    """Fit ``local`` (n, 2) onto ``mapped`` (n, 2) by least squares.

    Parameters
    ----------
    names : sequence of str
        Names of the n control points.
    local, mapped : ndarray
        Shape (n, 2), m: local x, y and easting, northing.
    grid, source : str
        Named in messages.

    Returns
    -------
    Similarity
        With one residual per point and, from three points on, their error: the root of the squared residuals over
        the redundancy 2n - 4.

    Raises
    ------
    FrameError
        With fewer than two distinct points, or a scale more than 2 % from 1.
    """
    local, mapped = np.asarray(local, float), np.asarray(mapped, float)
    if len(local) < 2 or np.ptp(local, axis=0).max() < 0.5:
        raise FrameError(
            Problem(
                came=f"grid {grid} has {len(local)} usable control point(s)",
                allowed="at least two, half a metre or more apart",
                do="add the pegs of this grid",
                file=source,
            )
        )
    plain, mirrored = _solve(local, mapped), _solve(local * [1, -1], mapped)
    turned = len(local) > 2 and mirrored[1] < 0.1 * plain[1]
    (a, b, e0, n0), _ = mirrored if turned else plain
    fit = Similarity(a=a, b=b, e0=e0, n0=n0, mirrored=turned)
    if abs(fit.scale - 1.0) > SCALE_TOLERANCE:
        raise FrameError(
            Problem(
                came=f"grid {grid}: the control points ask for a scale of {fit.scale:.4f}",
                allowed=f"1 within {SCALE_TOLERANCE:.0%}",
                do="look for a mistyped digit, swapped points, or easting and northing exchanged",
                file=source,
            )
        )
    east, north = fit.forward(local[:, 0], local[:, 1])
    miss = np.hypot(east - mapped[:, 0], north - mapped[:, 1])
    redundancy = 2 * len(local) - 4
    error = math.sqrt(float(np.sum(miss**2)) / redundancy) if redundancy else None
    return fit.model_copy(
        update={
            "residuals_m": tuple((str(n), round(float(m), 6)) for n, m in zip(names, miss, strict=True)),
            "error_m": None if error is None else round(error, 6),
            "origin": f"least-squares similarity on {len(local)} control points",
        }
    )


def _solve(local: np.ndarray, mapped: np.ndarray) -> tuple[tuple[float, float, float, float], float]:
    """Return (a, b, e0, n0) and the sum of squared residuals; centred first, so that large northings cost no digits."""
    l0, m0 = local.mean(axis=0), mapped.mean(axis=0)
    u, w = (local - l0) @ [1, 1j], (mapped - m0) @ [1, 1j]
    turn = np.vdot(u, w) / np.vdot(u, u).real
    shift = m0 @ [1, 1j] - turn * (l0 @ [1, 1j])
    rest = float(np.sum(np.abs(w - turn * u) ** 2))
    return (float(turn.real), float(turn.imag), float(shift.real), float(shift.imag)), rest
