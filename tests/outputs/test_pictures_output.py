"""Pictures: cells where they belong, key and scale true, statement inside, same bytes twice."""

from __future__ import annotations

import json

import numpy as np
import pytest
from PIL import Image
from scipy.ndimage import find_objects, label

from planum.outputs.pictures import draw_contact_sheet, draw_slices
from planum.outputs.raster import raster_of
from planum.outputs.stretch import grey, stretch_of
from planum.outputs.writing import PNG_KEY


@pytest.fixture(scope="module")
def drawn(tmp_path_factory, slices, statements):
    stretch = stretch_of(slices)
    return draw_slices(tmp_path_factory.mktemp("pictures"), slices, statements, stretch), stretch


def map_frame(picture: np.ndarray) -> tuple[int, int, int, int]:
    """Left, top, right, bottom of the map: the connected dark outline of the largest extent, without its ticks."""
    parts, _ = label(picture < 110, structure=np.ones((3, 3)))
    boxes = find_objects(parts)
    sizes = [(b[0].stop - b[0].start) * (b[1].stop - b[1].start) for b in boxes]
    number = int(np.argmax(sizes))
    rows, columns = boxes[number]
    outline = parts[boxes[number]] == number + 1
    across = np.flatnonzero(outline.sum(axis=0) > 0.9 * outline.sum(axis=0).max())
    down = np.flatnonzero(outline.sum(axis=1) > 0.9 * outline.sum(axis=1).max())
    return (
        int(columns.start + across[0]),
        int(rows.start + down[0]),
        int(columns.start + across[-1]),
        int(rows.start + down[-1]),
    )


def test_cells_lie_where_their_coordinates_say(drawn, slices):
    """Every 10th cell's middle, found from the drawn frame alone, shows that cell's grey exactly."""
    paths, stretch = drawn
    picture = np.asarray(Image.open(paths[3]))
    left, top, right, bottom = map_frame(picture)
    greys = grey(slices["amplitude"].values[3], stretch)
    height, width = greys.shape
    seen = checked = 0
    for row in range(5, height, 10):
        for column in range(5, width, 10):
            if not np.isfinite(slices["amplitude"].values[3, row, column]):
                continue
            x = left + 0.5 + (column + 0.5) / width * (right - left)
            y = top + 0.5 + (row + 0.5) / height * (bottom - top)
            checked += 1
            seen += picture[int(y), int(x)] == greys[row, column]
    # The frame's own pixel may move a middle by one pixel of five: a few cells land on a neighbour.
    assert checked > 150
    assert seen / checked > 0.97


def test_the_scale_bar_is_true(drawn, slices):
    """Four equal parts, together 1, 2 or 5 times a power of ten metres in the scale of the map."""
    picture = np.asarray(Image.open(drawn[0][0]))
    left, _, right, _ = map_frame(picture)
    raster = raster_of(slices)
    metre = (right - left) / (raster.width * raster.cell_m)
    column = picture[:, right + 10 :] < 128
    for row in column:
        edges = np.flatnonzero(np.diff(np.concatenate([[0], row.astype(int), [0]])))
        runs = np.diff(edges)
        if len(runs) >= 3 and runs[0] > 8 and abs(runs[0] - runs[2]) <= 2 and abs(runs[0] - runs[1]) <= 3:
            length = 4 * (runs[0] + runs[1]) / 2 / metre
            break
    else:
        pytest.fail("no scale bar found")
    factor = length / 10 ** np.floor(np.log10(length))
    # Line widths and whole pixels: two pixels of about 200.
    assert min(abs(factor / k - 1) for k in (1, 2, 5, 10)) < 0.02


def test_the_statement_is_inside(drawn, statements):
    """PNG text chunks, read by Pillow."""
    for path, statement in zip(drawn[0], statements, strict=True):
        with Image.open(path) as picture:
            picture.load()
            assert picture.mode == "L"
            assert picture.info["dpi"] == pytest.approx((120, 120), abs=0.1)
            assert json.loads(picture.text[PNG_KEY]) == statement.tags()
            assert picture.text["Description"] == statement.sentence()


