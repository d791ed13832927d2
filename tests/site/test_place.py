"""Placing a grid: published worked examples and an independent solver."""

from __future__ import annotations

import math

import numpy as np
import pytest

from planum.errors import FrameError
from planum.records import Similarity
from planum.site.place import fit_similarity


def test_similarity_epsg_9621_example() -> None:
    """EPSG Guidance Note 7-2, method 9621: ED50 / UTM 31 to ETRS89 / UTM 31, printed 299905.060, 4499796.515.

    M 1.00000155, theta 1.56504 seconds, counter-clockwise for the axes. The print is rounded to the millimetre from
    rounded parameters: 2 mm.
    """
    m, theta = 1.00000155, math.radians(1.56504 / 3600)
    # the axes turn by theta, so a point's coordinates turn by -theta
    s = Similarity(a=m * math.cos(theta), b=-m * math.sin(theta), e0=-129.549, n0=-208.185)
    e, n = s.forward(300000.0, 4500000.0)
    assert float(e) == pytest.approx(299905.060, abs=2e-3)
    assert float(n) == pytest.approx(4499796.515, abs=2e-3)
    back = s.inverse(e, n)
    assert np.allclose(back, (300000.0, 4500000.0), atol=1e-6)


def test_bin_grid_epsg_9666_example() -> None:
    """EPSG Guidance Note 7-2, method 9666 (seismic bin grid, right-handed): bin (300, 247) at 464855.62, 5837055.90.

    Origin (1, 1) at 456781.00, 5836723.00; bins 25 x 12.5 m; scale 0.99984; J axis bearing 20 degrees. The local
    frame is the bins in metres: x along I (bearing 110), y along J; 5 mm is the example's own rounding.
    """
    k, bearing = 0.99984, math.radians(20.0)
    s = Similarity(a=k * math.cos(bearing), b=-k * math.sin(bearing), e0=456781.0, n0=5836723.0)
    e, n = s.forward((300 - 1) * 25.0, (247 - 1) * 12.5)
    assert float(e) == pytest.approx(464855.62, abs=5e-3)
    assert float(n) == pytest.approx(5837055.90, abs=5e-3)
    i, j = s.inverse(e, n)
    assert float(i) / 25.0 + 1 == pytest.approx(300, abs=1e-9)
    assert float(j) / 12.5 + 1 == pytest.approx(247, abs=1e-9)


def test_fit_recovers_a_known_similarity_and_agrees_with_svd() -> None:
    """Five points, scale 0.9996, 37.5 degrees, UTM-sized coordinates; the noisy fit equals an SVD solution."""
    rng = np.random.default_rng(5)
    local = rng.uniform(0, 40, (5, 2))
    truth = Similarity(
        a=0.9996 * math.cos(math.radians(37.5)), b=0.9996 * math.sin(math.radians(37.5)), e0=500100.0, n0=5400200.0
    )
    mapped = np.column_stack(truth.forward(local[:, 0], local[:, 1]))
    fit = fit_similarity("abcde", local, mapped, grid="A")
    assert fit.scale == pytest.approx(0.9996, abs=1e-8)
    assert fit.rotation_deg == pytest.approx(37.5, abs=1e-6)
    noisy = mapped + rng.normal(0, 0.02, mapped.shape)
    fit = fit_similarity("abcde", local, noisy, grid="A")
    origin = noisy.mean(axis=0)

    # the same least squares as one linear system, solved by numpy's SVD
    x, y = local.T
    one, zero = np.ones(5), np.zeros(5)
    system = np.vstack([np.column_stack([x, -y, one, zero]), np.column_stack([y, x, zero, one])])
    other, rest, *_ = np.linalg.lstsq(system, (noisy - origin).T.ravel(), rcond=None)
    assert [fit.a, fit.b] == pytest.approx(list(other[:2]), abs=1e-9)
    assert fit.error_m == pytest.approx(math.sqrt(rest[0] / 6), abs=1e-6)


def test_mirrored_frame_is_recognised_and_named() -> None:
    """A frame whose y runs to the other hand fits mirrored, and says so."""
    local = np.array([[0, 0], [20, 0], [20, 16], [0, 16.0]])
    mapped = local * [1, -1] + [500000, 5400000]
    fit = fit_similarity("abcd", local, mapped, grid="A")
    assert fit.mirrored
    assert fit.error_m == pytest.approx(0.0, abs=1e-6)
    x, y = fit.inverse(*fit.forward(local[:, 0], local[:, 1]))
    assert np.allclose(np.column_stack([x, y]), local)


def test_digit_slip_is_refused() -> None:
    """A scale far from 1 means a mistyped coordinate."""
    local = np.array([[0, 0], [20, 0], [0, 16.0]])
    with pytest.raises(FrameError, match=r"scale of 1\.\d+; 1 within 2%; look for a mistyped digit"):
        fit_similarity("abc", local, local * 1.1 + 1000.0, grid="A")


def test_one_point_is_not_enough() -> None:
    """Two distinct points at least."""
    with pytest.raises(FrameError, match="grid A has 1 usable control point"):
        fit_similarity("a", np.zeros((1, 2)), np.zeros((1, 2)), grid="A")
