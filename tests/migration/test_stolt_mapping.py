"""The mapping, its table, its edges and what it refuses."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import dask
import dask.array as da
import numpy as np
import pytest

from planum.errors import RecipeError
from planum.migration import stolt as module
from planum.migration.stolt import (
    alias_free_dip_deg,
    edge_weights,
    mark_rim,
    rim_m,
    stolt,
    stolt_analytic,
    stolt_kernel,
    stolt_map,
    stolt_table,
)
from planum.records import FLAG_CLIPPED, FLAG_DEAD, FLAG_FILLED, FLAG_NONE, FLAG_RIM

ALONG, TIME = np.arange(0.0, 4.0, 0.05), -1.0 + 0.2 * np.arange(160)


def noise(shape, seed=1):
    return np.random.default_rng(seed).normal(size=shape).astype(np.float32)


def direct_stolt(section, along, time, *, v, max_dip_deg, dip_taper_deg, n_x, n_t, highest):
    """Stolt's formula in double precision, the time transform summed at the exact frequencies: no interpolation."""
    dx, dt = along[1] - along[0], time[1] - time[0]
    in_x = np.fft.fft(section.astype(float), n_x, axis=0)
    kx = 2 * np.pi * np.fft.fftfreq(n_x, dx)
    omega_tau = 2 * np.pi * np.arange(1, int(np.floor(highest * n_t * dt)) + 1) / (n_t * dt)
    image = np.zeros((n_x, omega_tau.size), complex)
    for i, k in enumerate(kx):
        omega = np.sqrt(omega_tau**2 + (v * k / 2) ** 2)
        cosine = omega_tau / omega
        fade = np.clip((np.degrees(np.arccos(cosine)) - max_dip_deg) / dip_taper_deg, 0, 1)
        high = np.clip((omega / (2 * np.pi * highest) - 0.875) / 0.125, 0, 1)
        weight = cosine * (0.5 + 0.5 * np.cos(np.pi * fade)) * (0.5 + 0.5 * np.cos(np.pi * high))
        image[i] = weight * (np.exp(-1j * omega[:, None] * time) @ in_x[i])
    back = np.fft.ifft(image, axis=0)[: along.size]
    return 2.0 / n_t * np.real(back @ np.exp(1j * omega_tau[:, None] * time))


def test_point_value_of_the_mapping():
    """v 0.1 m/ns, kx 1 and kz 4 cycles/m: omega 1.2953118 rad/ns, Jacobian 0.04850713 m/ns (closed form, 7 digits)."""
    omega, jacobian = stolt_map(2 * np.pi * 1.0, 2 * np.pi * 4.0, velocity_m_per_ns=0.1)
    assert omega == pytest.approx(1.2953118, abs=5e-8)
    assert jacobian == pytest.approx(0.04850713, abs=5e-9)


def test_mapping_is_odd_in_kz_and_its_jacobian_is_its_slope():
    kx, kz, h = 3.0, np.array([-20.0, -5.0, 5.0, 20.0]), 1e-5
    omega, jacobian = stolt_map(kx, kz, velocity_m_per_ns=0.08)
    assert omega[:2] == pytest.approx(-omega[:1:-1])
    upper, lower = (stolt_map(kx, kz + s * h, velocity_m_per_ns=0.08)[0] for s in (1, -1))
    assert jacobian == pytest.approx((upper - lower) / (2 * h), rel=1e-8)


