"""What a scene holds and says."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from planum.scene.build import build_scene
from planum.scene.drawing import WARM, greys
from planum.scene.frame import frame_of, round_step


def test_the_default_slice_runs_through_the_wall(ring: xr.Dataset) -> None:
    """The wall's own depth is 0.8 m, within 0.35 m."""
    assert abs(build_scene(ring).depth_m - 0.8) < 0.35


def test_the_default_isosurface_is_the_ring_and_the_pipe(ring: xr.Dataset) -> None:
    scene = build_scene(ring)
    bodies = scene.isosurface.connectivity().split_bodies()
    assert len(bodies) == 2
    west, east, south, north, bottom, top = max(bodies, key=lambda b: b.bounds[1] - b.bounds[0]).bounds
    # exp(-(r / w)^4) falls to a half at r = w (ln 2)^(1/4) = 0.912 w: the ring's outer edge stands 3.6 + 0.46 m from
    # (46, 25), its top and foot at 0.8 -+ 0.32 m; the level is half way up to a noisy top: within one cell
    assert (west, east, south, north) == pytest.approx((41.94, 50.06, 20.94, 29.06), abs=0.2)
    assert (bottom, top) == pytest.approx((-1.12, -0.48), abs=0.1)


def test_level_and_slice_can_be_chosen_without_touching_the_first_scene(ring: xr.Dataset) -> None:
    scene = build_scene(ring, level=0.5, slice_depth=0.42)
    assert (scene.level, scene.index, scene.level_origin) == (0.5, 3, "chosen")
    other = scene.at_slice(99).at_level(0.9)
    assert (other.index, other.level) == (13, 0.9)
    assert (scene.index, scene.level) == (3, 0.5)
    assert other.isosurface.n_cells != scene.isosurface.n_cells


def test_texts_state_interval_error_level_and_caution(ring: xr.Dataset) -> None:
    scene = build_scene(ring, slice_depth=0.8, exaggeration=3)
    assert scene.slice_text() == "slice 0.75 to 0.85 m, ± 0.05 m"
    assert "halfway from the median" in scene.level_text()
    assert "depths drawn 3 times taller" in scene.notes()
    assert any("under 1 m across left out" in note for note in scene.notes())
    assert "no clearance to dig" in scene.caution
    assert scene.at_level(12345.6).level_text() == "nothing reaches amplitude 12 346"
    assert "nothing reaches" in scene.at_level(9.0).level_text()
    assert build_scene(ring.isel(depth=[3])).level_text() == "one slice: no isosurface"


def test_lines_lie_on_the_surface_at_their_map_places(ring: xr.Dataset) -> None:
    lines = [
        ("1", np.array([[512_340.0, 5_398_121.0], [512_356.0, 5_398_121.5]])),
        ("2", np.ones((3, 2)) * [512_345, 5_398_125]),
    ]
    drawn = build_scene(ring, lines=lines).lines
    np.testing.assert_allclose(drawn.points[:2], [[40.0, 21.0, 0.0], [56.0, 21.5, 0.0]], atol=1e-4)
    assert drawn.cell_data["number"].tolist() == [0, 1]
    with pytest.raises(ValueError, match="n of at least 2"):
        build_scene(ring, lines=[("1", np.zeros((1, 2)))])


@pytest.mark.parametrize("options", [{"level": np.nan}, {"exaggeration": 0.0}, {"exaggeration": np.inf}])
def test_impossible_numbers_are_refused(ring: xr.Dataset, options: dict[str, float]) -> None:
    with pytest.raises(ValueError, match="must be finite"):
        build_scene(ring, **options)


def test_axis_labels_stand_at_their_places() -> None:
    frame = frame_of((2.0, 14.0, 0.0, 6.0, -1.5, 0.0), origin=(512_300.0, 0.0), exaggeration=1.0)
    texts = {label.text: label.at for label in frame.labels}
    assert texts["1 m"][2] == -1.0
    assert texts["0 m"][2] == 0.0
    assert texts["6"][0] == 6.0
    assert "m east of 512 300" in texts
    assert "m north" in texts
    assert frame.edges.bounds == pytest.approx((2.0, 14.0, 0.0, 6.0, -1.5, 0.0))


def test_the_north_arrow_points_north_and_lies_flat() -> None:
    arrow = frame_of((0.0, 10.0, 0.0, 10.0, -1.0, 0.0), origin=(0.0, 0.0), exaggeration=1.0).north
    tip = arrow.points[np.argmax(arrow.points[:, 1])]
    assert tip[0] == pytest.approx(arrow.points[:, 0].mean(), abs=1e-5)  # float32
    assert np.ptp(arrow.points[:, 2]) == 0.0


@pytest.mark.parametrize(("length", "parts", "step"), [(10.0, 5, 2.0), (1.55, 4, 0.5), (60.0, 9, 10.0), (0.9, 9, 0.1)])
def test_steps_are_one_two_or_five(length: float, parts: int, step: float) -> None:
    assert round_step(length, parts=parts) == pytest.approx(step)


def test_no_step_for_nothing() -> None:
    with pytest.raises(ValueError, match="above 0"):
        round_step(0.0, parts=3)


def test_greys_fall_evenly_and_the_warm_colour_stands_apart_for_dichromats() -> None:
    """Dichromat views after Viénot, Brettel & Mollon 1999 (matrices in linear RGB, from memory)."""
    ramp = greys()[:, :3]
    assert np.all(ramp[:, 0] == ramp[:, 1])
    assert np.all(np.diff(ramp[:, 0]) < 0)
    rgb = (np.array([int(WARM[i : i + 2], 16) for i in (1, 3, 5)]) / 255.0) ** 2.2
    to_lms = np.array([[17.8824, 43.5161, 4.11935], [3.45565, 27.1554, 3.86714], [0.0299566, 0.184309, 1.46709]])
    protan = np.array([[0, 2.02344, -2.52581], [0, 1, 0], [0, 0, 1]])
    deutan = np.array([[1, 0, 0], [0.494207, 0, 1.24827], [0, 0, 1]])
    for view in (protan, deutan):
        seen = np.clip(np.linalg.inv(to_lms) @ view @ to_lms @ rgb, 0, 1) ** (1 / 2.2)
        # a grey has equal channels; a spread of a quarter of the scale is plainly coloured
        assert np.ptp(seen) > 0.25
