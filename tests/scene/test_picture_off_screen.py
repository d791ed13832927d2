"""The picture: right size, not blank, dark where the wall is, whole or not there at all."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
import pyvista as pv
import xarray as xr
from PIL import Image

from planum.errors import Problem
from planum.outputs.about import statement_in
from planum.scene.build import Scene, build_scene
from planum.scene.drawing import aim
from planum.scene.picture import render, render_safely

SIZE = (640, 440)
pytestmark = pytest.mark.usefixtures("_drawing")


def pixels_of(scene: Scene, places: np.ndarray) -> np.ndarray:
    """Return column and row of (n, 3) places with the projection the camera itself states."""
    plotter = pv.Plotter(off_screen=True, window_size=list(SIZE))
    aim(plotter, scene)
    matrix = pv.array_from_vtkmatrix(plotter.camera.GetCompositeProjectionTransformMatrix(SIZE[0] / SIZE[1], -1.0, 1.0))
    plotter.close()
    seen = np.column_stack([places * [1, 1, scene.exaggeration], np.ones(len(places))]) @ matrix.T
    share = (seen[:, :2] / seen[:, 3:] + 1.0) / 2.0
    return np.column_stack([share[:, 0] * SIZE[0], (1.0 - share[:, 1]) * SIZE[1]]).astype(int)


def grey_at(path: Path, at: np.ndarray) -> np.ndarray:
    grey = np.asarray(Image.open(path).convert("L"))
    assert np.all((at >= 0) & (at < [SIZE[0], SIZE[1]]))
    return grey[at[:, 1], at[:, 0]]


def circle(radius: float, depth: float) -> np.ndarray:
    angle = np.radians(np.arange(0, 360, 10))
    return np.column_stack([46 + radius * np.sin(angle), 25 + radius * np.cos(angle), np.full(36, -depth)])


def test_the_wall_is_dark_in_the_slice_and_the_ground_inside_is_light(ring: xr.Dataset, tmp_path: Path) -> None:
    """Looked for where the known ring projects to, so camera, depth, places and greys must all be right."""
    scene = build_scene(ring, slice_depth=0.8, level=99.0)
    path = tmp_path / "slice.png"
    render(scene, path, size=SIZE)
    assert Image.open(path).size == SIZE
    wall, inside = (grey_at(path, pixels_of(scene, circle(r, 0.8))) for r in (3.6, 2.2))
    # weakest and strongest greys are 0.95 and 0.07 of 255; edges of the frame may cross a few places
    assert np.median(wall) < 70
    assert np.mean(wall < 110) > 0.9
    assert np.median(inside) > 190


def test_the_isosurface_is_warm_where_the_wall_is(ring: xr.Dataset, tmp_path: Path) -> None:
    scene = build_scene(ring, slice_depth=1.3)
    path = tmp_path / "iso.png"
    render(scene, path, size=SIZE)
    colour = np.asarray(Image.open(path)).astype(int)
    at = pixels_of(scene, circle(3.6, 0.5))
    red, _, blue = colour[at[:, 1], at[:, 0]].T
    assert np.mean(red - blue > 50) > 0.9
    assert colour.std() > 20  # nowhere near blank
    assert np.all(colour[5, 5] == 255)  # white paper
    assert Image.open(path).text["Warning"].startswith("Depth slices are no clearance to dig")


def test_the_picture_tells_about_itself(ring: xr.Dataset, tmp_path: Path) -> None:
    """What the slices state, in the chunk that is read from every picture of a run; without it there is none."""
    stated = ring.assign_attrs(statement_date="2026-04-18", statement_top_m=np.array([0.05, 0.15]))
    render(build_scene(stated), tmp_path / "a.png", size=(160, 110))
    assert statement_in(tmp_path / "a.png") == {
        "date": "2026-04-18",
        "top_m": "0.05 | 0.15",
        "line_spacing_m": "0.25",
    }


def test_unknown_ground_stays_white(ring: xr.Dataset, tmp_path: Path) -> None:
    scene = build_scene(ring, slice_depth=0.8, level=99.0)
    path = tmp_path / "corner.png"
    render(scene, path, size=SIZE)
    north_east = np.array([[e, n, -0.8] for e in (51.5, 53.0) for n in (30.0, 31.0)])
    assert np.median(grey_at(path, pixels_of(scene, north_east))) > 245


def test_the_whole_frame_is_in_the_picture(ring: xr.Dataset) -> None:
    for exaggeration in (1.0, 8.0):
        scene = build_scene(ring, exaggeration=exaggeration)
        at = pixels_of(scene, np.array([label.at for label in scene.frame.labels]))
        assert np.all((at >= 0.03 * np.array(SIZE)) & (at <= 0.97 * np.array(SIZE)))


def test_a_picture_is_replaced_whole_and_leaves_nothing_aside(ring: xr.Dataset, tmp_path: Path) -> None:
    path = tmp_path / "scene.png"
    path.write_bytes(b"older")
    render(build_scene(ring), path, size=(160, 110))
    assert Image.open(path).format == "PNG"
    assert [p.name for p in tmp_path.iterdir()] == ["scene.png"]


def test_a_slice_file_is_drawn_in_a_process_of_its_own(ring: xr.Dataset, tmp_path: Path) -> None:
    source, target = tmp_path / "slices.nc", tmp_path / "scene.png"
    ring.to_netcdf(source, engine="h5netcdf")
    lines = [("1", np.array([[512_340.0, 5_398_121.0], [512_356.0, 5_398_121.0]]))]
    assert render_safely(source, target, lines=lines, size=(320, 220), level=0.6, slice_depth=0.8) is None
    image = Image.open(target)
    assert image.size == (320, 220)
    assert "slice 0.75 to 0.85 m" in image.text["Description"]
    assert "isosurface at amplitude 0.6 (chosen)" in image.text["Description"]


def test_a_crash_of_the_drawing_process_becomes_a_problem(tmp_path: Path) -> None:
    """A missing library kills VTK with a signal; here the process kills itself the same way."""
    dies = [sys.executable, "-c", "import os, signal; os.kill(os.getpid(), signal.SIGSEGV)"]
    (tmp_path / "slices.nc").touch()
    problem = render_safely(tmp_path / "slices.nc", tmp_path / "scene.png", command=dies)
    assert isinstance(problem, Problem)
    assert "SIGSEGV" in str(problem)
    assert "libegl1" in str(problem)


def test_a_missing_slice_file_becomes_a_problem_that_names_it(tmp_path: Path) -> None:
    problem = render_safely(tmp_path / "absent.nc", tmp_path / "scene.png")
    assert problem is not None
    assert "absent.nc" in str(problem)
    assert not list(tmp_path.iterdir())


def test_a_silent_process_without_a_picture_becomes_a_problem(tmp_path: Path) -> None:
    (tmp_path / "a.nc").touch()
    problem = render_safely(tmp_path / "a.nc", tmp_path / "scene.png", command=[sys.executable, "-c", ""])
    assert problem is not None
    assert "without a picture" in problem.came
