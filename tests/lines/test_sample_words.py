"""Hexadecimal floats against worked examples, and unsigned samples."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planum.lines import samples

# -118.625: the worked example of the encyclopaedia article on IBM hexadecimal floating point (from memory); the others
# follow from (-1)^s 16^(e-64) f/2^24 by hand (System/360 Principles of Operation, from memory)
WORKED = [
    (0xC276A000, -118.625),
    (0x41100000, 1.0),
    (0x42640000, 100.0),
    (0xC1100000, -1.0),
    (0x40280000, 0.15625),
    (0x00000000, 0.0),
]


@pytest.mark.parametrize(("word", "value"), WORKED)
def test_worked_examples_both_ways(word, value):
    assert samples.from_ibm(np.array([word], np.uint32))[0] == value
    assert samples.to_ibm(np.array([value]))[0] == word


@pytest.mark.parametrize(("word", "value"), [(0x4019999A, 0.1), (0x413243F7, math.pi)])
def test_writing_rounds_to_nearest(word, value):
    assert samples.to_ibm(np.array([value]))[0] == word


@pytest.mark.parametrize(("word", "value"), [(0x7FFFFFFF, 7.2370051e75), (0x00100000, 5.397605e-79)])
def test_ends_of_the_range(word, value):
    # the printed values carry 7 or 8 digits
    assert samples.from_ibm(np.array([word], np.uint32))[0] == pytest.approx(value, rel=5e-7)


@given(st.integers(0, 2**32 - 1))
def test_reading_follows_the_formula(word):
    """Exact rational arithmetic is the second way to the value."""
    sign, exponent, fraction = word >> 31, word >> 24 & 0x7F, word & 0xFFFFFF
    exact = (-1) ** sign * Fraction(16) ** (exponent - 64) * Fraction(fraction, 2**24)
    assert Fraction(float(samples.from_ibm(np.array([word], np.uint32))[0])) == exact


@given(st.integers(0, 2**32 - 1).filter(lambda w: w & 0x00F00000))
def test_normal_words_survive_the_round_trip(word):
    words = np.array([word], np.uint32)
    assert samples.to_ibm(samples.from_ibm(words))[0] == word


@given(st.floats(1e-60, 1e60) | st.floats(-1e60, -1e-60))
def test_writing_errs_by_no_more_than_a_hexadecimal_half_digit(value):
    # 24-bit fractions with up to 3 leading zero bits: half a unit is 2^-25 of a fraction that is at least 2^-4
    back = samples.from_ibm(samples.to_ibm(np.array([value])))[0]
    assert abs(back - value) <= 2.0**-21 * abs(value)


@pytest.mark.parametrize(("value", "says"), [(np.inf, "finite"), (np.nan, "finite"), (1e76, "7.237e75")])
def test_what_cannot_be_written_is_refused(value, says):
    with pytest.raises(ValueError, match=says):
        samples.to_ibm(np.array([value]))


def test_too_small_becomes_zero():
    assert samples.to_ibm(np.array([1e-80, -1e-80])).tolist() == [0, 0]


@pytest.mark.parametrize("bits", [8, 16, 32])
def test_unsigned_samples_come_centred(bits):
    raw = np.array([[0, 1, 2 ** (bits - 1), 2**bits - 1]], f"u{bits // 8}")
    data, offset = samples.centred(raw)
    assert data.dtype == f"i{bits // 8}"
    assert data.tolist() == [[v - 2 ** (bits - 1) for v in raw[0].tolist()]]
    assert offset == 2 ** (bits - 1)


def _decaying(loud: float) -> np.ndarray:
    """A decaying oscillation and noise, as a radar trace looks, in counts."""
    t = np.arange(300)
    noise = np.random.default_rng(5).normal(0, 30, (40, 300))
    return np.rint(loud * np.exp(-t / 60) * np.sin(t / 4) + noise)


@pytest.mark.parametrize("loud", [0, 500, 8000, 30000])
def test_unsigned_in_signed_is_recognised_by_its_wrap(loud):
    true = _decaying(loud)
    wrapped = (true + 32768).clip(0, 65535).astype(np.uint16).view(np.int16)
    data, offset = samples.centred(wrapped)
    assert offset == 32768
    np.testing.assert_array_equal(data, true.clip(-32768, 32767))


@pytest.mark.parametrize("loud", [0, 500, 8000, 30000, 90000])
def test_signed_stays_signed(loud):
    """Also a recording clipped at both rails."""
    true = _decaying(loud).clip(-32768, 32767).astype(np.int16)
    data, offset = samples.centred(true)
    assert offset == 0
    assert data is true


@pytest.mark.parametrize("level", [32767, -32768, 20000, -20000])
def test_an_offset_at_one_rail_is_no_wrap(level):
    true = np.clip(_decaying(0) + level, -32768, 32767).astype(np.int16)
    assert samples.centred(true)[1] == 0
