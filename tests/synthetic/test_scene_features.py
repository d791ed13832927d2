"""Features lie where they say, and are as large as geometry wants."""

from __future__ import annotations

import json

import numpy as np
import pytest
import shapely
from shapely.geometry import shape

from planum.synthetic.scene import Ditch, Floor, Gravel, Layer, Pipe, Pit, Roots, Scene, Stone, Stones, Wall, box, disc

RING = Wall("ring", (*box(0, 0, 8, 6), (0, 0)), 0.6, 0.45, 1.0, openings=((2.6, 3.7),))
ALL = (
    RING,
    Wall("bent", ((0, 0), (3, 0), (3, 2)), 0.5),
    Floor("floor", box(1, 1, 3, 2), 0.7),
    Pit("pit", disc(2, 2, 0.8), 0.4, 1.1),
    Ditch("ditch", ((0, 0), (4, 1)), 1.5, 0.4, 1.2),
    Pipe("pipe", ((0, 0), (3, 4)), 0.8),
    Gravel("gravel", box(0, 0, 2, 1), 0.3, 0.5),
    Roots("roots", 1, 1),
    Layer("layer", box(0, 0, 3, 3), 0.3),
    Stones("clutter", box(0, 0, 3, 3), 500, 0.2, 1.5),
    Stone("stone", 1.0, 2.0, 0.6, 0.004),
)


def test_ring_wall_has_the_area_of_its_geometry():
    """8.6 x 6.6 less 7.4 x 5.4, less the doorway of 1.1 x 0.6: mitred corners, also where the polyline closes."""
    assert RING.plan().area == pytest.approx(8.6 * 6.6 - 7.4 * 5.4 - 1.1 * 0.6, abs=1e-9)
    assert len(RING.centre_lines()) == 1


def test_closed_wall_without_openings_is_a_ring():
    """The same without the doorway."""
    assert Wall("w", (*box(0, 0, 8, 6), (0, 0)), 0.6).plan().area == pytest.approx(8.6 * 6.6 - 7.4 * 5.4, abs=1e-9)


def test_straight_wall_with_two_doors_falls_into_three():
    """Length 10 less 2 x 1, width 0.5."""
    wall = Wall("w", ((0, 0), (10, 0)), 0.5, openings=((6, 7), (2, 3)))
    assert [line.length for line in wall.centre_lines()] == pytest.approx([2, 3, 3])
    assert wall.plan().area == pytest.approx(4.0, abs=1e-12)


@pytest.mark.parametrize("feature", ALL, ids=lambda f: f.name)
def test_scatterers_stay_inside_plan_and_depths(feature):
    """Plan to a millimetre, depths to five standard deviations of the stated roughness (1 to 2.5 cm)."""
    found = feature.scatterers(np.random.default_rng(1))
    assert len(found.points) == len(found.reflectivity) > 0
    top, base = feature.depths()
    slack = 0.075 if feature.kind in ("wall", "floor", "ditch", "layer") else 1e-9
    assert found.points[:, 2].min() >= top - slack
    assert found.points[:, 2].max() <= base + slack
    if (plan := feature.plan()) is not None:
        assert shapely.contains_xy(plan.buffer(1e-3), found.points[:, 0], found.points[:, 1]).all()


def test_surface_strength_is_per_square_metre():
    """Reflectivity sums to strength times area: 2 m² x 0.5; 800 pieces of 50 % roughness give ± 1.8 %."""
    q = Floor("f", box(1, 1, 3, 2), 0.7, strength=0.5).scatterers(np.random.default_rng(2)).reflectivity
    assert q.sum() == pytest.approx(1.0, rel=0.07)


def test_pipe_strength_is_per_metre():
    """5 m x 0.05, exactly: nothing is random."""
    assert Pipe("p", ((0, 0), (3, 4)), 0.8, strength=0.05).scatterers(np.random.default_rng(0)).reflectivity.sum() == (
        pytest.approx(0.25, rel=1e-12)
    )


def test_pit_and_ditch_are_deepest_in_the_middle():
    """The pit reaches its base at the centre, the ditch along its centre line."""
    pit = Pit("pit", disc(2, 2, 0.8), 0.4, 1.1).scatterers(np.random.default_rng(1)).points
    away = np.hypot(pit[:, 0] - 2, pit[:, 1] - 2)
    assert pit[np.argmin(away), 2] == pytest.approx(1.1, abs=0.02)
    assert np.corrcoef(away, pit[:, 2])[0, 1] < -0.9
    ditch = Ditch("ditch", ((0, 0), (4, 0)), 1.5, 0.4, 1.2).scatterers(np.random.default_rng(1)).points
    expected = 1.2 - 0.8 * (ditch[:, 1] / 0.75) ** 2  # the parabola of the docstring
    np.testing.assert_allclose(ditch[:, 2], expected, atol=0.06)  # five standard deviations of 1 cm, and a little


def test_one_more_feature_moves_no_other():
    """Each feature draws from its own stream."""
    few, more = Scene(ALL[:3]).scatterers(7), Scene(ALL[:4]).scatterers(7)
    n = len(few.points)
    np.testing.assert_array_equal(more.points[:n], few.points)
    np.testing.assert_array_equal(more.reflectivity[:n], few.reflectivity)


def test_seed_decides_the_scene():
    """Equal for equal seeds, different for others."""
    np.testing.assert_array_equal(Scene(ALL).scatterers(7).points, Scene(ALL).scatterers(7).points)
    assert np.any(Scene(ALL).scatterers(7).points[0] != Scene(ALL).scatterers(8).points[0])


def test_empty_scene_has_no_scatterers():
    """No feature, no answer."""
    assert Scene().scatterers(1).points.shape == (0, 3)


def test_truth_names_everything_that_has_a_place():
    """Plain JSON with plan, top and base; clutter and layers have no place."""
    truth = json.loads(json.dumps(Scene(ALL).truth(), allow_nan=False))
    named = {f["properties"]["name"]: f for f in truth["features"]}
    assert set(named) == {f.name for f in ALL} - {"layer", "clutter"}
    assert named["ring"]["properties"]["top_m"] == 0.45
    assert named["ring"]["properties"]["base_m"] == 1.0
    assert shape(named["ring"]["geometry"]).area == pytest.approx(RING.plan().area, abs=0.01)  # corners to 0.1 mm
    assert len(named["ring"]["properties"]["centre_lines"]) == 1
