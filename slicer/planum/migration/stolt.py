"""Constant-velocity migration, line by line, by mapping frequency to wavenumber.

The zero-offset section is read as the wavefield of reflectors that explode at time zero in a medium of half the
velocity. With ``kz`` the vertical wavenumber the image wants and ``omega`` the frequency the section holds,

    omega = sgn(kz) (v/2) sqrt(kx² + kz²),    d omega / d kz = (v/2) |kz| / sqrt(kx² + kz²)

(R. H. Stolt, Migration by Fourier transform, Geophysics 43, 1978; from memory). The image comes out in migrated
two-way time on the section's own axes, ``kz = omega_tau / (v/2)``, so a flat reflector keeps time and amplitude.

Numerics. The section is centred in a zero-padded buffer before its spectrum is interpolated: a spectrum turns one
cycle per buffer length of delay, and an uncentred one turns too fast to interpolate, which shows as an amplitude that
drifts with depth. The interpolation is a Kaiser-Bessel kernel of six taps on a spectrum oversampled 1.25 times, undone
in time (Beatty, Nishimura & Pauly, IEEE Trans. Med. Imaging 24, 2005; from memory). All numbers that depend on geometry
and velocity alone are one sparse real matrix and one phase, built once and shared by all lines and threads.
"""

from __future__ import annotations

import math
import threading
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import xarray as xr
from scipy import fft, sparse, special

from planum.constants import VELOCITY_RANGE
from planum.errors import Problem, RecipeError
from planum.records import FLAG_DEAD, FLAG_NONE, FLAG_RIM
from planum.schema import regular_step

__all__ = [
    "StoltTable",
    "alias_free_dip_deg",
    "check_settings",
    "edge_weights",
    "mark_rim",
    "rim_m",
    "stolt",
    "stolt_analytic",
    "stolt_kernel",
    "stolt_map",
    "stolt_table",
]

TAPS = 6
OVERSAMPLING = 1.25
MAX_DIP_DEG, DIP_TAPER_DEG, EDGE_TAPER_M = 65.0, 15.0, 0.2

_EMPTY = FLAG_NONE | FLAG_DEAD
"""Nothing to migrate: a run of dead traces is as sharp an edge as a stretch without a recording."""


@dataclass(frozen=True, eq=False)
class StoltTable:
    """What migration needs of geometry and velocity, shared by every line of a set.

    ``matrix`` (kx pairs × output bins, kx pairs × input bins) holds interpolation taps, Jacobian and tapers;
    ``phase`` (kx pairs, output bins) moves the time centre; ``spread`` (n_time) undoes the kernel in time.
    """

    n_along: int
    n_time: int
    n_x: int
    n_t: int
    n_in: int
    matrix: sparse.csr_array
    phase: np.ndarray
    spread: np.ndarray


def stolt_map(kx: Any, kz: Any, *, velocity_m_per_ns: float) -> tuple[Any, Any]:
    """Return frequency and Jacobian of the exploding-reflector mapping.

    Parameters
    ----------
    kx, kz : array_like
        Horizontal and vertical wavenumber, rad/m; broadcast against each other.
    velocity_m_per_ns : float
        Velocity of the ground, m/ns; waves travel one way at half of it.

    Returns
    -------
    omega : ndarray
        rad/ns, with the sign of ``kz``.
    jacobian : ndarray
        d omega / d kz, m/ns; 0 where ``kx = kz = 0``.
    """
    half = velocity_m_per_ns / 2.0
    k = np.hypot(kx, kz)
    cosine = np.divide(np.abs(kz), k, out=np.zeros_like(k, dtype=float), where=k > 0)
    return np.sign(kz) * half * k, half * cosine


