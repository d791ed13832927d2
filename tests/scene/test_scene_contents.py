"""What a scene holds and says."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import pyvista as pv
import xarray as xr
from scipy.ndimage import gaussian_filter

from planum.scene.build import build_scene
from planum.scene.drawing import WARM, greys
from planum.scene.frame import frame_of, round_step


def test_the_default_slice_is_the_foot_of_the_wall(ring: xr.Dataset) -> None:
    """The wall fades as exp(-((d - 0.8) / 0.35)^4): half at 1.12 m, a twentieth at 1.26 m, nothing at 1.4 m."""
    assert 1.05 < build_scene(ring).depth_m < 1.35


def test_the_default_isosurface_is_the_ring_and_the_pipe(ring: xr.Dataset) -> None:
    scene = build_scene(ring)
    bodies = scene.isosurface.connectivity().split_bodies()
    assert len(bodies) == 2
    west, east, south, north, bottom, top = max(bodies, key=lambda b: b.bounds[1] - b.bounds[0]).bounds
    # exp(-(r / w)^4) falls to a half at r = w (ln 2)^(1/4) = 0.912 w: the ring's outer edge stands 3.6 + 0.46 m from
    # (46, 25), its top and foot at 0.8 -+ 0.32 m; smoothing leaves an edge's half height where it is and the level is
    # half way up to a noisy top: within one cell
    assert (west, east, south, north) == pytest.approx((41.94, 50.06, 20.94, 29.06), abs=0.2)
    assert (bottom, top) == pytest.approx((-1.12, -0.48), abs=0.1)


def cluttered(seed: int) -> xr.Dataset:
    """Return a site of 16 m x 20 m in 5 cm cells: a wall of 1 x 9 m at 0.65 to 0.95 m, under stones twice as strong.

    1500 stones of one or two lines' width (10 x 25 cm) lie at 0.1 to 0.3 m: more cells than the wall has.
    """
    rng = np.random.default_rng(seed)
    depth, y, x = 0.1 + 0.1 * np.arange(12), 0.05 * np.arange(320), 0.05 * np.arange(400)
    amplitude = np.abs(gaussian_filter(rng.normal(size=(12, 320, 400)), (0.7, 2.0, 1.0)))
    amplitude *= 0.2 / amplitude.std()
    for d, n, e in zip(rng.integers(0, 3, 1500), rng.integers(0, 315, 1500), rng.integers(0, 398, 1500), strict=True):
        amplitude[d, n : n + 5, e : e + 2] += 4.0
    amplitude[6:9, 100:280, 150:170] += 2.0
    return xr.Dataset(
        {
            "amplitude": (("depth", "y", "x"), amplitude.astype(np.float32)),
            "coverage": (("y", "x"), np.ones((320, 400), np.uint8)),
            "depth_bounds": (("depth", "bound"), np.stack([depth - 0.05, depth + 0.05], 1)),
            "depth_error": ("depth", np.full(12, 0.03)),
        },
        coords={"depth": depth, "x": x, "y": y},
        attrs={"cell_m": 0.05},
    )


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_wall_is_shown_under_stones_twice_as_strong(seed: int) -> None:
    scene = build_scene(cluttered(seed))
    # the last slice the wall is in: 0.9 m
    assert scene.depth_m == pytest.approx(0.9)
    bodies = scene.isosurface.connectivity().split_bodies()
    wall = max(bodies, key=lambda b: b.area)
    # typed from x 7.475 to 8.475 and y 4.975 to 13.975 m. Smoothed by 0.25 m, an edge passes 16 to 84 % of its height
    # within that distance (normal distribution), and the level lies between; upright only half a step of slices is lost
    assert wall.bounds[:4] == pytest.approx((7.475, 8.475, 4.975, 13.975), abs=0.25)
    assert wall.bounds[4:] == pytest.approx((-0.95, -0.65), abs=0.05)
    # nothing of the stones is larger than a quarter of it
    assert sum(b.area for b in bodies if b is not wall) < 0.25 * wall.area


def test_the_level_applies_to_the_smoothed_slices_and_the_notes_say_so(ring: xr.Dataset) -> None:
    """A field cos(kx) keeps its places and loses exp(-(k s)^2 / 2) of its height (Fourier transform of a Gaussian)."""
    wave = ring.assign(amplitude=(ring.amplitude * 0.0).fillna(0.0) + np.cos(np.pi * (ring.x - ring.x[0]) / 4.0))
    scene = build_scene(wave, level=0.5)
    assert "isosurface of slices smoothed over 0.5 m" in scene.notes()
    kept = np.exp(-0.5 * (np.pi / 4.0 * 0.25) ** 2)
    edges = np.arccos(0.5 / kept) * 4.0 / np.pi  # m from a crest
    x = scene.isosurface.points[:, 0].astype(float) - scene.block.x[0]
    inner = x[(x > 4.0) & (x < 12.0)]  # one crest at 8 m, away from the rims
    # linear interpolation in cells of 0.2 m, of second order: (0.2 pi / 4)^2 / 8 of the height
    np.testing.assert_allclose(np.abs(inner - 8.0), edges, atol=0.005)
    raw = np.arccos(0.5) * 4.0 / np.pi
    assert raw - edges > 0.01  # the unsmoothed surface would be told apart


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
    assert any("under 1.5 m across left out" in note for note in scene.notes())
    assert "no clearance to dig" in scene.caution
    assert scene.at_level(12345.6).level_text() == "nothing 1.5 m across reaches amplitude 12 346"
    assert "nothing 1.5 m across reaches" in scene.at_level(9.0).level_text()
    assert build_scene(ring.isel(depth=[3])).level_text() == "one slice: no isosurface"


def test_a_level_below_everything_is_told_from_one_above_everything(ring: xr.Dataset) -> None:
    """The smoothed slices hold 0.1 to about 1.2: below them all is inside, above them nothing."""
    scene = build_scene(ring)
    low, high = float(np.nanmin(scene.soft.amplitude)), float(np.nanmax(scene.soft.amplitude))
    assert scene.at_level(low - 0.01).isosurface.n_cells == scene.at_level(high + 0.01).isosurface.n_cells == 0
    assert scene.at_level(low - 0.01).level_text().startswith("everything lies above amplitude")
    assert "across reaches amplitude" in scene.at_level(high + 0.01).level_text()
    assert replace(scene, isosurface=pv.PolyData(), hidden=True).level_text() == "isosurface off"


def test_an_unplaced_grid_has_no_east_and_no_north(ring: xr.Dataset) -> None:
    """As in the slice pictures: x, y and a y arrow without a reference system; east, north and N with one."""
    own = {label.text for label in build_scene(ring).frame.labels}
    assert {"x, m from 512 300", "y"} < own
    assert not [text for text in own if text == "N" or "east" in text or "north" in text]
    as_attribute = ring.assign_attrs(crs="EPSG:25832")
    as_mapping = ring.assign(crs=((), np.int32(0)))
    for placed in (as_attribute, as_mapping):
        names = {label.text for label in build_scene(placed).frame.labels}
        assert {"m east of 512 300", "N"} < names


def test_the_default_slice_leaves_most_of_the_bodies_uncovered(ring: xr.Dataset) -> None:
    """Amplitude falls downwards below 0.7 m, so that the score alone would choose a slice above most of the wall."""
    deep = ring.depth > 0.75
    scene = build_scene(
        ring.assign(amplitude=xr.where(deep, 1.6 * ring.amplitude.mean() + ring.amplitude, ring.amplitude))
    )
    inside = np.where(np.isfinite(scene.soft.amplitude), scene.soft.amplitude, -np.inf) >= scene.level
    volume = inside[::-1].sum(axis=(1, 2))
    assert volume[: scene.index + 1].sum() > 0.5 * volume.sum()


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


@pytest.mark.parametrize("depth", [99.0, -0.1, 1.46, np.nan])
def test_a_depth_outside_the_slices_is_refused_with_their_range(ring: xr.Dataset, depth: float) -> None:
    with pytest.raises(ValueError, match=r"no slice at .* m; the slices reach from 0\.05 to 1\.45 m"):
        build_scene(ring, slice_depth=depth)
    assert (build_scene(ring, slice_depth=0.05).index, build_scene(ring, slice_depth=1.45).index) == (0, 13)


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
