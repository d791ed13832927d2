"""The step-by-step chain in ``benchmarks/`` on scenes whose answer is known: it must deserve to be compared with."""

from __future__ import annotations

import math
import runpy
from pathlib import Path

import numpy as np
import pytest

from planum.synthetic import ready
from planum.synthetic.folder import write_survey
from planum.synthetic.scene import Stone

CHAIN = runpy.run_path(str(Path(__file__).parents[2] / "benchmarks" / "reference_chain.py"))


@pytest.fixture(scope="module")
def stones(tmp_path_factory):
    folder = tmp_path_factory.mktemp("stones")
    scene, layout = ready.stones()
    write_survey(folder, scene, layout, seed=2)
    edges = np.arange(0.2, 1.3, 0.02)
    kit = {
        "velocity": scene.ground.velocity_m_per_ns,
        "intervals": np.column_stack([edges, edges + 0.02]),
        "cell": 0.05,
    }
    sharp, x, y = CHAIN["depth_slices"](folder, **kit)
    raw, _, _ = CHAIN["depth_slices"](folder, **kit, migrated=False)
    return [f for f in scene.features if isinstance(f, Stone)], sharp, raw, x, y, edges + 0.01


def around(stone, stack, x, y, depth):
    """Values within 0.3 m of a stone in plan and 0.15 m in depth, zero elsewhere."""
    near = np.hypot(*np.meshgrid(x - stone.x_m, y - stone.y_m)) < 0.3
    return np.where(near[None] & (np.abs(depth - stone.depth_m) < 0.15)[:, None, None], np.nan_to_num(stack), 0.0)


def width_at_half(row, step):
    """Length over which a row stays above half of its maximum, round the maximum, m."""
    k = int(np.argmax(row))
    low = k - np.argmax(row[k::-1] < row[k] / 2)
    high = k + np.argmax(row[k:] < row[k] / 2)
    return (high - low - 1) * step


def test_stones_come_to_a_point_where_they_lie(stones):
    """Place to a cell and a half in plan; depth to 2 cm, the sampling's share (0.3 ns is 1.35 cm)."""
    found, sharp, _, x, y, depth = stones
    for stone in found:
        k, i, j = np.unravel_index(np.argmax(around(stone, sharp, x, y, depth)), sharp.shape)
        assert math.hypot(x[j] - stone.x_m, y[i] - stone.y_m) < 0.075
        assert depth[k] == pytest.approx(stone.depth_m, abs=0.02)


def test_migration_narrows_stones(stones):
    """The width along the line falls by 2.5 at least: 0.1 m is a wavelength's half at 400 MHz and 0.09 m/ns."""
    found, sharp, raw, x, y, depth = stones
    for stone in found:
        widths = []
        for stack in (sharp, raw):
            k, i, _ = np.unravel_index(np.argmax(around(stone, stack, x, y, depth)), stack.shape)
            widths.append(width_at_half(around(stone, stack, x, y, depth)[k, i], x[1] - x[0]))
        assert widths[0] <= 0.15
        assert widths[0] <= widths[1] / 2.5


@pytest.mark.parametrize("scene_of", [ready.one_page, ready.wall_along_lines])
def test_walls_come_through(scene_of, tmp_path):
    """Also the wall that fills three lines from end to end: the median trace of 17 lines keeps it."""
    scene, layout = scene_of()
    written = write_survey(tmp_path, scene, layout, seed=2)
    stack, x, y = CHAIN["depth_slices"](
        tmp_path, velocity=scene.ground.velocity_m_per_ns, intervals=np.array([[0.45, 0.55], [0.45, 0.95]])
    )
    contrast, auc = CHAIN["judge"](stack, x, y, written.features)
    assert contrast[0] > 10.0  # their tops are seven times as strong as the demo's (1 against 0.145 per m²)
    assert auc[1] > 0.95