def test_a_slice_in_noise_is_marked(tmp_path, slices, statements):
    """The same slice with and without the mark differs above the map, and the sentence holds the words."""
    marked = tuple(s.model_copy(update={"noise": "below the depth where ground sinks into noise"}) for s in statements)
    stretch = stretch_of(slices)
    plain = draw_slices(tmp_path / "a", slices, statements, stretch)[0]
    noisy = draw_slices(tmp_path / "b", slices, marked, stretch)[0]
    heads = [np.asarray(Image.open(p))[44:72, 70:400] for p in (plain, noisy)]
    assert (heads[0] == 255).all()
    assert (heads[1] < 150).sum() > 100
    with Image.open(noisy) as picture:
        picture.load()
        assert "; below the depth where ground sinks into noise; " in picture.text["Description"]


def test_the_same_slice_gives_the_same_bytes(drawn, tmp_path, slices, statements):
    again = draw_slices(tmp_path, slices, statements, drawn[1])
    assert [p.name for p in again] == [p.name for p in drawn[0]]
    assert all(a.read_bytes() == b.read_bytes() for a, b in zip(drawn[0], again, strict=True))


@pytest.mark.parametrize("shape", [(20, 300), (300, 20), (3, 3)])
def test_strips_and_tiny_sites_are_drawn(tmp_path, make_slices, make_statements, shape):
    slices = make_slices(n=1, shape=shape)
    slices = slices.assign(amplitude=slices["amplitude"].fillna(80.0))
    (path,) = draw_slices(tmp_path, slices, make_statements(slices), stretch_of(slices))
    left, top, right, bottom = map_frame(np.asarray(Image.open(path)))
    # True shape of the map, to a pixel on each side.
    assert abs((right - left) * shape[0] - (bottom - top) * shape[1]) <= 2 * max(shape)


def test_the_contact_sheet_holds_every_slice(tmp_path, slices, statements):
    """As many thumbnail frames as slices; the sheet's width is bounded."""
    path = tmp_path / "contact_sheet.png"
    draw_contact_sheet(path, slices, statements, stretch_of(slices), width_px=1600)
    picture = np.asarray(Image.open(path))
    assert picture.shape[1] <= 1600
    parts, _ = label(picture == 150)
    sizes = [(b[0].stop - b[0].start, b[1].stop - b[1].start) for b in find_objects(parts)]
    largest = max(sizes)
    assert sizes.count(largest) == len(statements)
    # Thumbnails keep the raster's shape, to a pixel.
    assert largest[1] / largest[0] == pytest.approx(160 / 121, rel=0.01)


def test_a_missing_line_is_not_white_in_the_contact_sheet(tmp_path, make_slices, make_statements):
    """Weak ground all over (white) but for four unknown rows of cells: a strip that is seen, in every thumbnail."""
    slices = make_slices(n=2)
    weak = np.zeros(slices["amplitude"].shape, np.float32)
    weak[:, :2] = 500.0  # gives the stretch its other end
    weak[:, 60:64] = np.nan
    slices = slices.assign(amplitude=(("depth", "y", "x"), weak))
    path = tmp_path / "sheet.png"
    draw_contact_sheet(path, slices, make_statements(slices), stretch_of(slices))
    picture = np.asarray(Image.open(path))
    parts, _ = label(picture == 150, structure=np.ones((3, 3)))
    boxes = [b for b in find_objects(parts) if b[0].stop - b[0].start > 200]
    assert len(boxes) == 2
    for rows, columns in boxes:
        inside = picture[rows, columns][5:-5, 5:-5]
        middle = round(62 / 121 * (rows.stop - rows.start)) - 5
        assert inside[middle].max() < 240
        assert inside[middle].min() < 200
        assert inside[middle - 40].min() > 250


def test_one_plane_is_read_at_a_time(tmp_path, planes_per_compute, make_statements):
    stack, touched = planes_per_compute
    statements, stretch = make_statements(stack), stretch_of(stack)
    draw_slices(tmp_path, stack, statements, stretch)
    draw_contact_sheet(tmp_path / "c.png", stack, statements, stretch)
    assert max(len(planes) for planes in touched) == 1
