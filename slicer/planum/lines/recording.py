"""What a reader is told and what it returns: one recorded line, with nothing interpreted that the file does not say."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
import xarray as xr

from planum.errors import Problem
from planum.schema import LINE_DIMS

__all__ = ["CUT", "IntervalUnit", "RawLayout", "ReadOptions", "Recording"]

IntervalUnit = Literal["ps", "ns", "us"]


CUT = "file length"
"""Key of the warning that a file ends in the middle: its last trace is not the end of the line."""


@dataclass(frozen=True)
class RawLayout:
    """Layout of a raw binary file, as its user declares it.

    Parameters
    ----------
    n_samples : int
        Samples per trace.
    header_bytes : int
        Bytes before the first trace.
    bytes_before_trace : int
        Bytes before the samples of each trace.
    sample_type : str
        One of int8, int16, int32, uint8, uint16, uint32, float32, float64.
    byte_order : str
        ``"<"`` least significant byte first, ``">"`` most significant byte first.
    """

    n_samples: int
    header_bytes: int = 0
    bytes_before_trace: int = 0
    sample_type: str = "int16"
    byte_order: str = "<"


@dataclass(frozen=True)
class ReadOptions:
    """Everything the survey says about how to read a line file.

    Parameters
    ----------
    interval_ns : float, optional
        Sample interval in ns; beats whatever the file says.
    interval_unit : {"ps", "ns", "us"}, optional
        What the file's interval field holds.
    centre_frequency_ghz : float, optional
        Centre frequency, to check the samples per period.
    part : int, optional
        Which line of a file that holds several, counted from 0.
    split : str, optional
        Trace-header field that tells the lines of one file apart, or ``"counter"`` (a trace counter starts again).
    header_positions : bool
        Read x, y from the file.
    layout : RawLayout, optional
        Declared layout of a raw binary file.
    reader : str, optional
        Entry-point name of the reader to use, whatever the file looks like.
    """

    interval_ns: float | None = None
    interval_unit: IntervalUnit | None = None
    centre_frequency_ghz: float | None = None
    part: int | None = None
    split: str | None = None
    header_positions: bool = False
    layout: RawLayout | None = None
    reader: str | None = None


@dataclass(frozen=True, eq=False)
class Recording:
    """One recorded line as a reader returns it.

    Parameters
    ----------
    data : numpy.ndarray
        Samples (trace, sample), the file's type in native byte order; unsigned samples come as signed ones, centred.
    interval_ns : float
        Sample interval, ns.
    interval_origin : str
        Where the interval comes from, for people.
    x, y : numpy.ndarray or None
        Positions (trace) from the file, m.
    flag : numpy.ndarray
        Bits of ``planum.records.FLAG_*`` (trace), uint8.
    header : dict
        Facts for people, plain JSON.
    problems : tuple of Problem
        Warnings and notes; what is an error was raised.
    """

    data: np.ndarray
    interval_ns: float
    interval_origin: str
    x: np.ndarray | None
    y: np.ndarray | None
    flag: np.ndarray
    header: dict[str, Any] = field(default_factory=dict)
    problems: tuple[Problem, ...] = ()

    def to_dataarray(self) -> xr.DataArray:
        """Return ``amplitude`` (trace, sample) with ``time`` (sample), ns from sample 0, ``flag`` and x, y if known."""
        coords: dict[str, Any] = {
            "time": ("sample", self.interval_ns * np.arange(self.data.shape[1]), {"units": "ns"}),
            "flag": ("trace", self.flag),
        }
        if self.x is not None and self.y is not None:
            coords |= {"x": ("trace", self.x, {"units": "m"}), "y": ("trace", self.y, {"units": "m"})}
        attrs = {"quantity": "voltage", "interval_ns": self.interval_ns, "interval_origin": self.interval_origin}
        return xr.DataArray(self.data, dims=LINE_DIMS, coords=coords, name="amplitude", attrs=attrs)