@pytest.mark.parametrize(
    ("shape", "first_ns"),
    [((80, 160), -1.0), ((81, 161), 0.0), ((64, 150), -3.7), ((71, 128), 0.6)],  # odd and even, early and late start
)
def test_interpolated_mapping_agrees_with_the_exact_sum(shape, first_ns):
    """Against a double-precision direct sum on noise up to 1 GHz, which fills the whole section at all dips."""
    along, time = 0.05 * np.arange(shape[0]), first_ns + 0.2 * np.arange(shape[1])
    data = noise(shape)
    options = {"max_dip_deg": 60.0, "dip_taper_deg": 15.0}
    table = stolt_table((*shape, 0.05, 0.2, first_ns), velocity_m_per_ns=0.1, highest_ghz=1.0, **options)
    exact = direct_stolt(data, along, time, v=0.1, n_x=table.n_x, n_t=table.n_t, highest=1.0, **options)
    error = np.linalg.norm(stolt_kernel(data, table) - exact) / np.linalg.norm(exact)
    # six Kaiser-Bessel taps at oversampling 1.25 err by some 1e-4, found 0.8e-4 to 2.3e-4; linear taps give 1e-2
    assert error < 5e-4


def test_analytic_signal_has_the_image_as_its_real_part_and_no_negative_frequencies():
    data = noise((80, 160))
    table = stolt_table((80, 160, 0.05, 0.2, -1.0), velocity_m_per_ns=0.1, highest_ghz=1.0)
    signal = stolt_analytic(data, table)
    scale = float(np.abs(signal).max())
    assert signal.real == pytest.approx(stolt_kernel(data, table), abs=1e-6 * scale)  # float32 transforms
    # a window keeps the cut record from leaking; what is left on the negative side is its side lobes
    spectrum = np.abs(np.fft.fft(signal * np.blackman(160), axis=1)) ** 2
    assert spectrum[:, 85:155].sum() < 1e-5 * spectrum.sum()


def test_flat_reflector_keeps_time_and_amplitude():
    """Migration leaves what does not dip where it is: kx = 0 maps every frequency to itself."""
    wavelet = np.exp(-(((TIME - 15.0) / 1.5) ** 2)) * np.cos(2 * np.pi * 0.4 * (TIME - 15.0))
    section = np.tile(wavelet, (ALONG.size, 1))
    out = stolt_kernel(section.astype(np.float32), stolt_table((80, 160, 0.05, 0.2, -1.0), velocity_m_per_ns=0.1))
    middle = slice(35, 45)  # 1.7 m from both ends, more than twice the depth
    assert np.abs(out[middle] - section[middle]).max() < 0.005  # the ends' diffractions; found 0.002


def test_two_way_time_axis_may_start_anywhere(models):
    """Leading zeros before time zero change nothing after it."""
    data = noise((80, 140))
    table = stolt_table((80, 140, 0.05, 0.2, 0.0), velocity_m_per_ns=0.1, highest_ghz=1.0)
    early = np.concatenate([np.zeros((80, 20), np.float32), data], axis=1)
    early_table = stolt_table((80, 160, 0.05, 0.2, -4.0), velocity_m_per_ns=0.1, highest_ghz=1.0)
    plain, padded = stolt_kernel(data, table)[:, 5:-5], stolt_kernel(early, early_table)[:, 25:-5]
    # two frequency grids differ in the band's last bin, which noise shows: found 0.5 %; 1 ns at both ends left out
    assert np.linalg.norm(plain - padded) < 0.01 * np.linalg.norm(plain)


def test_alias_free_dip_is_the_spatial_nyquist():
    """asin(v / (4 dx f)), closed form: 0.1 / (4 · 0.05 · 0.8) = 0.625 -> 38.682°; 0.06 -> 22.024°."""
    dip = [alias_free_dip_deg(velocity_m_per_ns=v, trace_spacing_m=0.05, highest_ghz=0.8) for v in (0.1, 0.06, 0.2)]
    assert dip == pytest.approx([38.682, 22.024, 90.0], abs=1e-3)


def test_rim_is_where_a_ray_of_that_dip_leaves_the_line():
    assert rim_m(np.array([0.0, 1.0, 2.0]), dip_deg=45.0) == pytest.approx([0.0, 1.0, 2.0])
    assert rim_m(1.0, dip_deg=30.0) == pytest.approx(1 / np.sqrt(3))


