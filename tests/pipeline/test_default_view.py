"""What the three-dimensional view shows without being asked, on grounds of known content."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from planum.pipeline.run import map_site
from planum.scene.build import build_scene
from planum.synthetic.folder import Layout, write_survey
from planum.synthetic.scene import Layer, Scene, Stone, Stones, Wall, box
from planum.viewer.load import load_run

SOUTH_WEST, NORTH_EAST = (1.2, 1.0), (5.2, 4.0)
TOP, BASE = 0.45, 0.95


def test_strong_stones_do_not_hide_the_walls(tmp_path: Path, no_isosurface: None) -> None:
    """Four walls from 0.45 to 0.95 m and eight stones a hundred times the clutter: the walls stand on the slice."""
    (west, south), (east, north) = SOUTH_WEST, NORTH_EAST
    ring = ((west, south), (east, south), (east, north), (west, north), (west, south))
    rng = np.random.default_rng(1)
    strong = tuple(
        Stone(f"stone {i}", *rng.uniform((0.3, 0.3, 0.15), (6.2, 4.7, 0.35)), strength=0.06) for i in range(8)
    )
    ground = box(-1.0, -1.0, 9.0, 7.0)
    clutter = (
        Stones("clutter", ground, 3000, 0.15, 1.8, 0.0006),
        Layer("plough soil", ground, 0.28, 0.03, 3.0, 0.04),
    )
    write_survey(
        tmp_path / "site",
        Scene((Wall("walls", ring, 0.6, TOP, BASE), *strong, *clutter)),
        Layout(length_m=6.5, width_m=5.0),
        seed=1,
    )
    with (tmp_path / "site" / "survey.toml").open("a", encoding="utf-8") as file:
        file.write(
            "\n[ground]\nvelocity_m_per_ns = 0.0875\n\n[slices]\nbottom_m = 1.4\nthickness_m = 0.1\nstep_m = 0.1\n"
        )
    slices, lines = load_run(map_site(tmp_path / "site").out)
    with slices:
        scene = build_scene(slices, lines=lines)
        points = scene.isosurface.points
        # walls are there: the body spans the rectangle, to half a line spacing and the width of the walls
        (body,) = [b for b in scene.isosurface.connectivity().split_bodies() if np.ptp(b.points[:, 0]) > 3.0]
        assert body.bounds[:4] == pytest.approx((west, east, south, north), abs=0.6)
        assert scene.depth_m >= TOP
        # most of the isosurface lies above the opaque slice
        assert np.mean(-points[:, 2] < scene.depth_m) > 0.5
