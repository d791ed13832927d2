"""The block, its isosurface and its slice, against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from planum.scene.build import build_scene
from planum.scene.volume import block_from, contour, plane, softened


def stack(amplitude: np.ndarray, depth: np.ndarray, y: np.ndarray, x: np.ndarray) -> xr.Dataset:
    edges = np.concatenate(
        [[1.5 * depth[0] - 0.5 * depth[1]], (depth[1:] + depth[:-1]) / 2, [2 * depth[-1] - depth[-2]]]
    )
    return xr.Dataset(
        {
            "amplitude": (("depth", "y", "x"), amplitude.astype(np.float32)),
            "coverage": (("y", "x"), np.ones(amplitude.shape[1:], np.uint8)),
            "depth_bounds": (("depth", "bound"), np.stack([edges[:-1], edges[1:]], 1)),
            "depth_error": ("depth", np.full(depth.size, 0.05)),
        },
        coords={"depth": depth, "y": y, "x": x},
    )


def sphere(n: int, *, centre_depth: float = 2.0, x0: float = 0.0, y0: float = 0.0) -> xr.Dataset:
    """Field 1 - (distance to the centre): its surface at 0 is a sphere of radius 1 m."""
    axis = np.linspace(-1.25, 1.25, n)
    z, y, x = np.meshgrid(axis, axis, axis, indexing="ij")
    return stack(1.0 - np.sqrt(x**2 + y**2 + z**2), centre_depth + axis, y0 + axis, x0 + axis)


def test_area_and_volume_of_a_sphere_meet_the_closed_form() -> None:
    """Source: 4 pi r^2 and 4/3 pi r^3 (textbook geometry)."""
    surface = contour(block_from(sphere(81)), 0.0)
    # the inscribed polyhedron errs by order (h/r)^2 with h = 2.5/80: 1e-3, and always to the small side
    assert surface.area == pytest.approx(4 * np.pi, rel=1e-3)
    assert surface.volume == pytest.approx(4 / 3 * np.pi, rel=1e-3)
    assert surface.area < 4 * np.pi
    assert surface.n_open_edges == 0


def test_the_error_of_the_sphere_shrinks_with_the_square_of_the_cell() -> None:
    """Source: linear interpolation is of second order (numerical analysis, common knowledge)."""
    errors = [4 / 3 * np.pi - contour(block_from(sphere(n)), 0.0).volume for n in (21, 41, 81)]
    # half the cell, a quarter of the error; the grids cut the sphere differently, hence 30 %
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.3)
    assert errors[1] / errors[2] == pytest.approx(4.0, rel=0.3)


def test_depth_is_minus_z_and_the_normals_point_to_the_weaker_side() -> None:
    surface = contour(block_from(sphere(41, centre_depth=3.0, x0=7.0, y0=-2.0)), 0.0)
    centre = np.array([7.0, -2.0, -3.0])
    # float32 coordinates and polyhedron: far below a cell of 6 cm
    np.testing.assert_allclose(surface.center, centre, atol=1e-3)
    outward = surface.points - centre
    assert np.all(np.sum(outward * surface.point_data["Normals"], axis=1) > 0.9)


def test_the_order_of_the_rows_does_not_matter() -> None:
    data = sphere(31).assign(amplitude=lambda d: d.amplitude + 0.2 * d.y + 0.1 * d.x)
    turned = data.isel(y=slice(None, None, -1), depth=slice(None, None, -1))
    np.testing.assert_array_equal(contour(block_from(turned), 0.0).points, contour(block_from(data), 0.0).points)


def test_an_irregular_depth_axis_keeps_its_depths() -> None:
    """A field that grows with depth is cut by a level plane at the depth of that value."""
    depth = np.array([0.1, 0.3, 0.5, 0.6])
    data = stack(np.broadcast_to(depth[:, None, None], (4, 5, 6)), depth, np.arange(5.0), np.arange(6.0))
    surface = contour(block_from(data), 0.55)
    # exact for linear fields up to float32
    np.testing.assert_allclose(surface.points[:, 2], -0.55, atol=1e-6)
    assert surface.area == pytest.approx(20.0, rel=1e-5)


def test_unknown_ground_makes_no_faces() -> None:
    """A block strong everywhere it is known has no isosurface: its rim is where the survey ends, not a wall."""
    amplitude = np.ones((6, 20, 20))
    amplitude[:, :, 12:] = np.nan
    amplitude[2, 5, 5] = np.nan
    axis = np.arange(20.0)
    data = stack(amplitude, 0.1 * np.arange(1, 7), axis, axis)
    assert contour(block_from(data), 0.5).n_cells == 0
    assert contour(block_from(data.fillna(0.0)), 0.5).n_cells > 0  # the same with zeros would show a wall


def test_masking_only_removes_the_faces_of_unknown_voxels() -> None:
    data = sphere(41)
    half = data.assign(amplitude=data.amplitude.where(data.x <= 0.0))
    whole, cut = contour(block_from(data), 0.0), contour(block_from(half), 0.0)
    # a hemisphere: source 2 pi r^2; its rim ends on a grid plane, so only the polyhedron's 0.4 % is missing
    assert cut.area == pytest.approx(2 * np.pi, rel=5e-3)
    assert cut.points[:, 0].max() <= 1e-6
    assert {tuple(p) for p in np.round(cut.points, 5)} <= {tuple(p) for p in np.round(whole.points, 5)}


def test_pieces_narrower_than_asked_are_left_out() -> None:
    axis, depth = 0.1 * np.arange(60), 0.1 * np.arange(1, 12)
    d, y, x = np.meshgrid(depth, axis, axis, indexing="ij")
    small = 0.2 - np.sqrt((x - 1.0) ** 2 + (y - 1.0) ** 2 + (d - 0.6) ** 2)
    large = 0.4 - np.sqrt((x - 4.0) ** 2 + (y - 4.0) ** 2 + (d - 0.6) ** 2)
    block = block_from(stack(np.maximum(small, large), depth, axis, axis))
    # bounding squares of the circles: diagonals 0.57 and 1.13 m
    assert contour(block, 0.0, least_m=0.4).n_cells == contour(block, 0.0).n_cells
    assert contour(block, 0.0, least_m=0.8).bounds[0] == pytest.approx(3.6, abs=0.02)
    assert contour(block, 0.0, least_m=1.3).n_cells == 0


def test_softening_keeps_places_and_never_enters_unknown_ground() -> None:
    """A step smoothed by any even kernel is half as high at the step itself."""
    axis, depth = 0.05 * np.arange(120), 0.1 * np.arange(1, 5)
    step = np.broadcast_to(axis[None, None, :] > 3.0, (4, 120, 120)).astype(float)  # the edge lies at 3.025 m
    step[:, 40:43, :] = np.nan
    soft = softened(block_from(stack(step, depth, axis, axis)), 0.25)
    assert soft.thinned == 2  # 5 cells per standard deviation
    surface = contour(soft, 0.5)
    # linear interpolation near the steepest place of the smoothed step
    np.testing.assert_allclose(surface.points[:, 0], 3.025, atol=2e-3)
    # rows 40 to 42 are unknown: from the centre of row 39 to that of row 43 nothing may stand
    assert not np.any((surface.points[:, 1] > axis[39] + 1e-6) & (surface.points[:, 1] < axis[43] - 1e-6))


def test_large_map_coordinates_keep_their_millimetres(ring: xr.Dataset) -> None:
    block = block_from(ring)
    assert block.origin == (512_300.0, 5_398_100.0)
    image = plane(block, 3)
    # cell centres of the map, read back from the drawn image
    east = np.asarray(image.cell_centers().points)[:, 0].astype(float).reshape(60, 80)[0] + block.origin[0]
    np.testing.assert_allclose(east, ring.x.values, atol=1e-4)  # a tenth of the millimetre promised
    assert image.bounds[2] + block.origin[1] == pytest.approx(float(ring.y.min()) - 0.1, abs=1e-4)


def test_the_slice_shows_the_cells_of_its_depth(ring: xr.Dataset) -> None:
    image = plane(block_from(ring), 4)
    assert image.bounds[4] == pytest.approx(-0.5, abs=1e-6)
    expected = ring.amplitude.isel(depth=4).sortby("y").values
    np.testing.assert_array_equal(image.cell_data["amplitude"].reshape(60, 80), expected)


def test_a_stack_too_large_is_averaged_and_says_so(ring: xr.Dataset) -> None:
    block = block_from(ring, largest=14 * 60 * 80 // 4)
    assert block.thinned == 2
    values = ring.amplitude.sortby("y").isel(depth=13).values[2:4, 4:6]
    assert block.layer(13)[1, 2] == pytest.approx(values.mean(), rel=1e-6)  # float32
    assert block.x[0] + block.origin[0] == pytest.approx(float(ring.x[:2].mean()), abs=1e-6)
    assert block.box[:4] == pytest.approx(block_from(ring).box[:4])


def test_a_lazy_stack_gives_the_same_block_and_stays_lazy(ring: xr.Dataset) -> None:
    lazy = ring.chunk({"depth": 1})
    np.testing.assert_array_equal(block_from(lazy).amplitude, block_from(ring).amplitude)
    assert lazy.amplitude.chunks is not None


def test_what_is_no_slice_stack_is_refused(ring: xr.Dataset) -> None:
    with pytest.raises(ValueError, match="depth_bounds"):
        block_from(ring.drop_vars("depth_bounds"))
    with pytest.raises(ValueError, match="at least 2 x 2"):
        block_from(ring.isel(x=slice(0, 1)))
    with pytest.raises(ValueError, match="no known cell"):
        build_scene(ring.assign(amplitude=ring.amplitude * np.nan))
