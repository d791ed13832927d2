"""Sections and the first look: signs, depths where the velocity puts them, a spectrum that is known."""

from __future__ import annotations

import numpy as np
import pytest
from PIL import Image
from scipy.ndimage import find_objects, label

from planum.lines.recording import Recording
from planum.outputs.look import amplitude_spectrum, draw_look, thinned
from planum.outputs.section import DepthScale, SectionText, draw_section, section_greys
from planum.records import Velocity

SCALE = DepthScale(Velocity.constant(0.1, 0.002, origin="measured"), 0.2, [(0.0, 0.5), (0.25, 0.75), (0.5, 1.0)])


def panel(n_along=300, n_time=200) -> np.ndarray:
    return np.random.default_rng(3).normal(size=(n_along, n_time)).astype(np.float32)


def panels_of(path) -> list[tuple[slice, slice]]:
    """Rows and columns of the drawn frames, from the top."""
    parts, _ = label(np.asarray(Image.open(path)) == 28, structure=np.ones((3, 3)))
    boxes = find_objects(parts)
    return [b for b in boxes if b[1].stop - b[1].start > 500]


def test_positive_is_dark_and_zero_is_mid_grey():
    values = np.array([[-2.0, 0.0, 2.0, np.nan]])
    greys = section_greys(values, percentile=100.0)[0].tolist()
    # 127.5 has no grey of its own.
    assert greys[0] > 250
    assert greys[2] < 5
    assert greys[1] in (127, 128)
    assert greys[3] in (127, 128)
    assert section_greys(np.full((2, 2), 9, np.uint8)).tolist() == [[9, 9], [9, 9]]
    assert set(section_greys(np.zeros((2, 2))).ravel()) <= {127, 128}


