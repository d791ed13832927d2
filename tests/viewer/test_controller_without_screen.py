"""The controller: every change of state, and the parts of the picture it touches."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
import xarray as xr

from planum.records import Statement
from planum.scene.build import build_scene
from planum.viewer.control import Controller


@pytest.fixture
def control(ring: xr.Dataset, statement: Callable[[float, float], Statement]) -> Controller:
    lines = [("1", np.array([[512_340.0, 5_398_121.0], [512_356.0, 5_398_121.0]]))]
    return Controller(build_scene(ring, lines=lines, slice_depth=0.5), (statement(0.35, 0.45), statement(0.55, 0.65)))


def test_a_step_down_is_the_next_deeper_slice(control: Controller) -> None:
    assert control.step(1) == {"slice", "text"}
    assert control.scene.depth_m == pytest.approx(0.6)
    control.step(-2)
    assert control.scene.depth_m == pytest.approx(0.4)
    assert control.scene.plane.bounds[4] == pytest.approx(-0.4, abs=1e-6)


def test_steps_stop_at_the_ends_and_then_change_nothing(control: Controller) -> None:
    control.step(-100)
    assert control.scene.index == 0
    assert control.step(-1) == frozenset()
    control.step(100)
    assert control.scene.depth_m == pytest.approx(control.depths[1])
    assert control.step(1) == frozenset()


def test_the_depth_slider_goes_to_the_nearest_slice(control: Controller) -> None:
    assert control.to_depth(0.97) == {"slice", "text"}
    assert control.scene.depth_m == pytest.approx(1.0)
    assert control.to_depth(1.01) == frozenset()


def test_a_higher_level_encloses_less(control: Controller) -> None:
    control.to_level(0.5)
    wide = control.scene.isosurface.volume
    assert control.to_level(0.9) == {"isosurface", "text"}
    assert control.scene.isosurface.volume < wide
    assert control.to_level(0.9) == frozenset()


def test_switches_leave_the_scene_itself_alone(control: Controller) -> None:
    assert control.toggle_isosurface() == {"isosurface", "text"}
    assert control.toggle_lines() == {"lines"}
    shown = control.shown()
    assert (shown.isosurface.n_cells, shown.lines.n_cells) == (0, 0)
    assert control.level_text() == "isosurface off"
    control.toggle_isosurface()
    control.toggle_lines()
    assert control.shown().isosurface.n_cells == control.scene.isosurface.n_cells > 0
    assert control.shown().lines.n_cells == 1


def test_the_status_is_the_statement_of_the_slice_in_view(
    control: Controller, statement: Callable[[float, float], Statement]
) -> None:
    control.to_depth(0.6)
    assert control.status() == statement(0.55, 0.65).sentence()
    control.to_depth(0.9)  # no statement reaches here
    assert control.status() == "slice 0.85 to 0.95 m, ± 0.06 m below the surface."


def test_a_message_lasts_until_the_next_change(control: Controller) -> None:
    assert control.say("written") == {"text"}
    assert control.toggle_lines() == {"lines", "text"}
    assert control.message == ""


def test_the_slider_of_levels_runs_over_the_smoothed_slices(control: Controller, ring: xr.Dataset) -> None:
    low, high = control.levels
    # smoothing takes from the noisy top of the wall, not from where it ends: just below it a body still stands
    assert float(ring.amplitude.median()) < low < high < float(ring.amplitude.max())
    assert control.scene.at_level(high).isosurface.n_cells == 0
    assert control.scene.at_level(low + 0.7 * (high - low)).isosurface.n_cells > 0


def test_a_picture_is_named_after_code_and_depth(control: Controller) -> None:
    assert control.picture_name() == "MBF1_d045-055cm"


def test_a_picture_with_the_isosurface_off_says_so(control: Controller) -> None:
    control.toggle_isosurface()
    assert control.shown().level_text() == control.level_text() == "isosurface off"
    control.toggle_isosurface()
    assert control.shown().level_text().startswith("isosurface at amplitude")