def test_rim_flags_line_ends_and_both_sides_of_a_gap():
    flag = np.zeros((2, 12), np.uint8)
    flag[0, 6] = FLAG_NONE
    flag[1, 3] = FLAG_CLIPPED
    before = flag.copy()
    out = mark_rim(flag, trace_spacing_m=0.1, reach_m=0.25)
    r, c, n = FLAG_RIM, FLAG_CLIPPED, FLAG_NONE
    assert out.tolist() == [[r, r, 0, 0, r, r, n, r, r, 0, r, r], [r, r, 0, c, 0, 0, 0, 0, 0, 0, r, r]]
    assert np.array_equal(flag, before)


def test_edge_weights_rise_from_ends_and_gaps():
    flag = np.zeros(20, np.uint8)
    flag[8:10] = FLAG_NONE
    weight = edge_weights(flag, taper=3.0)
    assert weight[8:10].tolist() == [0, 0]
    half_cosine = 0.5 - 0.5 * np.cos(np.pi * np.array([1, 2, 3]) / 4.0)
    assert weight[[0, 1, 2]] == pytest.approx(half_cosine)
    assert weight[[7, 6, 5]] == pytest.approx(half_cosine)
    assert weight[[10, 11, 12]] == pytest.approx(half_cosine)
    assert weight[15] == 1.0
    assert edge_weights(flag, taper=0.0).tolist() == [1.0] * 8 + [0.0] * 2 + [1.0] * 10


def test_what_stands_in_a_gap_is_not_data(models):
    """Places without a recording hold 0 afterwards, and what they held before does not reach the image."""
    flag = np.zeros((1, ALONG.size), np.uint8)
    flag[0, 30:36] = FLAG_NONE
    data = noise((80, 160))
    loud = data.copy()
    loud[30:36] = 1e6
    quiet, shouted = (stolt(models.cube(d, ALONG, TIME, flag), velocity_m_per_ns=0.1).values[0] for d in (data, loud))
    assert np.array_equal(quiet, shouted)
    assert not quiet[30:36].any()
    assert quiet[29].any()


def test_dead_traces_are_a_gap_and_filled_ones_are_not(models):
    """A run of dead traces holds 0: without a fade beside it, its edges smear like those of any gap."""
    flag, gap = np.zeros((2, 1, ALONG.size), np.uint8)
    flag[0, 30:50], gap[0, 30:50] = FLAG_DEAD, FLAG_NONE
    data = noise((80, 160))
    dead, missing = (stolt(models.cube(data, ALONG, TIME, f), velocity_m_per_ns=0.1).values for f in (flag, gap))
    assert np.array_equal(dead, missing)
    assert not dead[0, 30:50].any()
    assert edge_weights(flag[0], taper=3.0).tolist() == edge_weights(gap[0], taper=3.0).tolist()
    assert edge_weights(np.full(20, FLAG_FILLED, np.uint8), taper=0.0).tolist() == [1.0] * 20
    rim = mark_rim(flag, trace_spacing_m=0.05, reach_m=0.12)[0]
    assert (rim[28:52] == [FLAG_RIM] * 2 + [FLAG_DEAD] * 20 + [FLAG_RIM] * 2).all()


def test_twenty_dead_traces_under_a_flat_layer_make_little_above_it(models):
    """Energy above the layer beside the run: a hard edge makes a seventh of the layer's amplitude out of nothing."""
    along, time = 0.05 * np.arange(160), -2.0 + 0.2 * np.arange(240)
    layer = models.plane(along, time, depth_at_0=1.0, dip_deg=0.0)
    flag = np.zeros((1, along.size), np.uint8)
    flag[0, 70:90] = FLAG_DEAD
    layer[70:90] = 0.0
    image = models.envelope(stolt(models.cube(layer, along, time, flag), velocity_m_per_ns=0.1).values[0])
    above = image[50:110][:, (time > 2.0) & (time < 17.0)].max()
    # found 0.040, as at a gap (the intact layer: 0.011, its ends); a hard edge gives 0.141
    assert above < 0.06 * image[20:60].max()


