"""The score of extended structure: walls win, stones lose, whatever their strength."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from scipy.stats import norm

from planum.slices.structure import best_slices, coarse, smoothed, structure

SPACING = 5.0
"""Cells between lines in these planes."""


def ground(rng: np.random.Generator) -> np.ndarray:
    """Return noise as a slice has it: positive, correlated over a cell or two."""
    noise = np.abs(gaussian_filter(rng.normal(size=(300, 320)), 1.5))
    return 0.3 * noise / noise.std()


def wall() -> np.ndarray:
    """Return a square of walls 10 cells thick."""
    y, x = np.mgrid[:300, :320]
    away = np.maximum(np.abs(x - 150), np.abs(y - 150))
    return ((away > 70) & (away <= 80)).astype(float)


def stones(rng: np.random.Generator, cells: int) -> np.ndarray:
    """Return stones of 2 x 5 cells, seen by one line each, until they cover as many cells."""
    plane = np.zeros((300, 320))
    while plane.sum() < cells:
        y, x = rng.integers(0, 295), rng.integers(0, 318)
        plane[y : y + 5, x : x + 2] = 1.0
    return plane


@pytest.mark.parametrize("strength", [1.0, 5.0, 50.0])
@pytest.mark.parametrize("seed", [0, 1, 2])
def test_a_wall_beats_as_many_cells_of_stones(seed: int, strength: float) -> None:
    rng = np.random.default_rng(seed)
    walls = wall()
    many = stones(rng, int(walls.sum()))
    found = structure(ground(rng) + walls, spacing=SPACING)
    # twice: the margin over the stones, whose score does not grow with their strength
    assert found > 2.0 * structure(ground(rng) + strength * many, spacing=SPACING)


def test_a_handful_of_huge_stones_in_quiet_ground_loses_to_walls_that_fill_a_fifth() -> None:
    """Ten stones of 5 x 15 cells, 300 standard deviations strong, against walls that a median deviation would drown."""
    rng = np.random.default_rng(6)
    quiet, walls = 0.1 * ground(rng), ground(rng)
    for y, x in zip(rng.integers(0, 285, 10), rng.integers(0, 310, 10), strict=True):
        quiet[y : y + 15, x : x + 5] += 300 * quiet.std()
    y, x = np.mgrid[:300, :320]
    away = np.maximum(np.abs(x - 150), np.abs(y - 150))
    inside = (away > 60) & (away <= 95)
    assert inside.mean() > 0.2
    assert structure(walls + 1.5 * inside, spacing=SPACING) > 1.5 * structure(quiet, spacing=SPACING)


def test_the_quantile_that_stones_win_would_choose_them() -> None:
    """The test above would be idle if raw quantiles told walls from stones as well."""
    rng = np.random.default_rng(0)
    walls, few = ground(rng) + wall(), ground(rng) + 5.0 * stones(rng, int(wall().sum()))
    assert np.quantile(few, 0.99) > 2.0 * np.quantile(walls, 0.99)


def test_normal_noise_scores_its_own_quantile() -> None:
    """Smoothed normal noise is normal: the 0.985 quantile in standard deviations, from scipy.stats."""
    noise = np.random.default_rng(3).normal(size=(2000, 2000))
    # about 2000^2 / (4 pi 6.25^2) = 8000 independent places: the quantile is good to 2 %, three times that allowed
    assert structure(noise, spacing=SPACING) == pytest.approx(norm.ppf(0.985), rel=0.06)


@pytest.mark.parametrize("factor", [1e-6, 3.0, 1e6])
def test_the_unit_and_the_zero_of_amplitude_do_not_matter(factor: float) -> None:
    plane = ground(np.random.default_rng(4)) + wall()
    # float32 planes: seven digits, and the offset takes one
    assert structure(factor * (plane + 2.0), spacing=SPACING) == pytest.approx(
        structure(plane, spacing=SPACING), rel=1e-4
    )


def test_a_stripe_without_data_does_not_matter() -> None:
    plane = ground(np.random.default_rng(5)) + wall()
    gap = plane.copy()
    gap[120:125] = np.nan
    # a sixtieth of the plane is missing; zeros in its place would be a structure of their own
    assert structure(gap, spacing=SPACING) == pytest.approx(structure(plane, spacing=SPACING), rel=0.03)


def test_the_fineness_of_the_cells_does_not_matter() -> None:
    plane = ground(np.random.default_rng(6)) + wall()
    finer = np.repeat(np.repeat(plane, 3, axis=0), 3, axis=1)
    # joined cells and the cut Gaussian differ a little
    assert structure(finer, spacing=3 * SPACING) == pytest.approx(structure(plane, spacing=SPACING), rel=0.03)


def test_nothing_known_or_nothing_there_scores_nought() -> None:
    assert structure(np.full((40, 50), np.nan), spacing=SPACING) == 0.0
    assert structure(np.zeros((40, 50)), spacing=SPACING) == 0.0


def test_a_wall_in_ground_without_any_scatter_still_counts() -> None:
    plane = np.zeros((300, 300))
    plane[:, 140:150] = 1.0
    assert 1.0 < structure(plane, spacing=1.0) < np.inf


def test_smoothing_keeps_constants_and_unknown_cells() -> None:
    plane = np.full((30, 40), 7.0, np.float32)
    plane[:, 20:23] = np.nan
    plane[0, 0] = np.nan
    soft = smoothed(plane, sigma=3.0)
    np.testing.assert_array_equal(np.isnan(soft), np.isnan(plane))
    np.testing.assert_allclose(soft[np.isfinite(soft)], 7.0, rtol=1e-6)  # float32
    assert smoothed(plane, sigma=0.0) is plane


def test_smoothing_spreads_a_point_as_a_gaussian() -> None:
    """Variance of the spread is that of the kernel; source: moments of the normal distribution."""
    plane = np.zeros((61, 61), np.float32)
    plane[30, 30] = 1.0
    soft = smoothed(plane, sigma=4.0).astype(float)
    x = np.arange(61) - 30.0
    assert soft.sum() == pytest.approx(1.0, rel=1e-5)
    # cut at three standard deviations, which takes 2.7 % of the variance: 1 - 6 phi(3) / (2 Phi(3) - 1)
    cut = 1.0 - 6.0 * norm.pdf(3.0) / (2.0 * norm.cdf(3.0) - 1.0)
    assert (soft.sum(axis=0) * x**2).sum() == pytest.approx(16.0 * cut, rel=0.02)  # sampled in whole cells


def test_joined_cells_are_the_means_of_what_is_known() -> None:
    plane = np.arange(20.0, dtype=np.float32).reshape(4, 5)
    plane[0, 0] = plane[2, 4] = plane[3, 4] = np.nan
    expected = [[(1 + 5 + 6) / 3, 5.0, 6.5], [13.0, 15.0, np.nan]]
    np.testing.assert_allclose(coarse(plane, 2), expected, rtol=1e-6)
    assert coarse(plane, 1) is plane


def test_the_best_slices_lie_at_least_two_apart_in_depth_order() -> None:
    assert best_slices([1.0, 9.0, 8.0, 7.0, 1.5, 6.0]) == [1, 3, 5]
    assert best_slices([3.0, 1.0, 4.0, 1.0, 5.0], most=2) == [2, 4]
    assert best_slices([]) == []