def test_time_runs_down_and_distance_runs_right(tmp_path):
    """A black block early and at the end of the line is found up and right in every panel."""
    block = np.full((100, 50), 255, np.uint8)
    block[80:, :10] = 0
    path = tmp_path / "a.png"
    draw_section(
        path,
        {"raw": block, "migrated": block},
        np.linspace(0, 10, 100),
        np.linspace(0, 40, 50),
        SCALE,
        text=SectionText("A"),
    )
    picture = np.asarray(Image.open(path))
    boxes = panels_of(path)
    assert len(boxes) == 2
    for rows, columns in boxes:
        inside = picture[rows.start + 4 : rows.start + 200, columns.start + 20 : columns.start + 900]
        high, wide = inside.shape
        assert inside[: high // 6, int(0.9 * wide) :].mean() < 10
        assert inside[high // 2 :, :].mean() > 245
        assert inside[:, : wide // 2].mean() > 245


def test_the_ruler_ends_where_a_depth_is_reached(tmp_path):
    """Slices 0 to 1 m at 0.1 m/ns and 0.2 m separation: t = 2 sqrt(d² + 0.1²) / v, from 2.0 to 20.1 ns."""
    path = tmp_path / "a.png"
    times = np.linspace(-2.0, 40.0, 200)
    draw_section(
        path, {"raw": np.full((300, 200), 128, np.uint8)}, np.linspace(0, 10, 300), times, SCALE, text=SectionText("A")
    )
    picture = np.asarray(Image.open(path))
    rows, columns = panels_of(path)[0]
    # The frame's rows: time -2 and 40 ns lie on its first and last inner pixel; ticks hang below it.
    left, top = columns.start + 7, rows.start
    column = picture[top : top + 232, left + 928 + 1 :]
    ruler = next(c for c in range(3, 12) if (column[:, c] < 60).sum() > 40)
    marked = np.flatnonzero(column[:, ruler] < 60)
    at = -2.0 + (np.array([marked[0], marked[-1]]) - 1) / 227 * 42.0
    expected = [2 * np.hypot(d, 0.1) / 0.1 for d in (0.0, 1.0)]
    # One pixel is 0.19 ns; the ruler's outline and rounding take one each.
    np.testing.assert_allclose(at, expected, atol=0.4)


def test_sections_are_the_same_twice_and_carry_their_text(tmp_path):
    arguments = ({"raw": panel()}, np.linspace(0, 5, 300), np.linspace(-1, 50, 200), SCALE)
    for name in ("a.png", "b.png"):
        draw_section(
            tmp_path / name, *arguments, text=SectionText("Grid A, line 3", "Ashwell", "Migrated in 2-D, line by line.")
        )
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()
    with Image.open(tmp_path / "a.png") as picture:
        picture.load()
        assert picture.text["Title"] == "Grid A, line 3"
        assert picture.text["Description"] == "Migrated in 2-D, line by line."


def test_what_was_not_recorded_is_hatched_and_not_grey(tmp_path):
    """The last quarter of the line: white with lines in every panel, where mid grey would pass for silent ground."""
    recorded = np.arange(300) < 225
    panels = {"raw": np.full((300, 200), 128, np.uint8), "migrated": np.full((300, 200), 128, np.uint8)}
    axes = np.linspace(0, 10, 300), np.linspace(0, 40, 200)
    draw_section(tmp_path / "a.png", panels, *axes, SCALE, text=SectionText("A"), recorded=recorded)
    picture = np.asarray(Image.open(tmp_path / "a.png"))
    boxes = panels_of(tmp_path / "a.png")
    assert len(boxes) == 2
    for rows, columns in boxes:
        left = columns.start + 7  # the ticks of the times
        inside = picture[rows.start + 1 : rows.start + 220, left + 1 : left + 929]
        assert set(np.unique(inside[:, :690])) == {128}
        assert set(np.unique(inside[:, 700:920])) == {205, 255}


def test_impossible_sections_are_refused(tmp_path):
    with pytest.raises(ValueError, match="at least one panel"):
        draw_section(tmp_path / "a.png", {}, np.arange(3), np.arange(3), SCALE, text=SectionText("A"))
    with pytest.raises(ValueError, match="along runs from 3 to 0"):
        draw_section(tmp_path / "a.png", {"raw": panel()}, np.array([3, 0]), np.arange(3), SCALE, text=SectionText("A"))


def recording(data: np.ndarray, interval_ns: float = 0.1) -> Recording:
    return Recording(
        data=data,
        interval_ns=interval_ns,
        interval_origin="survey",
        x=None,
        y=None,
        flag=np.zeros(len(data), np.uint8),
        header={"format": "16-bit integers", "text_header": "C 1 secret" * 50, "odd": "bell\x07"},
        problems=(),
    )


def test_the_spectrum_peaks_at_a_known_tone():
    """A 400 MHz cosine of 512 samples at 0.1 ns: the peak lies within half a step of 1 / (512 x 0.1 ns)."""
    time = 0.1 * np.arange(512)
    tone = np.cos(2 * np.pi * 0.4 * time)[None, :] * np.ones((5, 1))
    frequency, spectrum = amplitude_spectrum(tone, 0.1)
    assert spectrum.max() == 1.0
    assert abs(frequency[np.argmax(spectrum)] - 0.4) <= 0.5 / 51.2


def test_looking_changes_nothing_and_draws_long_lines(tmp_path):
    data = (1000 * panel(4000, 256)).astype(np.int16)
    before = data.copy()
    draw_look(tmp_path / "look.png", recording(data), title="lines/A_001.sgy\x07", centre_frequency_ghz=0.4)
    np.testing.assert_array_equal(data, before)
    assert thinned(data, 1500).shape == (1334, 256)
    with Image.open(tmp_path / "look.png") as picture:
        picture.load()
        assert picture.size == (1200, 792)
        assert picture.text["Title"] == "lines/A_001.sgy "


@pytest.mark.parametrize("data", [np.zeros((1, 16), np.int16), np.full((3, 40), 7, np.int32)])
def test_dead_and_single_traces_are_drawn(tmp_path, data):
    draw_look(tmp_path / "look.png", recording(data), title="dead")
    assert (tmp_path / "look.png").stat().st_size > 5000
