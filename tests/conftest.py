"""Shared by all tests: a small stack of slices, and system packages, whose absence is a failure under CI."""

from __future__ import annotations

import os
import shutil

import numpy as np
import pytest
import xarray as xr
from scipy.ndimage import gaussian_filter

os.environ.setdefault("MPLBACKEND", "Agg")


@pytest.hookimpl(tryfirst=True)
def pytest_runtest_setup(item: pytest.Item) -> None:
    """Skip a test whose system package is missing; with CI=true that is a failure."""
    for mark in item.iter_markers("system"):
        for program in mark.args:
            if shutil.which(program) is None:
                reason = f"needs the program {program!r}, which this machine lacks"
                if os.environ.get("CI", "").lower() == "true":
                    pytest.fail(reason)
                pytest.skip(reason)


WEST, SOUTH, CELL = 512_340.0, 5_398_120.0, 0.2
RING = (6.0, 5.0, 3.6)
"""Centre and radius of the ring wall, m from the south-west corner."""


def ring_site() -> xr.Dataset:
    """Return the slices of a ring wall at 0.5 to 1.1 m depth and a pipe, 12 x 16 m, 0.2 m cells, north-up."""
    x, y, depth = WEST + CELL * (np.arange(80) + 0.5), SOUTH + CELL * (np.arange(60) + 0.5), 0.1 + 0.1 * np.arange(14)
    d, n, e = np.meshgrid(depth, y - SOUTH, x - WEST, indexing="ij")
    noise = gaussian_filter(np.random.default_rng(5).normal(size=d.shape), (1, 1.5, 1.5))
    wall = np.exp(-(((np.hypot(e - RING[0], n - RING[1]) - RING[2]) / 0.5) ** 4) - ((d - 0.8) / 0.35) ** 4)
    pipe = np.exp(-(((e - 12.5) / 0.35) ** 2) - ((d - 0.6) / 0.15) ** 2)
    amplitude = (0.15 + np.abs(noise) * 0.05 / noise.std() + wall + pipe).astype(np.float32)
    known = ~((n[0] > 9.0) & (e[0] > 10.0))
    return xr.Dataset(
        {
            "amplitude": (("depth", "y", "x"), np.where(known, amplitude, np.float32(np.nan))),
            "coverage": (("y", "x"), known.astype(np.uint8)),
            "depth_bounds": (("depth", "bound"), np.stack([depth - 0.05, depth + 0.05], 1)),
            "depth_error": ("depth", 0.03 + 0.03 * depth),
        },
        coords={"depth": depth, "x": x, "y": y},
        attrs={"crs": "", "title": "Marrowby Field", "code": "MBF1", "cell_m": CELL, "statement_line_spacing_m": 0.25},
    ).isel(y=slice(None, None, -1))


@pytest.fixture(scope="session")
def ring() -> xr.Dataset:
    """Return the ring site; nobody changes it."""
    return ring_site()