def alias_free_dip_deg(*, velocity_m_per_ns: float, trace_spacing_m: float, highest_ghz: float) -> float:
    """Return the steepest dip, in degrees, whose waves the trace spacing samples without aliasing.

    asin(v / (4 dx f)): two samples per apparent wavelength of the two-way path (spatial Nyquist); 90 when no dip
    aliases. Migration cannot repair what was aliased in the field.
    """
    return math.degrees(math.asin(min(1.0, velocity_m_per_ns / (4.0 * trace_spacing_m * highest_ghz))))


def rim_m(depth_m: Any, *, dip_deg: float = 45.0) -> Any:
    """Return how far from a line's end an image at ``depth_m`` misses dips up to ``dip_deg``, in m: z tan(dip)."""
    return np.asarray(depth_m, float) * math.tan(math.radians(dip_deg))


def mark_rim(flag: np.ndarray, *, trace_spacing_m: float, reach_m: float) -> np.ndarray:
    """Return ``flag`` (..., along) with FLAG_RIM set where a line end or a gap is nearer than ``reach_m``.

    Places without a recording and dead ones are gaps, and are left as they are.
    """
    flag = np.asarray(flag)
    rows = flag.reshape(-1, flag.shape[-1])
    rim = np.stack([_gap_distance((r & _EMPTY) != 0) * trace_spacing_m < reach_m for r in rows]).reshape(flag.shape)
    return np.where(rim & ((flag & _EMPTY) == 0), flag | FLAG_RIM, flag).astype(flag.dtype)


def stolt(
    cube: xr.DataArray,
    *,
    velocity_m_per_ns: float,
    max_dip_deg: float = MAX_DIP_DEG,
    dip_taper_deg: float = DIP_TAPER_DEG,
    edge_taper_m: float = EDGE_TAPER_M,
    highest_ghz: float | None = None,
) -> xr.DataArray:
    """Migrate every line of a cube at one velocity.

    Parameters
    ----------
    cube : DataArray
        Voltage with dims (..., along, time); ``along`` in m and ``time`` in ns from time zero, regular. ``time`` may
        start before zero. Whole lines must sit in one dask chunk.
    velocity_m_per_ns : float
        Velocity of the ground, m/ns.
    max_dip_deg, dip_taper_deg : float
        Dips are kept up to the first, in degrees, and fade out over the second (true dip of the image).
    edge_taper_m : float
        Line ends and both sides of gaps fade in over this length, m: a sharp end would smear into the image.
    highest_ghz : float, optional
        Frequencies above it are dropped (fading out over the last eighth below it), which makes the job smaller; the
        default keeps all but the last few bins below Nyquist.

    Returns
    -------
    DataArray
        Voltage, float32, same axes; ``time`` is migrated two-way time. Places without a recording and dead ones hold
        0.

    Raises
    ------
    RecipeError
        For a velocity outside 0.03 m/ns to the speed of light, or impossible dips or tapers.
    ValueError
        When ``along`` or ``time`` is not regular.

    Notes
    -----
    Line by line means in two dimensions: what lies beside a line is imaged at its slant distance.
    """
    check_settings(velocity_m_per_ns, max_dip_deg, dip_taper_deg, edge_taper_m, highest_ghz)
    along, time = cube["along"].values, cube["time"].values
    step = regular_step(along, name="along")
    shape = (along.size, time.size, step, regular_step(time, name="time"), float(time[0]))
    options = (float(velocity_m_per_ns), float(max_dip_deg), float(dip_taper_deg), highest_ghz)
    if "flag" in cube.coords:
        flag = xr.DataArray(cube.coords["flag"].data, dims=cube.coords["flag"].dims)
    else:
        flag = xr.DataArray(np.zeros(along.size, np.uint8), dims=("along",))
    out = xr.apply_ufunc(
        _migrate_block,
        cube,
        flag,
        kwargs={"shape": shape, "options": options, "edge": edge_taper_m / step},
        input_core_dims=[["along", "time"], ["along"]],
        output_core_dims=[["along", "time"]],
        dask="parallelized",
        output_dtypes=[np.float32],
        keep_attrs=True,
    )
    return out.transpose(*cube.dims)


