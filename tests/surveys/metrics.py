"""How well a slice shows what is known to lie in the ground. Plain arrays in, numbers out.

Rasters are regular with cell centres ``x``, ``y`` in either direction; NaN means nothing is known there. Truth is the
``truth/features.geojson`` of an invented survey, in metres of the scene's frame.
"""

from __future__ import annotations

import json
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import shapely
from scipy.ndimage import map_coordinates, uniform_filter1d
from scipy.stats import rankdata
from shapely.geometry import LineString, shape

from planum.records import Similarity


def read_truth(folder: Path) -> dict[str, Any]:
    """The features of an invented survey."""
    return json.loads((Path(folder) / "truth" / "features.geojson").read_text(encoding="utf-8"))


def scene_to_map(folder: Path) -> Similarity:
    """The true placement of an invented survey on the map; the identity when it has no CRS."""
    frame = json.loads((Path(folder) / "truth" / "survey.json").read_text(encoding="utf-8"))["scene_to_map"]
    return Similarity() if frame is None else Similarity(**frame)


def masks(
    truth: dict[str, Any],
    x: np.ndarray,
    y: np.ndarray,
    *,
    frame: Similarity | None = None,
    kind: str = "wall",
    beyond_m: float = 0.75,
) -> tuple[np.ndarray, np.ndarray]:
    """Cells (y, x) whose centres lie inside the features of one kind, and those farther than ``beyond_m`` from them.

    ``x``, ``y`` are 1-D cell centres on the map; ``frame`` takes scene to map metres.
    """
    area = shapely.union_all([shape(f["geometry"]) for f in truth["features"] if f["properties"]["kind"] == kind])
    local = (frame or Similarity()).inverse(*np.meshgrid(x, y))
    away = shapely.distance(area, shapely.points(*local))
    return away == 0.0, away > beyond_m


def contrast_db(plane: np.ndarray, inside: np.ndarray, outside: np.ndarray) -> float:
    """20 log10 of mean inside over mean outside, cells without a value left out."""
    known = np.isfinite(plane)
    return float(20.0 * np.log10(plane[inside & known].mean() / plane[outside & known].mean()))


def auc(plane: np.ndarray, inside: np.ndarray, outside: np.ndarray) -> float:
    """Probability that a cell inside is brighter than one outside, ties counting half (rank sum)."""
    known = np.isfinite(plane)
    a, b = plane[inside & known], plane[outside & known]
    ranks = rankdata(np.concatenate([a, b]))[: a.size].sum()
    return float((ranks - a.size * (a.size + 1) / 2.0) / (a.size * b.size))


def centre_lines(truth: dict[str, Any]) -> list[tuple[LineString, float]]:
    """Straight stretches of all walls' centre lines (scene metres) with the wall's width."""
    stretches = []
    for feature in truth["features"]:
        facts = feature["properties"]
        for line in facts.get("centre_lines", ()):
            stretches += [(LineString(pair), facts["width_m"]) for pair in pairwise(line)]
    return stretches


def wall_offsets(
    plane: np.ndarray,
    x: np.ndarray,
    y: np.ndarray,
    truth: dict[str, Any],
    *,
    frame: Similarity | None = None,
    window_m: float = 1.0,
    clear_m: float = 0.8,
    search_m: float = 0.4,
) -> np.ndarray:
    """Signed distances in m from the true centre lines to the fitted ones, one per 5 cm of wall, left positive.

    Profiles across the wall are averaged over ``window_m`` along it and fitted with a strip of the wall's width on a
    level ground by least squares over the strip's place (the best place maximises the correlation with the strip).
    Stretches closer than ``clear_m`` to a corner, an end or another wall are left out: there is no profile across.
    """
    frame, step, d = frame or Similarity(), 0.05, 0.0125
    stretches, found = centre_lines(truth), []
    for i, (line, width) in enumerate(stretches):
        stations = np.arange(step / 2, line.length, step)
        places = shapely.get_coordinates(shapely.line_interpolate_point(line, stations))
        others = shapely.union_all([s for j, (s, _) in enumerate(stretches) if j != i]) if len(stretches) > 1 else None
        ends = np.minimum(stations, line.length - stations)
        clear = ends > clear_m
        if others is not None:
            clear &= shapely.distance(others, shapely.points(places)) > clear_m
        (x0, y0), (x1, y1) = line.coords
        left = np.array([-(y1 - y0), x1 - x0]) / line.length
        across = d * np.arange(-round((search_m + width) / d), round((search_m + width) / d) + 1)
        spots = places[:, None, :] + across[None, :, None] * left
        profile = _sampled(plane, x, y, *frame.forward(spots[..., 0], spots[..., 1]))
        known = np.isfinite(profile)
        smooth = uniform_filter1d(np.where(known, profile, 0.0), round(window_m / step), axis=0, mode="nearest")
        share = uniform_filter1d(known.astype(float), round(window_m / step), axis=0, mode="nearest")
        profile = np.where(share > 0.5, smooth / np.maximum(share, 1e-9), np.nan)
        whole = clear & np.isfinite(profile).all(axis=1)
        found.append(_strip_places(profile[whole], across, width, search_m))
    return np.concatenate(found) if found else np.zeros(0)


def wall_top_m(stack: np.ndarray, depth: np.ndarray, inside: np.ndarray, outside: np.ndarray) -> float:
    """Depth in m of the wall tops: first maximum of (mean inside - mean outside) that reaches half of the largest.

    ``stack`` (depth, y, x), ``depth`` the intervals' middles; refined by a parabola through three depths.
    """
    curve = np.array([p[inside & np.isfinite(p)].mean() - p[outside & np.isfinite(p)].mean() for p in stack])
    for k in range(1, len(curve) - 1):
        if curve[k] >= 0.5 * curve.max() and curve[k] >= curve[k - 1] and curve[k] > curve[k + 1]:
            bend = curve[k - 1] - 2.0 * curve[k] + curve[k + 1]
            return float(depth[k] + 0.5 * (curve[k - 1] - curve[k + 1]) / bend * (depth[k + 1] - depth[k]))
    raise ValueError("the walls have no maximum between the first and the last depth")


def _sampled(plane: np.ndarray, x: np.ndarray, y: np.ndarray, px: np.ndarray, py: np.ndarray) -> np.ndarray:
    """Bilinear values at places; NaN outside and beside unknown cells."""
    column, row = (px - x[0]) / (x[1] - x[0]), (py - y[0]) / (y[1] - y[0])
    return map_coordinates(plane, [row, column], order=1, mode="constant", cval=np.nan)


def _strip_places(profile: np.ndarray, across: np.ndarray, width: float, search_m: float) -> np.ndarray:
    """Least-squares place of a strip of known width on a level ground, for each profile (station, across)."""
    d = across[1] - across[0]
    shifts = d * np.arange(-round(search_m / d), round(search_m / d) + 1)
    strips = (np.abs(across[None, :] - shifts[:, None]) <= width / 2.0).astype(float)
    strips -= strips.mean(axis=1, keepdims=True)
    score = profile @ (strips / np.linalg.norm(strips, axis=1, keepdims=True)).T
    best = np.clip(np.argmax(score, axis=1), 1, len(shifts) - 2)
    row = np.arange(len(best))
    a, b, c = score[row, best - 1], score[row, best], score[row, best + 1]
    bend = a - 2.0 * b + c
    part = np.divide(0.5 * (a - c), bend, out=np.zeros_like(bend), where=bend < 0)
    return shifts[best] + d * np.clip(part, -0.5, 0.5)
