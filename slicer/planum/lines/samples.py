"""Sample values: hexadecimal floating point, unsigned samples, unsigned samples kept in signed fields.

The hexadecimal 32-bit float (System/360 Principles of Operation; SEG-Y format code 1) is
(-1)^s 16^(e-64) f/2^24 with a sign bit s, 7 bits e and 24 bits f, most significant bit first.
"""

from __future__ import annotations

import numpy as np

__all__ = ["SAMPLE_TYPES", "centred", "from_ibm", "to_ibm", "wrapped"]

SAMPLE_TYPES = {
    "int8": "i1",
    "int16": "i2",
    "int32": "i4",
    "uint8": "u1",
    "uint16": "u2",
    "uint32": "u4",
    "float32": "f4",
    "float64": "f8",
}
"""Names people type for numpy's sample types."""

# sign and power of sixteen for each first byte; powers of two, so that products with 24-bit fractions are exact
_SCALE = np.ldexp(np.repeat([1.0, -1.0], 128), 4 * (np.arange(256) % 128 - 64) - 24)

_LEAST_WRAPPED = 64  # fewer samples than one short trace tell nothing about where they are centred


def from_ibm(words: np.ndarray) -> np.ndarray:
    """Return float64 values of hexadecimal floats given as uint32 words, any shape; exact."""
    words = np.asarray(words, np.uint32)
    return _SCALE[words >> np.uint32(24)] * (words & np.uint32(0x00FFFFFF))


def to_ibm(values: np.ndarray) -> np.ndarray:
    """Return the nearest hexadecimal floats as uint32 words, any shape; the caller's array stays as it was.

    Values below the smallest normal number (16^-65) become 0.

    Raises
    ------
    ValueError
        When a value is not finite or larger than 7.237e75.
    """
    values = np.asarray(values, np.float64)
    if not np.isfinite(values).all():
        raise ValueError("hexadecimal floats hold finite values only")
    mantissa, binary = np.frexp(np.abs(values))
    exponent = -(-binary // 4)
    fraction = np.rint(np.ldexp(mantissa, binary - 4 * exponent + 24)).astype(np.int64)
    over = fraction == 1 << 24  # rounded up to the next power of sixteen
    fraction, exponent = np.where(over, 1 << 20, fraction), exponent + over + 64
    if (exponent > 127).any():
        raise ValueError("hexadecimal floats end at 7.237e75")
    words = (np.signbit(values).astype(np.int64) << 31) | (exponent.astype(np.int64) << 24) | fraction
    return np.where((exponent < 0) | (values == 0), 0, words).astype(np.uint32)


def wrapped(data: np.ndarray) -> bool:
    """Tell whether signed integers really are unsigned ones centred on half scale.

    Such samples lie at both ends of the signed range and jump between them; moved by half the range they are small
    and smooth. Both signs have to occur, the median moved sample must be below a quarter of half the range, and
    the moved samples must vary less than a quarter of the unmoved ones: recordings clipped at one rail, or loud ones,
    do not pass.
    """
    if data.dtype.kind != "i" or data.size < _LEAST_WRAPPED:
        return False
    # evenly taken traces are enough to tell, and keep the check cheap on long lines
    some = data[:: max(1, data.shape[0] // 256)].astype(np.int64)
    half = 1 << (8 * data.dtype.itemsize - 1)
    moved = np.where(some < 0, some + half, some - half)
    if not ((some > 0).any() and (some < 0).any()) or np.median(np.abs(moved)) >= half / 4:
        return False
    return bool(np.abs(np.diff(moved)).sum() < 0.25 * np.abs(np.diff(some)).sum())


def centred(data: np.ndarray) -> tuple[np.ndarray, int]:
    """Return samples as signed ones centred on half scale where they are unsigned, and the value taken off.

    Unsigned types are offset binary in recorders (common practice): half the range is zero volt. Flipping the top
    bit is that subtraction without a wider type. Signed integers that are unsigned in truth (:func:`wrapped`) go the
    same way; all others return unchanged with 0.
    """
    if data.dtype.kind != "u" and not wrapped(data):
        return data, 0
    bits = 8 * data.dtype.itemsize
    unsigned = data.view(f"u{data.dtype.itemsize}")
    top = unsigned.dtype.type(1 << (bits - 1))
    return (unsigned ^ top).view(f"i{data.dtype.itemsize}"), 1 << (bits - 1)
