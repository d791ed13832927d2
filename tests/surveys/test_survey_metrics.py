"""The measures themselves, against closed forms and scipy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import mannwhitneyu, norm
from shapely.geometry import LineString, mapping

from planum.records import Similarity

X, Y = np.arange(0.025, 10, 0.05), np.arange(0.025, 8, 0.05)


def truth_of(*walls):
    """Truth with walls of (centre line, width)."""
    return {
        "features": [
            {
                "properties": {"kind": "wall", "width_m": width, "centre_lines": [list(line)]},
                "geometry": mapping(LineString(line).buffer(width / 2, cap_style="flat")),
            }
            for line, width in walls
        ]
    }


ONE = truth_of((((1.0, 2.0), (9.0, 5.0)), 0.5))


def strip(shift, frame=None, width=0.5, x=X, y=Y):
    """A slice of 1 on 0.2 whose strip lies ``shift`` m left of the true wall, with soft edges of 3 cm."""
    px, py = (frame or Similarity()).inverse(*np.meshgrid(x, y))
    c, s = 8 / math.hypot(8, 3), 3 / math.hypot(8, 3)
    away = -(px - 1.0) * s + (py - 2.0) * c - shift
    return 0.2 + 0.8 * norm.cdf((width / 2 - np.abs(away)) / 0.03)


def test_contrast_of_ten_to_one_is_twenty_decibel(metrics):
    """20 log10 10, with cells of no value and cells between both masks left out."""
    inside, outside = metrics.masks(ONE, X, Y)
    plane = np.where(inside, 10.0, np.where(outside, 1.0, 1e6))
    plane[::7] = np.nan
    assert metrics.contrast_db(plane, inside, outside) == pytest.approx(20.0, abs=1e-12)


def test_masks_keep_their_distance(metrics):
    """Inside has the wall's area; outside begins 0.75 m from its edge."""
    inside, outside = metrics.masks(ONE, X, Y)
    assert inside.sum() * 0.05**2 == pytest.approx(math.hypot(8, 3) * 0.5, rel=0.01)  # counting cells of 5 cm
    column = int(np.argmin(np.abs(X - 5.0)))
    rise = math.hypot(8, 3) / 8  # vertical distance per distance across the wall
    first = Y[outside[:, column] & (Y > 3.5)].min()
    assert first == pytest.approx(2.0 + 3 / 8 * (X[column] - 1.0) + (0.25 + 0.75) * rise, abs=0.05)


def test_auc_is_the_rank_sum_statistic(metrics):
    """U / (n m) of scipy's Mann-Whitney test, with ties."""
    rng = np.random.default_rng(3)
    plane = np.round(rng.standard_normal((len(Y), len(X))), 1)
    inside, outside = metrics.masks(ONE, X, Y)
    plane[inside] += 0.7
    u = mannwhitneyu(plane[inside], plane[outside]).statistic
    assert metrics.auc(plane, inside, outside) == pytest.approx(u / (inside.sum() * outside.sum()), abs=1e-12)


def test_auc_of_two_normals(metrics):
    """Phi(d/√2) for unit normals d apart; 1600 cells inside give ± 0.007."""
    rng = np.random.default_rng(4)
    inside, outside = metrics.masks(ONE, X, Y)
    plane = rng.standard_normal(inside.shape) + 1.5 * inside
    assert metrics.auc(plane, inside, outside) == pytest.approx(norm.cdf(1.5 / math.sqrt(2)), abs=0.02)


@pytest.mark.parametrize("shift", [-0.23, 0.0, 0.04, 0.15])
def test_wall_offset_finds_a_moved_strip(metrics, shift):
    """To a quarter of a cell, on a raster whose cells do not fit the wall."""
    found = metrics.wall_offsets(strip(shift), X, Y, ONE)
    assert found.size > 100
    np.testing.assert_allclose(found, shift, atol=0.0125)


def test_wall_offset_on_the_map(metrics):
    """The same in a turned frame with descending rows and large coordinates."""
    turn = math.radians(17)
    frame = Similarity(a=math.cos(turn), b=math.sin(turn), e0=566000.0, n0=5934000.0)
    x, y = 565996 + np.arange(0.025, 16, 0.05), 5934012 - np.arange(0.025, 14, 0.05)
    found = metrics.wall_offsets(strip(0.1, frame, x=x, y=y), x, y, ONE, frame=frame)
    np.testing.assert_allclose(found, 0.1, atol=0.0125)


def test_wall_offset_leaves_out_crossings(metrics):
    """Both walls lose 0.8 m at their ends and what is nearer than 0.8 m to the other."""
    crossed = truth_of((((1.0, 2.0), (9.0, 5.0)), 0.5), (((5.0, 1.0), (5.0, 6.0)), 0.5))
    slant = math.hypot(8, 3) / 8
    metres = (8 * slant - 1.6 - 1.6 * slant) + (5.0 - 1.6 - 1.6 * slant)
    found = metrics.wall_offsets(strip(0.0), X, Y, crossed).size
    assert found == pytest.approx(metres / 0.05, abs=4)  # stations at the four edges


def test_wall_offset_leaves_out_unknown_ground(metrics):
    """Half of the wall has no values."""
    plane = strip(0.0)
    whole = metrics.wall_offsets(plane, X, Y, ONE)
    plane[:, X > 5.0] = np.nan
    known = metrics.wall_offsets(plane, X, Y, ONE)
    assert known.size == pytest.approx(whole.size / 2, abs=20)  # the profiles are 1.8 m wide and slanted
    np.testing.assert_allclose(known, 0.0, atol=0.0125)


def test_wall_top_is_the_first_strong_maximum(metrics):
    """A parabola's vertex exactly; a weaker rise above and a stronger body below do not count."""
    inside, outside = metrics.masks(ONE, X, Y)
    depth = np.arange(0.05, 1.6, 0.05)
    curve = np.maximum(1 - ((depth - 0.463) / 0.12) ** 2, 0) + 0.3 * np.exp(-(((depth - 0.15) / 0.03) ** 2))
    curve += 1.2 * np.exp(-(((depth - 1.0) / 0.05) ** 2))
    stack = 2.0 + curve[:, None, None] * inside
    assert metrics.wall_top_m(stack, depth, inside, outside) == pytest.approx(0.463, abs=1e-6)


def test_wall_top_without_a_maximum_says_so(metrics):
    """A curve that only rises has no top."""
    inside, outside = metrics.masks(ONE, X, Y)
    stack = 1.0 + np.arange(5.0)[:, None, None] * inside
    with pytest.raises(ValueError, match="no maximum between"):
        metrics.wall_top_m(stack, np.arange(5.0), inside, outside)
