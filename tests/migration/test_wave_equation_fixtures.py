"""Against stored finite-difference wavefields (Devito); ``tests/fixtures/README.md`` says what each file is."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest
from skimage.measure import find_contours

from planum import schema
from planum.migration.stolt import stolt

FIXTURES = Path(__file__).parents[1] / "fixtures"


def load(name):
    with np.load(FIXTURES / name) as stored:
        return dict(stored)


def cube_of(stored):
    data = stored["data"].astype(np.float32)
    data = data if data.ndim == 3 else data[None]
    line = stored.get("line_m", np.zeros(1))
    return schema.cube(data, line=line, along=stored["along_m"], time=stored["time_ns"])


@pytest.mark.parametrize("name", ["point_2d.npz", "point_3d.npz", "wall_3d.npz"])
def test_stored_files_are_the_ones_described(name):
    told = (FIXTURES / "README.md").read_text()
    assert hashlib.sha256((FIXTURES / name).read_bytes()).hexdigest() in told


def test_finite_differences_agree_with_the_hankel_solution(models):
    """Two independent models of one diffractor: relative L2 difference of the sections, scale fitted."""
    stored = load("point_2d.npz")
    solved = stored["data"].astype(float)
    exact = models.line_diffractors(stored["along_m"], stored["time_ns"], [tuple(stored["place_m"])])
    solved *= np.sum(solved * exact) / np.sum(solved**2)
    difference = np.linalg.norm(solved - exact) / np.linalg.norm(exact)
    assert difference < 0.03  # ten cells a wavelength: numerical dispersion; found 0.019


def test_diffractor_focuses_in_its_cell(models):
    stored = load("point_2d.npz")
    image = models.envelope(stolt(cube_of(stored), velocity_m_per_ns=0.1).values[0])
    i, j = np.unravel_index(image.argmax(), image.shape)
    x, z = stored["place_m"]
    assert stored["along_m"][i] == pytest.approx(x, abs=0.05 / 2)  # half a trace
    assert stored["time_ns"][j] * 0.05 == pytest.approx(z, abs=0.01 / 2 + 1e-9)  # half a sample


def test_point_beside_the_line_is_imaged_at_its_slant_distance(models):
    """Closed form sqrt(z² + dy²): line-by-line migration takes everything to lie below the line."""
    stored = load("point_3d.npz")
    image = models.envelope(stolt(cube_of(stored), velocity_m_per_ns=0.1).values)
    x, y, z = stored["place_m"]
    for line_y, picture in zip(stored["line_m"], image, strict=True):
        i, _ = np.unravel_index(picture.argmax(), picture.shape)
        place, _ = models.top(picture[i])
        depth = (stored["time_ns"][0] + 0.2 * place) * 0.05
        assert stored["along_m"][i] == pytest.approx(x, abs=0.025)
        assert depth == pytest.approx(np.hypot(z, line_y - y), rel=0.01)


def edge_width(profile, along):
    """Distance over which the west flank rises from 10 to 90 % of the profile's middle."""
    middle = profile[profile.size // 2]
    rise = profile[: profile.size // 2 + 1] / middle
    low, high = (np.flatnonzero(rise < share)[-1] for share in (0.1, 0.9))
    return along[high] - along[low]


def test_wall_outline_at_half_its_peak_is_the_walls_outline(models):
    """Straight above a wall's end its wave has half its strength (knife edge); migration line by line keeps that."""
    stored = load("wall_3d.npz")
    along, line, time = stored["along_m"], stored["line_m"], stored["time_ns"]
    window = np.abs(time * 0.05 - stored["top_m"]) <= 0.05 + 1e-9
    cube = cube_of(stored)
    image = models.envelope(stolt(cube, velocity_m_per_ns=0.1).values)[..., window].mean(-1)
    outlines = find_contours(image / image.max(), 0.5)
    assert len(outlines) == 1
    y = np.interp(outlines[0][:, 0], np.arange(line.size), line)
    x = np.interp(outlines[0][:, 1], np.arange(along.size), along)
    found = (x.min(), x.max(), y.min(), y.max())
    assert found == pytest.approx(stored["outline_m"], abs=0.10)  # the goal; found within 0.02
    raw = models.envelope(cube.values)[..., window].mean(-1)
    middle = line.size // 2
    assert edge_width(image[middle], along) < 0.5 * edge_width(raw[middle], along)