def test_row_without_any_recording_stays_empty(models):
    flag = np.zeros((2, ALONG.size), np.uint8)
    flag[1] = FLAG_NONE
    out = stolt(models.cube(noise((2, 80, 160)), ALONG, TIME, flag), velocity_m_per_ns=0.1)
    assert out.values[0].any()
    assert not out.values[1].any()


def test_cube_in_cube_out(models):
    """Axes, coordinates and attributes stay, the caller's array too; lines do not see each other."""
    cube = models.cube(noise((3, 80, 160)), ALONG, TIME)
    cube.attrs["note"] = "kept"
    before = cube.copy(deep=True)
    out = stolt(cube, velocity_m_per_ns=0.09)
    assert cube.identical(before)
    assert out.dims == cube.dims
    assert out.dtype == np.float32
    assert out.attrs == cube.attrs
    for name in cube.coords:
        assert out[name].identical(cube[name])
    alone = stolt(cube.isel(line=[1]), velocity_m_per_ns=0.09)
    assert np.array_equal(alone.values[0], out.values[1])


def test_lazy_in_lazy_out(models):
    cube = models.cube(noise((4, 80, 160)), ALONG, TIME)
    lazy = cube.copy(data=da.from_array(cube.values, chunks=(1, -1, -1), name="line-by-line"))

    def refuse(*args, **kwargs):
        raise AssertionError("computed too early")

    with dask.config.set(scheduler=refuse):
        out = stolt(lazy, velocity_m_per_ns=0.1)
    assert np.array_equal(out.compute(scheduler="threads").values, stolt(cube, velocity_m_per_ns=0.1).values)


def test_line_cut_into_chunks_is_refused(models):
    cube = models.cube(noise((2, 80, 160)), ALONG, TIME).chunk({"along": 40})
    with pytest.raises(ValueError, match="along"):
        stolt(cube, velocity_m_per_ns=0.1)


def test_threads_share_one_table_and_agree_bit_for_bit():
    shape = (60, 96, 0.05, 0.25, -1.25)
    data = noise((8, 60, 96))

    def run(line):
        return stolt_kernel(line, stolt_table(shape, velocity_m_per_ns=0.11))

    before = module._table.cache_info().misses
    with ThreadPoolExecutor(4) as pool:
        together = list(pool.map(run, data))
    assert module._table.cache_info().misses == before + 1
    assert all(np.array_equal(a, run(b)) for a, b in zip(together, data, strict=True))


@pytest.mark.parametrize(
    ("bad", "match"),
    [
        ({"velocity_m_per_ns": 0.35}, r"velocity_m_per_ns = 0\.35; allowed: 0\.03 to 0\.29"),
        ({"velocity_m_per_ns": float("nan")}, "velocity_m_per_ns = nan"),
        ({"velocity_m_per_ns": 0.1, "max_dip_deg": 90.0}, r"max_dip_deg = 90\.0"),
        ({"velocity_m_per_ns": 0.1, "max_dip_deg": 80.0, "dip_taper_deg": 15.0}, "dip_taper_deg"),
        ({"velocity_m_per_ns": 0.1, "edge_taper_m": -0.1}, r"edge_taper_m = -0\.1"),
        ({"velocity_m_per_ns": 0.1, "highest_ghz": 0.0}, r"highest_ghz = 0\.0"),
    ],
)
def test_impossible_settings_are_refused_by_name(models, bad, match):
    with pytest.raises(RecipeError, match=match):
        stolt(models.cube(noise((80, 160)), ALONG, TIME), **bad)


def test_all_impossible_settings_are_told_at_once(models):
    with pytest.raises(RecipeError, match="velocity_m_per_ns") as caught:
        stolt(models.cube(noise((80, 160)), ALONG, TIME), velocity_m_per_ns=1.0, edge_taper_m=-1.0)
    assert len(caught.value.problems) == 2


def test_uneven_traces_are_refused(models):
    cube = models.cube(noise((80, 160)), ALONG**1.1, TIME)
    with pytest.raises(ValueError, match="along is not regular"):
        stolt(cube, velocity_m_per_ns=0.1)
