"""A small site with known walls, for everything that is written."""

from __future__ import annotations

import zlib

import numpy as np
import pytest
import xarray as xr

from planum.records import Statement

CRS = "EPSG:25832"
CELL = 0.05
WEST, NORTH = 468_200.0, 5_412_330.0


def make_slices(*, n: int = 5, shape: tuple[int, int] = (121, 160), crs: str = CRS) -> xr.Dataset:
    """A building's walls in speckle, a corner without data, one obstacle; depths 0.0 to 0.05 n + 0.05 m."""
    rng = np.random.default_rng(7)
    height, width = shape
    yy, xx = np.mgrid[:height, :width]
    room = (abs(xx - 0.55 * width) < 0.25 * width) & (abs(yy - 0.5 * height) < 0.3 * height)
    inner = (abs(xx - 0.55 * width) < 0.21 * width) & (abs(yy - 0.5 * height) < 0.25 * height)
    tops = np.round(0.05 * np.arange(n), 6)
    speckle = rng.rayleigh(60.0, (n, height, width))
    for step in (1, 2):  # neighbouring cells belong together
        speckle += np.roll(speckle, step, 1) + np.roll(speckle, step, 2)
    speckle /= speckle.mean() / 80.0
    strength = 420.0 * np.exp(-(((tops - 0.2) / 0.12) ** 2))
    amplitude = (speckle + strength[:, None, None] * (room & ~inner)).astype(np.float32)
    coverage = np.where((xx // 5) % 2 == 0, 1, 2).astype(np.uint8)
    coverage[yy + xx < 30] = 0
    coverage[height - 25 : height - 12, 20:40] = 4
    amplitude[:, (coverage == 0) | (coverage == 4)] = np.nan
    x = WEST + CELL * (np.arange(width) + 0.5)
    y = NORTH - CELL * (np.arange(height) + 0.5)
    return xr.Dataset(
        {
            "amplitude": (("depth", "y", "x"), amplitude),
            "left_out_error": (("depth", "y", "x"), (0.2 * amplitude).astype(np.float32)),
            "coverage": (("y", "x"), coverage),
            "depth_bounds": (("depth", "bound"), np.stack([tops, tops + 0.1], 1)),
            "depth_error": (("depth",), 0.02 + 0.05 * tops),
        },
        coords={"depth": tops + 0.05, "x": x, "y": y},
        attrs={"crs": crs, "title": "Ashwell Meadow, season 2", "code": "ASM2", "cell_m": CELL},
    )


def make_statements(slices: xr.Dataset, stretch: str = "29 to 491, strong = dark, linear") -> tuple[Statement, ...]:
    return tuple(
        Statement(
            quantity="envelope amplitude",
            top_m=float(top),
            bottom_m=float(bottom),
            statistic="mean",
            velocity_m_per_ns=0.0853,
            velocity_error_m_per_ns=0.0021,
            velocity_origin="measured: focus of 41 hyperbolas",
            depth_error_m=float(error),
            zero_rule="direct wave minus separation / c",
            zero_error_ns=0.12,
            surface="the ground surface",
            date="2026-04-18",
            migration="migrated in 2-D, line by line",
            fill="band-limited between lines",
            line_spacing_m=0.25,
            coverage_rule="nothing shown farther than 0.15 m from a trace",
            resolution="features narrower than 0.25 m between lines are not resolved",
            stretch=stretch,
            survey="Ashwell Meadow, season 2",
            plan_key="0123456789abcdef",
            version="0.1.0",
        )
        for (top, bottom), error in zip(slices["depth_bounds"].values, slices["depth_error"].values, strict=True)
    )


@pytest.fixture(scope="session")
def slices() -> xr.Dataset:
    return make_slices()


@pytest.fixture(scope="session")
def statements(slices):
    return make_statements(slices)


@pytest.fixture(scope="session", name="make_slices")
def _make_slices():
    return make_slices


@pytest.fixture(scope="session", name="make_statements")
def _make_statements():
    return make_statements


@pytest.fixture
def planes_per_compute(make_slices):
    """A dask-backed stack, and the planes that each compute touched."""
    import dask
    import dask.array as da

    source = make_slices(n=4, shape=(60, 80))
    touched: list[set[int]] = []

    def make(block, index):
        touched[-1].add(int(index.ravel()[0]))
        return block

    numbers = da.from_array(np.arange(4).reshape(4, 1, 1), chunks=(1, 1, 1))

    def lazy(name):
        values = da.from_array(source[name].values, chunks=(1, -1, -1))
        return ("depth", "y", "x"), da.map_blocks(make, values, numbers, dtype="f4", meta=np.empty((0, 0, 0), "f4"))

    stack = source.assign(amplitude=lazy("amplitude"), left_out_error=lazy("left_out_error"))

    def watched(graph, keys, **options):
        touched.append(set())
        return dask.get(graph, keys, **options)

    with dask.config.set(scheduler=watched):
        yield stack, touched


def decoded(page) -> np.ndarray:
    """Cells of a tiled deflate float32 TIFF page, decoded here from its bytes and tags.

    Source: TIFF 6.0, section 15 (tiles); Adobe Photoshop TIFF Technical Note 3 (predictor 3), both from memory.
    """
    assert (page.compression, page.predictor) == (8, 3)
    high, wide, bands = page.imagelength, page.imagewidth, page.samplesperpixel
    tall, across = page.tilelength, page.tilewidth
    down, right = -(-high // tall), -(-wide // across)
    out = np.empty((bands, down * tall, right * across), np.float32)
    for index, (offset, count) in enumerate(zip(page.dataoffsets, page.databytecounts, strict=True)):
        page.parent.filehandle.seek(offset)
        raw = np.frombuffer(zlib.decompress(page.parent.filehandle.read(count)), np.uint8).reshape(tall, 4 * across)
        planes = np.cumsum(raw, axis=1, dtype=np.uint8).reshape(tall, 4, across)  # most significant byte first
        cells = np.ascontiguousarray(planes.transpose(0, 2, 1)).view(">f4")[..., 0]
        band, place = divmod(index, down * right)
        row, column = divmod(place, right)
        out[band, row * tall : (row + 1) * tall, column * across : (column + 1) * across] = cells
    return out[:, :high, :wide]


@pytest.fixture(scope="session")
def decode_tiff():
    return decoded
