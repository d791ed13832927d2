"""The stretch and its words."""

from __future__ import annotations

import numpy as np

from planum.outputs.stretch import GREY_NODATA, Stretch, grey, stretch_of


def test_the_stretch_is_the_percentiles_of_known_cells(make_slices):
    """On a stack small enough not to be thinned, numpy's percentiles are the answer, rounded to three figures."""
    slices = make_slices(n=5, shape=(60, 80))
    known = slices["amplitude"].values
    low, high = np.percentile(known[np.isfinite(known)], [2.0, 99.5])
    found = stretch_of(slices)
    # Three significant figures: half a unit of the third figure is at most 0.5 % of the number.
    np.testing.assert_allclose((found.low, found.high), (low, high), rtol=0.005)


def test_the_words_hold_the_exact_numbers(make_slices):
    """A reader can rebuild the stretch from the text alone."""
    found = stretch_of(make_slices(n=5))
    low, high = found.text.split(",")[0].split(" to ")
    assert (float(low), float(high)) == (found.low, found.high)
    assert found.text.endswith("strong = dark, linear")


def test_thinning_hardly_moves_the_stretch(make_slices):
    """A large stack is subsampled; sampling error of 100 000 cells at these percentiles is well below 3 %."""
    slices = make_slices(n=30, shape=(400, 400))
    known = slices["amplitude"].values
    low, high = np.percentile(known[np.isfinite(known)], [2.0, 99.5])
    found = stretch_of(slices)
    np.testing.assert_allclose((found.low, found.high), (low, high), rtol=0.03)


def test_a_stack_without_data_or_contrast_has_a_stretch(make_slices):
    slices = make_slices(n=2, shape=(20, 20))
    empty = slices.assign(amplitude=slices["amplitude"] * np.nan)
    flat = slices.assign(amplitude=slices["amplitude"] * 0 + 7)
    for stack in (empty, flat):
        found = stretch_of(stack)
        assert found.high > found.low


def test_greys_are_linear_and_strong_is_dark():
    """254 - round(254 t), clipped; NaN is the nodata grey."""
    values = np.array([-5.0, 0.0, 50.0, 100.0, 1e9, np.nan, np.inf], np.float32)
    expected = [254, 254, 127, 0, 0, GREY_NODATA, GREY_NODATA]
    assert grey(values, Stretch(0.0, 100.0, "")).tolist() == expected