def stolt_kernel(data: np.ndarray, table: StoltTable) -> np.ndarray:
    """Migrate one line.

    Parameters
    ----------
    data : ndarray
        (n_along, n_time) float32, ends already tapered, gaps 0.
    table : StoltTable
        From :func:`stolt_table` for the same shape.

    Returns
    -------
    ndarray
        (n_along, n_time) float32, migrated two-way time.
    """
    return _uncentre(fft.irfft(_image(data, table), n=table.n_t, axis=1, overwrite_x=True), table.n_time)


def stolt_analytic(data: np.ndarray, table: StoltTable) -> np.ndarray:
    """Migrate one line to its analytic signal; the modulus is the envelope, the real part :func:`stolt_kernel`.

    Parameters and shapes as there; complex64. Negative frequencies are never made, so no Hilbert transform is needed.
    """
    spectrum = np.zeros((table.n_along, table.n_t), np.complex64)
    spectrum[:, : table.phase.shape[1]] = _image(data, table)
    spectrum *= 2.0  # the constant term is 0: its Jacobian is
    return _uncentre(fft.ifft(spectrum, axis=1, overwrite_x=True), table.n_time)


def _image(data: np.ndarray, table: StoltTable) -> np.ndarray:
    """Return the migrated image (n_along, output bin): space along the line, frequency in time."""
    spectrum = _forward(data, table)
    pairs, n_out = table.phase.shape
    image = (table.matrix @ spectrum).view(np.complex64).reshape(pairs, n_out, 2)
    image *= table.phase[:, :, None]
    both = np.zeros((table.n_x, n_out), np.complex64)
    both[:pairs] = image[:, :, 0]
    both[table.n_x - pairs + 1 :] = image[:0:-1, :, 1]  # at Nyquist, +kx and -kx are one row and hold the same
    return fft.ifft(both, axis=0, overwrite_x=True)[: table.n_along]


def _forward(data: np.ndarray, table: StoltTable) -> np.ndarray:
    """Return the spectrum as columns (re, im of +kx; re, im of -kx), rows (kx pair, frequency from -TAPS/2 on)."""
    n, pairs, guard = table.n_time, table.phase.shape[0], TAPS // 2
    centre = n // 2
    buffer = np.zeros((data.shape[0], table.n_t), np.float32)
    np.multiply(data[:, centre:], table.spread[centre:], out=buffer[:, : n - centre])
    np.multiply(data[:, :centre], table.spread[:centre], out=buffer[:, table.n_t - centre :])
    spectrum = fft.rfft(buffer, axis=1)[:, : table.n_in]
    spectrum = fft.fft(spectrum, n=table.n_x, axis=0)
    out = np.empty((pairs, guard + table.n_in, 2), np.complex64)
    out[:, guard:, 0] = spectrum[:pairs]
    out[0, guard:, 1] = spectrum[0]
    out[1:, guard:, 1] = spectrum[: table.n_x - pairs : -1]
    # a real section: the value at (-omega, kx) is the conjugate of the one at (omega, -kx)
    out[:, :guard, 0] = out[:, 2 * guard : guard : -1, 1].conj()
    out[:, :guard, 1] = out[:, 2 * guard : guard : -1, 0].conj()
    return out.view(np.float32).reshape(pairs * (guard + table.n_in), 4)


def _uncentre(buffer: np.ndarray, n: int) -> np.ndarray:
    centre = n // 2
    return np.concatenate([buffer[:, buffer.shape[1] - centre :], buffer[:, : n - centre]], axis=1)


_BUILDING = threading.Lock()


def stolt_table(
    shape: tuple[int, int, float, float, float],
    *,
    velocity_m_per_ns: float,
    max_dip_deg: float = MAX_DIP_DEG,
    dip_taper_deg: float = DIP_TAPER_DEG,
    highest_ghz: float | None = None,
) -> StoltTable:
    """Return the table for ``shape`` = (n_along, n_time, along step m, time step ns, first time ns).

    Built once and kept for the last few geometries; safe to call from several threads.
    """
    with _BUILDING:  # lru_cache alone would let two threads build the same table
        return _table(shape, (velocity_m_per_ns, max_dip_deg, dip_taper_deg, highest_ghz))


