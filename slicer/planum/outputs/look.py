"""A first look at one raw recording: section, mean trace, spectrum, and what its header says."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from PIL import Image

from planum.errors import printable
from planum.lines.recording import Recording
from planum.outputs.paper import DPI, INK, SOFT, calm, figure, picture_of, round_step, text_height, wrapped, write_text
from planum.outputs.section import section_greys
from planum.outputs.writing import save_png

__all__ = ["amplitude_spectrum", "draw_look", "thinned"]

_WIDTH, _HEIGHT = 10.0, 6.6  # in
_SECTION = (0.6, 0.62, 6.3, 3.55)  # in: left, top, width, height
_TRACE = (7.15, 0.62, 1.15, 3.55)
_SPECTRUM = (0.6, 4.62, 6.3, 1.45)
_FACTS = (8.5, 0.55)
_COLUMNS = 1500


def draw_look(path: Path, recording: Recording, *, title: str, centre_frequency_ghz: float | None = None) -> None:
    """Draw one recording as it is in the file, only the mean trace's offset removed, and write a PNG.

    Parameters
    ----------
    recording
        What a reader returned; its ``data`` (trace, sample) stay as they were.
    title
        Names the file.
    centre_frequency_ghz
        Marked in the spectrum when given.
    """
    fig, canvas = figure(_WIDTH, _HEIGHT)
    width, height = (float(v) for v in fig.get_size_inches())

    def axes(left: float, top: float, wide: float, tall: float) -> Axes:
        made = fig.add_axes((left / width, 1 - (top + tall) / height, wide / width, tall / height))
        calm(made)
        return made

    data = thinned(recording.data, _COLUMNS)
    n_samples = recording.data.shape[1]
    window = recording.interval_ns * max(n_samples - 1, 1)
    section = axes(*_SECTION)
    section.set_xlim(0, max(recording.data.shape[0] - 1, 1))
    section.set_ylim(window, 0)
    section.set_xlabel("trace", fontsize=7, color=SOFT, labelpad=2)
    section.set_ylabel("time from the first sample, ns", fontsize=7, color=SOFT, labelpad=2)
    mean = data.mean(axis=0)
    _draw_trace(axes(*_TRACE), mean, recording.interval_ns, window)
    _draw_spectrum(axes(*_SPECTRUM), data, recording.interval_ns, centre_frequency_ghz)
    canvas.draw()
    picture = picture_of(canvas)
    left, top, wide, tall = (round(v * DPI) for v in _SECTION)
    greys = Image.fromarray(np.ascontiguousarray(section_greys(data - data.mean()).T))
    picture.paste(greys.resize((wide - 2, tall - 2), Image.Resampling.BILINEAR), (left + 1, top + 1))
    write_text(picture, (left, 16), printable(title), 11, bold=True)
    write_text(picture, (left + wide + 30, 52), "mean trace", 7.5, bold=True)
    _write_facts(picture, recording)
    save_png(path, picture, title=printable(title), dpi=DPI)


def thinned(data: np.ndarray, columns: int) -> np.ndarray:
    """Return at most about ``columns`` traces (trace, sample) as float32: every k-th, so that faults stay visible."""
    every = max(1, math.ceil(data.shape[0] / columns))
    return np.asarray(data[::every], np.float32)


def amplitude_spectrum(data: np.ndarray, interval_ns: float) -> tuple[np.ndarray, np.ndarray]:
    """Return frequencies (GHz) and the mean amplitude spectrum of the traces, largest value 1.

    Parameters
    ----------
    data
        (trace, sample); every trace's mean is removed and a Hann window laid over it.
    interval_ns
        Sample interval, ns.
    """
    n = data.shape[1]
    spectrum = np.abs(np.fft.rfft((data - data.mean(axis=1, keepdims=True)) * np.hanning(n), axis=1)).mean(axis=0)
    largest = float(spectrum.max(initial=0.0))
    return np.fft.rfftfreq(n, interval_ns), spectrum / largest if largest > 0 else spectrum


def _draw_trace(axes: Axes, mean: np.ndarray, interval_ns: float, window: float) -> None:
    axes.plot(mean, interval_ns * np.arange(mean.size), color=INK, lw=0.8)
    axes.set_ylim(window, 0)
    largest = float(np.abs(mean).max(initial=0.0)) or 1.0
    axes.set_xlim(-1.05 * largest, 1.05 * largest)
    axes.set_xticks([0.0], ["0"])
    axes.set_yticklabels([])
    axes.axvline(0.0, color=SOFT, lw=0.4)


def _draw_spectrum(axes: Axes, data: np.ndarray, interval_ns: float, centre: float | None) -> None:
    frequency, spectrum = amplitude_spectrum(data, interval_ns)
    decibel = 20 * np.log10(np.maximum(spectrum, 1e-4))
    axes.plot(1000 * frequency, decibel, color=INK, lw=0.9)
    top = 1000 * min(frequency[-1], 4 * centre if centre else frequency[-1])  # beyond lies noise
    axes.set_xlim(0, top)
    axes.set_ylim(-65, 3)
    step = round_step(top, 10)
    axes.set_xticks(step * np.arange(math.floor(top / step) + 1))
    axes.set_yticks([-60, -40, -20, 0])
    axes.grid(axis="y", color="#e4e4e4", lw=0.6)
    axes.set_axisbelow(True)
    axes.set_xlabel("frequency, MHz", fontsize=7, color=SOFT, labelpad=2)
    axes.set_ylabel("mean amplitude, dB", fontsize=7, color=SOFT, labelpad=2)
    if centre:
        axes.axvline(1000 * centre, color=SOFT, lw=0.8, ls=(0, (4, 3)))
        axes.text(1000 * centre + 0.006 * top, -62, f"nominal {1000 * centre:g} MHz", fontsize=7, color=SOFT)


def _write_facts(picture: Image.Image, recording: Recording) -> None:
    """Write names small and values below them, as far as the page reaches."""
    left, y = _FACTS[0] * DPI, _FACTS[1] * DPI
    room = picture.width - left - 20
    for name, value in _facts(recording):
        lines = wrapped(printable(value, longest=160), width_px=room, points=7.5)
        needed = 13 + text_height(lines, 7.5) + 12
        if y + needed > picture.height - 20:
            write_text(picture, (left, y), "…", 7.5)
            break
        write_text(picture, (left, y), printable(name, longest=40), 6.2, fill=110)
        write_text(picture, (left, y + 13), lines, 7.5)
        y += needed


def _facts(recording: Recording) -> list[tuple[str, Any]]:
    n_traces, n_samples = recording.data.shape
    flagged = int(np.count_nonzero(recording.flag))
    facts: list[tuple[str, Any]] = [
        ("traces", n_traces),
        ("samples per trace", n_samples),
        ("sample interval", f"{recording.interval_ns:.6g} ns ({recording.interval_origin})"),
        ("window", f"{recording.interval_ns * n_samples:.4g} ns"),
        ("type, range", f"{recording.data.dtype.name}, {recording.data.min():g} to {recording.data.max():g}"),
        ("flagged traces", flagged),
    ]
    facts += [("noticed", str(problem)) for problem in recording.problems[:3]]
    skip = {"text", "text_header", "textual_header"}
    return facts + [
        (k.replace("_", " "), v) for k, v in recording.header.items() if k not in skip and v not in ("", None)
    ]
