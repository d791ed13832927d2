"""Depth slices of one small survey, step by step in float64: slow, plain, and sharing no code with the package.

    python benchmarks/reference_chain.py grids/marrowby --velocity 0.0875

A second opinion to compare the program with: every step is written out here in its textbook form. It reads what
``planum.synthetic`` writes (16-bit SEG-Y revision 1, straight lines along one local axis, regular traces).

Steps: time zero, dewow by an explicit running mean, one gain curve, band-pass, median trace of the whole grid taken
away, phase-shift migration (Gazdag 1978, Geophysics 43, 1342-1351, from memory), envelope, window means, linear
interpolation between lines.
"""

from __future__ import annotations

import argparse
import csv
import json
import tomllib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import shapely
from scipy.signal import hilbert
from scipy.stats import rankdata
from shapely.geometry import shape

C = 0.299792458  # m/ns


@dataclass
class Grid:
    """A block (line, along, sample) with its axes; ``live`` (line, along) says where something was recorded."""

    data: np.ndarray
    live: np.ndarray
    across: np.ndarray
    along: np.ndarray
    step_ns: float
    start_ns: float
    direction: str
    separation: float
    frequency: float


def read_segy(path: Path) -> tuple[np.ndarray, float]:
    """Return samples (trace, sample) and the interval in ns of a 16-bit file whose interval field holds picoseconds."""
    raw = path.read_bytes()
    picoseconds = int.from_bytes(raw[3216:3218], "big")
    n = int.from_bytes(raw[3220:3222], "big")
    if int.from_bytes(raw[3224:3226], "big") != 3:
        raise ValueError(f"{path.name} does not hold 16-bit integers")
    kind = np.dtype([("head", "V240"), ("words", ">i2", (n,))])
    return np.frombuffer(raw, kind, offset=3600)["words"].astype(np.float64), picoseconds * 1e-3


def read_grid(folder: Path) -> Grid:
    """Put all pieces of all lines on one regular block."""
    survey = tomllib.loads((folder / "survey.toml").read_text())
    radar = survey["radar"][0]
    with (folder / "lines.csv").open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    ends = np.array([[float(r[k]) for k in ("start_x_m", "start_y_m", "end_x_m", "end_y_m")] for r in rows])
    direction = "x" if np.ptp(ends[:, 0::2]) > 0 and np.all(ends[:, 1] == ends[:, 3]) else "y"
    way, side = (0, 1) if direction == "x" else (1, 0)
    lines = np.array([read_segy(folder / r["file"]) for r in rows], dtype=object)
    across_all = ends[:, side]
    spacing = np.min(np.diff(np.unique(across_all)))
    across = across_all.min() + spacing * np.arange(round(np.ptp(across_all) / spacing) + 1)
    step = np.median([abs(e[way + 2] - e[way]) / (len(d) - 1) for e, (d, _) in zip(ends, lines, strict=True)])
    low = ends[:, [way, way + 2]].min()
    along = low + step * np.arange(round((ends[:, [way, way + 2]].max() - low) / step) + 1)
    n = lines[0][0].shape[1]
    data, live = np.zeros((len(across), len(along), n)), np.zeros((len(across), len(along)), bool)
    for end, (traces, _) in zip(ends, lines, strict=True):
        row = round((end[side] - across[0]) / spacing)
        at = np.linspace(end[way], end[way + 2], len(traces))
        at, recorded = at[np.argsort(at)], traces[np.argsort(at)]
        good = np.ptp(recorded, axis=1) > 0
        inside = (along >= at[0] - 1e-6) & (along <= at[-1] + 1e-6)
        for j in np.flatnonzero(inside):
            i = int(np.argmin(np.abs(at - along[j])))
            if good[i] and abs(at[i] - along[j]) < 0.5 * step:
                data[row, j], live[row, j] = recorded[i], True
    frequency = radar["centre_frequency_mhz"] * 1e-3
    return Grid(data, live, across, along, lines[0][1], 0.0, direction, radar["antenna_separation_m"], frequency)


def set_time_zero(g: Grid) -> None:
    """Move every line so that the envelope peak of its direct wave stands at separation/c."""
    n = g.data.shape[2]
    picks = np.full(len(g.across), np.nan)
    for i in range(len(g.across)):
        if g.live[i].any():
            typical = np.median(g.data[i, g.live[i]], axis=0)
            e = np.abs(hilbert(typical - np.median(typical)))
            k = int(np.argmax(e))
            a, b, c = e[k - 1 : k + 2]
            picks[i] = (k + 0.5 * (a - c) / (a - 2 * b + c)) * g.step_ns
    zero = picks - g.separation / C
    common = round(float(np.nanmedian(zero)) / g.step_ns) * g.step_ns
    f = np.fft.rfftfreq(2 * n, g.step_ns)
    for i in np.flatnonzero(np.isfinite(zero)):
        # mirrored at the end, so that the shift does not wrap the start's step into the late samples
        doubled = np.concatenate([g.data[i], g.data[i, :, ::-1]], axis=1)
        spectrum = np.fft.rfft(doubled, axis=1) * np.exp(2j * np.pi * f * (zero[i] - common))
        g.data[i] = np.fft.irfft(spectrum, n=2 * n, axis=1)[:, :n]
    g.data[~g.live] = 0.0
    g.start_ns = -common


