"""Two-way times and depths against closed forms: straight rays, and the hyperbola of a point."""

from __future__ import annotations

import numpy as np
import pytest

from planum.records import Velocity


def velocity(v=0.1):
    return Velocity.constant(v, 0.005, origin="given")


@pytest.mark.parametrize(
    ("x", "expected_ns"),
    # closed form 2 sqrt(z² + x²) / v for a point at z = 1 m and v = 0.1 m/ns, five decimals
    [(0.0, 20.0), (0.5, 22.36068), (1.0, 28.28427), (2.0, 44.72136)],
)
def test_time_along_a_diffraction_is_the_time_of_its_slant_distance(x, expected_ns):
    assert velocity().time(np.hypot(1.0, x), separation_m=0.0) == pytest.approx(expected_ns, abs=5e-6)


@pytest.mark.parametrize(
    ("x", "expected_ns"),
    # closed form (sqrt(z² + (x-s/2)²) + sqrt(z² + (x+s/2)²)) / v, s = 0.2 m, z = 1 m, five decimals
    [(0.0, 20.09975), (0.5, 22.43223), (1.0, 28.31969), (2.0, 44.73032)],
)
def test_separated_antennas_see_a_diffraction_as_two_half_paths(x, expected_ns):
    # Each half path is half of a coincident-antenna time to the same slant distance.
    there = velocity().time(np.hypot(1.0, x - 0.1), separation_m=0.0) / 2.0
    back = velocity().time(np.hypot(1.0, x + 0.1), separation_m=0.0) / 2.0
    assert there + back == pytest.approx(expected_ns, abs=5e-6)


def test_separation_counts_above_the_target():
    """Closed form 2 sqrt(z² + (s/2)²) / v: 20.09975 ns at 1 m; at 0.2 m 4.47214 against 4.0 without separation."""
    assert velocity().time(1.0, separation_m=0.2) == pytest.approx(20.09975, abs=5e-6)
    assert velocity().time(0.2, separation_m=0.2) == pytest.approx(4.47214, abs=5e-6)
    assert velocity().time(0.2, separation_m=0.0) == pytest.approx(4.0, abs=1e-12)


@pytest.mark.parametrize(
    ("time_ns", "expected_m"),
    # closed form sqrt((v t / 2)² - (s/2)²), s = 0.16 m, v = 0.1 m/ns, five decimals (v t / 2 alone gives 0.25, 0.5, 1)
    [(5.0, 0.23685), (10.0, 0.49356), (20.0, 0.99679)],
)
def test_depth_takes_the_separation_off_the_slant_path(time_ns, expected_m):
    assert velocity().depth(time_ns, separation_m=0.16) == pytest.approx(expected_m, abs=5e-6)


def test_depth_undoes_time():
    depth = np.linspace(0.0, 3.0, 31)
    for v in (0.06, 0.1, 0.15):
        back = velocity(v).depth(velocity(v).time(depth, separation_m=0.16), separation_m=0.16)
        assert back == pytest.approx(depth, abs=1e-8)  # a square root of a difference near 0 m costs half the digits


def test_nothing_is_deep_before_the_direct_ground_wave():
    assert velocity().depth(np.array([-1.0, 0.0, 1.5]), separation_m=0.16) == pytest.approx(0.0)


def test_depth_error_agrees_with_a_finite_difference():
    """Velocity alone: the change of depth when velocity changes by its error, central difference."""
    depth = np.array([0.3, 1.0, 2.0])
    low, mid, high = (velocity(v) for v in (0.0995, 0.1, 0.1005))
    time = mid.time(depth, separation_m=0.16)
    slope = (high.depth(time, separation_m=0.16) - low.depth(time, separation_m=0.16)) / 0.001
    told = mid.depth_error(depth, separation_m=0.16, zero_error_ns=0.0, thickness_m=0.0, sample_ns=0.0)
    assert told == pytest.approx(slope * 0.005, rel=1e-3)  # second-order terms of a 0.5 % step