@lru_cache(maxsize=4)
def _table(
    shape: tuple[int, int, float, float, float], options: tuple[float, float, float, float | None]
) -> StoltTable:
    n_along, n_time, dx, dt, t0 = shape
    velocity, max_dip, dip_taper, highest = options
    half = velocity / 2.0
    last = t0 + dt * (n_time - 1)
    aperture = half * max(abs(t0), abs(last)) * math.sin(math.radians(min(max_dip + dip_taper, 90.0)))
    n_x = fft.next_fast_len(n_along + math.ceil(aperture / dx))
    n_t = fft.next_fast_len(math.ceil(OVERSAMPLING * n_time), real=True)
    guard, n_bins = TAPS // 2, n_t // 2 + 1
    d_omega = 2.0 * math.pi / (n_t * dt)
    top = (n_bins - 1 - guard) * d_omega
    if highest is not None:
        top = min(top, 2.0 * math.pi * highest)
    n_in = min(n_bins, math.floor(top / d_omega) + guard + 1)
    n_out = math.floor(top / d_omega) + 1
    kx = 2.0 * math.pi / (n_x * dx) * np.arange(n_x // 2 + 1)
    omega_tau = d_omega * np.arange(n_out)
    omega, jacobian = stolt_map(kx[:, None], omega_tau[None, :] / half, velocity_m_per_ns=velocity)
    weight = jacobian / half
    weight *= _fade(np.degrees(np.arccos(np.clip(weight, 0.0, 1.0))), max_dip, max_dip + dip_taper)
    weight *= _fade(omega, top * (1.0 if highest is None else 0.875), top)
    beta = _beta(n_t / n_time)
    matrix = _gather(omega / d_omega, weight, guard + n_in, beta)
    centre = t0 + dt * (n_time // 2)
    phase = np.exp(-1j * (omega - omega_tau[None, :]) * centre).astype(np.complex64)
    place = (np.arange(n_time) - n_time // 2) / n_t
    spread = (1.0 / _kernel_transform(place, beta)).astype(np.float32)
    return StoltTable(n_along, n_time, n_x, n_t, n_in, matrix, phase, spread)


def _gather(position: np.ndarray, weight: np.ndarray, n_columns: int, beta: float) -> sparse.csr_array:
    """Return the sparse matrix of taps: row (kx, output bin), column (kx, input bin shifted by the guard)."""
    pairs, n_out = position.shape
    keep = weight > 0
    row, _ = np.nonzero(keep)
    place, weight = position[keep], weight[keep]
    first = np.ceil(place - TAPS / 2).astype(np.int64)  # taps first ... first + 5 lie within half a kernel of place
    offset = place[:, None] - (first[:, None] + np.arange(TAPS))
    taps = (weight[:, None] * _kernel(offset, beta)).astype(np.float32)
    column = row[:, None] * n_columns + first[:, None] + np.arange(TAPS) + TAPS // 2
    indptr = np.concatenate([[0], np.cumsum(keep.ravel() * TAPS)]).astype(np.int32)
    return sparse.csr_array(
        (taps.ravel(), column.ravel().astype(np.int32), indptr), shape=(pairs * n_out, pairs * n_columns)
    )


def _beta(oversampling: float) -> float:
    return math.pi * math.sqrt((TAPS / oversampling) ** 2 * (oversampling - 0.5) ** 2 - 0.8)


def _kernel(offset: np.ndarray, beta: float) -> np.ndarray:
    return special.i0(beta * np.sqrt(np.maximum(1.0 - (2.0 * offset / TAPS) ** 2, 0.0)))


def _kernel_transform(place: np.ndarray, beta: float) -> np.ndarray:
    """Return the kernel's transform at ``place`` cycles per bin: w sinh(a)/a with a² = beta² - (pi w place)²."""
    a = np.sqrt(beta**2 - (math.pi * TAPS * place) ** 2)
    return TAPS * np.sinh(a) / a


def _fade(value: np.ndarray, start: float, stop: float) -> np.ndarray:
    """Return 1 up to ``start``, 0 from ``stop`` on, half a cosine between."""
    if stop <= start:
        return (value <= start).astype(float)
    return 0.5 + 0.5 * np.cos(np.pi * np.clip((value - start) / (stop - start), 0.0, 1.0))


def edge_weights(flag: np.ndarray, *, taper: float) -> np.ndarray:
    """Return the weight (along) of each trace: 0 in gaps, rising over ``taper`` traces from line ends and gaps.

    A gap is a place without a recording or with a dead trace; filled traces are data.
    """
    gap = (np.asarray(flag) & _EMPTY) != 0
    if taper <= 0:
        return (~gap).astype(np.float32)
    distance = np.minimum(_gap_distance(gap) / (taper + 1.0), 1.0)
    return (0.5 - 0.5 * np.cos(np.pi * distance)).astype(np.float32)


def _gap_distance(gap: np.ndarray) -> np.ndarray:
    """Return the distance in traces to the nearest place of a gap; beyond both ends there is none."""
    bounds = np.flatnonzero(np.concatenate([[True], gap, [True]])) - 1
    at = np.arange(gap.size)
    after = bounds[np.searchsorted(bounds, at)]
    before = bounds[np.searchsorted(bounds, at, side="right") - 1]
    return np.minimum(at - before, after - at)


def _migrate_block(
    data: np.ndarray,
    flag: np.ndarray,
    *,
    shape: tuple[int, int, float, float, float],
    options: tuple[float, float, float, float | None],
    edge: float,
) -> np.ndarray:
    velocity, max_dip, dip_taper, highest = options
    table = stolt_table(
        shape, velocity_m_per_ns=velocity, max_dip_deg=max_dip, dip_taper_deg=dip_taper, highest_ghz=highest
    )
    out = np.zeros(data.shape, np.float32)
    flags = np.broadcast_to(flag, data.shape[:-1])
    for at in np.ndindex(data.shape[:-2]):
        gap = (flags[at] & _EMPTY) != 0
        if gap.all():
            continue
        weight = edge_weights(flags[at], taper=edge)
        out[at] = stolt_kernel(np.asarray(data[at], np.float32) * weight[:, None], table)
        out[at][gap] = 0.0
    return out


def check_settings(velocity: float, max_dip: float, dip_taper: float, edge_taper: float, highest: float | None) -> None:
    """Refuse impossible settings of :func:`stolt`, in the order they stand there.

    Raises
    ------
    RecipeError
        With one problem for each.
    """
    low, high = VELOCITY_RANGE
    checks: dict[str, tuple[bool, float | None, str]] = {
        "velocity_m_per_ns": (low <= velocity <= high, velocity, f"{low} to {high} m/ns"),
        "max_dip_deg": (0 < max_dip < 90, max_dip, "above 0 and below 90"),
        "dip_taper_deg": (dip_taper >= 0 and max_dip + dip_taper <= 90, dip_taper, "0 to 90 less max_dip_deg"),
        "edge_taper_m": (0 <= edge_taper < math.inf, edge_taper, "0 or more"),
        "highest_ghz": (highest is None or 0 < highest < math.inf, highest, "above 0"),
    }
    problems = [
        Problem(
            came=f"{name} = {came!r}",
            allowed=f"allowed: {allowed}",
            do="mend the value, or leave it out",
            key=f"recipe.migrate.{name}",
        )
        for name, (good, came, allowed) in checks.items()
        if not good
    ]
    if problems:
        raise RecipeError(problems)