def dewow(g: Grid, periods: float = 3.0) -> None:
    """Subtract a running mean over ``periods`` of the centre frequency; the window shrinks at both ends."""
    n = g.data.shape[2]
    half = round(periods / g.frequency / g.step_ns) // 2
    smooth = np.empty_like(g.data)
    for k in range(n):
        smooth[:, :, k] = g.data[:, :, max(k - half, 0) : min(k + half + 1, n)].mean(axis=2)
    g.data = g.data - smooth


def gain(g: Grid) -> tuple[float, float]:
    """Multiply by t exp(b t), b fitted to the median envelope down to twice the noise, then constant; return b, end."""
    t = g.start_ns + g.step_ns * np.arange(g.data.shape[2])
    live = g.data[g.live]
    envelope = np.median(np.abs(hilbert(live - np.median(live, axis=0), axis=1)), axis=0)
    noise = np.median(envelope[-len(envelope) // 10 :])
    use = (t > 4.0) & (t < t[-1] - 2.0)
    below = np.flatnonzero(use & (envelope < 2.0 * noise))
    stop = t[below[0]] if below.size else t[-1]
    use &= t <= stop
    if use.sum() < 8:  # nothing to fit: spreading alone
        stop = t[-1]
        g.data = g.data * np.clip(t, 0.5, stop)
        return 0.0, stop
    slope = np.polyfit(t[use], np.log(envelope[use] * t[use]), 1)[0]
    b = max(-slope, 0.0)
    held = np.clip(t, 0.5, stop)
    g.data = g.data * (held * np.exp(b * held))
    return b, stop


def bandpass(g: Grid, corners: tuple[float, float, float, float] = (0.1, 0.2, 0.7, 1.0)) -> None:
    """Zero-phase band-pass with cosine flanks, GHz; padded with zeros to twice the length."""
    n = g.data.shape[2]
    f = np.fft.rfftfreq(2 * n, g.step_ns)
    up = 0.5 - 0.5 * np.cos(np.pi * np.clip((f - corners[0]) / (corners[1] - corners[0]), 0, 1))
    down = 0.5 + 0.5 * np.cos(np.pi * np.clip((f - corners[2]) / (corners[3] - corners[2]), 0, 1))
    g.data = np.fft.irfft(np.fft.rfft(g.data, n=2 * n, axis=2) * up * down, n=2 * n, axis=2)[:, :, :n]


def background(g: Grid) -> None:
    """Subtract the median trace of the whole grid."""
    g.data = np.where(g.live[:, :, None], g.data - np.median(g.data[g.live], axis=0), 0.0)


def migrate(g: Grid, velocity: float) -> None:
    """Phase-shift migration of every line at one velocity; the image's axis is vertical two-way time from 0."""
    n_lines, n_along, n = g.data.shape
    first = round(-g.start_ns / g.step_ns)
    n_image = n - first
    n_x, n_t = 1 << int(np.ceil(np.log2(1.6 * n_along))), 2 * n_image
    omega = 2 * np.pi * np.fft.rfftfreq(n_t, g.step_ns)
    use = (omega > 2 * np.pi * 0.05) & (omega < 2 * np.pi * 1.1)
    kx = 2 * np.pi * np.fft.fftfreq(n_x, g.along[1] - g.along[0])
    square = omega[use][:, None] ** 2 - (0.5 * velocity * kx[None, :]) ** 2
    turn = np.exp(1j * np.sqrt(np.maximum(square, 0.0)) * g.step_ns)
    image = np.empty((n_lines, n_along, n_image))
    for i in range(n_lines):
        spectrum = np.fft.rfft(g.data[i, :, first:], n=n_t, axis=1)[:, use].T
        spectrum = np.fft.fft(spectrum, n=n_x, axis=1) * (square > 0)
        levels = np.empty((n_image, n_x), complex)
        for k in range(n_image):
            levels[k] = spectrum.sum(axis=0)
            spectrum *= turn
        image[i] = 2.0 / n_t * np.fft.ifft(levels, axis=1).real[:, :n_along].T
    g.data, g.start_ns = image, 0.0


def window_means(envelope: np.ndarray, step_ns: float, windows: np.ndarray) -> np.ndarray:
    """Mean of the linearly interpolated envelope between two times; (line, along, window)."""
    n = envelope.shape[-1]
    running = np.concatenate(
        [np.zeros((*envelope.shape[:-1], 1)), np.cumsum(envelope[..., 1:] + envelope[..., :-1], -1) / 2], -1
    )

    def integral(t: float) -> np.ndarray:
        p = np.clip(t / step_ns, 0.0, n - 1.0)
        k = min(int(p), n - 2)
        r = p - k
        return running[..., k] + envelope[..., k] * r + (envelope[..., k + 1] - envelope[..., k]) * r * r / 2

    return np.stack([(integral(b) - integral(a)) * step_ns / (b - a) for a, b in windows], axis=-1)


def between_lines(strips: np.ndarray, g: Grid, cell: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Linear interpolation of strips (line, along, slice) to square cells; NaN beyond 0.6 spacings from a trace."""
    spacing = g.across[1] - g.across[0]
    a = np.arange(g.along[0] + cell / 2, g.along[-1], cell)
    c = np.arange(g.across[0] + cell / 2, g.across[-1], cell)
    along = np.empty((*strips.shape[::2], a.size))
    near = np.zeros((len(g.across), a.size), bool)
    j = np.clip(np.rint((a - g.along[0]) / (g.along[1] - g.along[0])).astype(int), 0, len(g.along) - 1)
    for i in range(len(g.across)):
        good = g.live[i]
        near[i] = good[j]
        for s in range(strips.shape[2]):
            along[i, s] = np.interp(a, g.along[good], strips[i, good, s]) if good.any() else 0.0
    out = np.full((strips.shape[2], c.size, a.size), np.nan)
    for q in range(a.size):
        rows = np.flatnonzero(near[:, q])
        if rows.size < 2:
            continue
        upper = np.clip(np.searchsorted(g.across[rows], c), 1, rows.size - 1)
        low, high = rows[upper - 1], rows[upper]
        share = np.clip((c - g.across[low]) / (g.across[high] - g.across[low]), 0.0, 1.0)
        away = np.minimum(np.abs(c - g.across[low]), np.abs(c - g.across[high]))
        values = (1 - share)[:, None] * along[low, :, q] + share[:, None] * along[high, :, q]
        values[away > 0.6 * spacing] = np.nan
        out[:, :, q] = values.T
    return out, a, c


def depth_slices(
    folder: Path, *, velocity: float, intervals: np.ndarray, cell: float = 0.05, migrated: bool = True
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Run the whole chain: slices (depth, y, x) in the local frame and the cell centres x, y in m."""
    g = read_grid(folder)
    set_time_zero(g)
    dewow(g)
    gain(g)
    bandpass(g)
    background(g)
    if migrated:
        migrate(g, velocity)
    else:
        first = round(-g.start_ns / g.step_ns)
        g.data, g.start_ns = g.data[:, :, first:], 0.0
    envelope = np.abs(hilbert(g.data, N=2 * g.data.shape[2], axis=2))[:, :, : g.data.shape[2]]
    windows = 2.0 * np.hypot(intervals, g.separation / 2) / velocity
    stack, along, across = between_lines(window_means(envelope, g.step_ns, windows), g, cell)
    return (stack, along, across) if g.direction == "x" else (stack.transpose(0, 2, 1), across, along)


def judge(
    stack: np.ndarray, x: np.ndarray, y: np.ndarray, truth: dict, kind: str = "wall"
) -> tuple[np.ndarray, np.ndarray]:
    """Contrast in dB and rank AUC per slice: inside the features of one kind against farther than 0.75 m from them."""
    area = shapely.union_all([shape(f["geometry"]) for f in truth["features"] if f["properties"]["kind"] == kind])
    cells = shapely.points(*np.meshgrid(x, y))
    away = shapely.distance(area, cells)
    db, auc = [], []
    for plane in stack:
        known = np.isfinite(plane)
        inside, outside = plane[known & (away == 0)], plane[known & (away > 0.75)]
        db.append(20 * np.log10(inside.mean() / outside.mean()))
        rank = rankdata(np.concatenate([inside, outside]))[: inside.size].sum()
        auc.append((rank - inside.size * (inside.size + 1) / 2) / (inside.size * outside.size))
    return np.array(db), np.array(auc)


def main() -> None:
    """Print contrast and AUC per slice."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=Path)
    parser.add_argument("--velocity", type=float, required=True, help="m/ns")
    parser.add_argument("--save", type=Path, help="write slices, x, y, intervals as .npz")
    asked = parser.parse_args()
    truth = json.loads((asked.folder / "truth" / "features.geojson").read_text())
    walls = [f["properties"] for f in truth["features"] if f["properties"]["kind"] == "wall"]
    top, base = min(w["top_m"] for w in walls), max(w["base_m"] for w in walls)
    edges = np.round(np.arange(0.0, 1.6 - 1e-9, 0.1), 3)
    intervals = np.vstack([np.column_stack([edges, edges + 0.1]), [[top, top + 0.1], [top, base]]])
    stack, x, y = depth_slices(asked.folder, velocity=asked.velocity, intervals=intervals)
    db, auc = judge(stack, x, y, truth)
    for (a, b), d, u in zip(intervals, db, auc, strict=True):
        print(f"{a:5.2f} to {b:5.2f} m   contrast {d:6.2f} dB   AUC {u:.4f}")
    if asked.save:
        np.savez_compressed(asked.save, slices=stack, x=x, y=y, intervals=intervals)


if __name__ == "__main__":
    main()
