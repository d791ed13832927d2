"""Modelled traces against closed forms: times, amplitudes, the wavelet."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.signal import hilbert

from planum.synthetic.modelling import Aerial, Ground, impulses, ricker, ricker_spectrum, shaped, travel_time

DT, N, OVER, F = 0.3, 256, 8, 0.4


def traces(points, q, positions, *, ground, aerial, zero=6.0, phase=0.0):
    positions = np.asarray(positions, float)
    fine = impulses(
        np.asarray(points, float),
        np.asarray(q, float),
        positions,
        ground=ground,
        aerial=aerial,
        zero=np.full(len(positions), zero),
        time=(DT / OVER, N * OVER),
    )
    return shaped(fine, peak_ghz=F, interval_ns=DT, oversample=OVER, phase_deg=phase)


def envelope_peak(trace):
    """Time of the envelope maximum in ns, by a parabola, and its height."""
    e = np.abs(hilbert(trace))
    k = int(np.argmax(e))
    a, b, c = e[k - 1 : k + 2]
    return (k + 0.5 * (a - c) / (a - 2 * b + c)) * DT, b - 0.125 * (a - c) ** 2 / (a - 2 * b + c)


PLAIN = Aerial(separation_m=0.6, pattern=0.0, aperture_m=10.0)
LINE = [(0.0, 0.0), (0.1, 0.0)]


# Right triangles with whole sides: tx at -0.3, rx at +0.3 round the first trace at 0; v = 0.1 m/ns.
@pytest.mark.parametrize(
    ("point", "expected_ns"),
    [
        ((0.0, 0.0, 0.4), 10.0),  # 0.5 + 0.5
        ((0.3, 0.0, 0.8), 18.0),  # 1.0 + 0.8
        ((0.0, 0.4, 1.2), 26.0),  # sqrt(0.09 + 0.16 + 1.44) = 1.3, twice
    ],
)
def test_envelope_peaks_at_the_exact_two_way_time(point, expected_ns):
    """Pythagoras: (|r - tx| + |r - rx|)/v, found to a fiftieth of a sample (what the parabola can do at 0.3 ns)."""
    found = traces([point], [1.0], LINE, ground=Ground(0.1, 0.0), aerial=PLAIN)[0]
    assert travel_time(np.array(point), np.array([-0.3, 0, 0]), np.array([0.3, 0, 0]), 0.1) == pytest.approx(
        expected_ns
    )
    assert envelope_peak(found)[0] == pytest.approx(6.0 + expected_ns, abs=DT / 50)


def test_trace_is_the_wavelet_at_a_time_between_samples():
    """One scatterer gives the Ricker formula itself, moved and scaled; the linear split is undone by the filter."""
    found = traces([(0.0, 0.0, 0.4137)], [1.0], LINE, ground=Ground(0.0931, 0.0), aerial=PLAIN)[0]
    r = np.hypot(0.4137, 0.3)
    expected = ricker(np.arange(N) * DT - 6.0 - 2 * r / 0.0931, F) / r**2
    # the split's images leak about (pi f step)^2/3 of the amplitude near the fine sampling's harmonics: 1e-4 here
    np.testing.assert_allclose(found, expected, atol=5e-4 / r**2)


def test_amplitude_falls_with_the_square_of_the_distance():
    """No loss, no pattern, no separation: twice the depth, a quarter."""
    aerial = Aerial(separation_m=0.0, pattern=0.0, aperture_m=10.0)
    near, far = (
        envelope_peak(traces([(0, 0, z)], [1.0], LINE, ground=Ground(0.1, 0.0), aerial=aerial)[0])[1]
        for z in (0.5, 1.0)
    )
    assert near == pytest.approx(4.0, rel=2e-3)  # 1/0.5²; the parabola of an envelope sampled at 8 a period
    assert near / far == pytest.approx(4.0, rel=2e-3)


def test_loss_counts_along_the_path():
    """10 dB/m over 2 x 0.8 m: 16 dB, whatever the spreading."""
    aerial = Aerial(separation_m=0.0, pattern=0.0, aperture_m=10.0)
    without, with_loss = (
        envelope_peak(traces([(0, 0, 0.8)], [1.0], LINE, ground=Ground(0.1, a), aerial=aerial)[0])[1]
        for a in (0.0, 10.0)
    )
    assert 20 * np.log10(without / with_loss) == pytest.approx(16.0, abs=1e-6)


def test_pattern_is_the_cosine_of_both_antennas():
    """A point seen under 60 degrees by both (no separation) loses cos² 60° = 1/4."""
    place = [(0.0, 0.5 * np.sqrt(3.0), 0.5)]
    heights = [
        np.abs(traces(place, [1.0], LINE, ground=Ground(0.1, 0.0), aerial=Aerial(0.0, p, 10.0))[0]).max()
        for p in (0.0, 1.0)
    ]
    assert heights[1] / heights[0] == pytest.approx(0.25, rel=1e-12)


def test_nothing_answers_from_beyond_the_aperture():
    """The aperture ends at its radius and is whole inside three quarters of it."""
    ground = Ground(0.1, 0.0)
    tight, wide = Aerial(0.1, 1.0, 1.0), Aerial(0.1, 1.0, 50.0)
    assert not traces([(0.0, 1.001, 0.5)], [1.0], LINE[:1] * 2, ground=ground, aerial=tight).any()
    inside = [traces([(0.0, 0.7, 0.5)], [1.0], LINE[:1] * 2, ground=ground, aerial=a) for a in (tight, wide)]
    np.testing.assert_array_equal(*inside)


def test_answers_add_up_and_their_order_does_not_matter():
    """Single scattering is linear; long lines are worked in blocks, which must not show."""
    rng = np.random.default_rng(5)
    points = rng.uniform((0, -1, 0.2), (6, 1, 1.5), (40, 3))
    q, positions = rng.standard_normal(40), [(0.05 * i, 0.0) for i in range(121)]
    kit = {"ground": Ground(), "aerial": Aerial()}
    whole = traces(points, q, positions, **kit)
    parts = sum(traces(points[i : i + 1], q[i : i + 1], positions, **kit) for i in range(40))
    shuffled = rng.permutation(40)
    # sums in another order: rounding only
    np.testing.assert_allclose(parts, whole, atol=1e-12 * np.abs(whole).max())
    np.testing.assert_allclose(
        traces(points[shuffled], q[shuffled], positions, **kit), whole, atol=1e-12 * np.abs(whole).max()
    )


def test_walking_back_records_the_same_traces_in_reverse():
    """Transmitter and receiver change places: reciprocity."""
    points, positions = [(1.0, 0.2, 0.5), (2.0, -0.3, 0.8)], [(0.05 * i, 0.0) for i in range(61)]
    there = traces(points, [1.0, 0.5], positions, ground=Ground(), aerial=Aerial())
    back = traces(points, [1.0, 0.5], positions[::-1], ground=Ground(), aerial=Aerial())
    np.testing.assert_allclose(back[::-1], there, atol=1e-12 * np.abs(there).max())


def test_lines_may_run_any_way():
    """Scene and line turned together by 33 degrees give the same traces."""
    points = np.array([(1.0, 0.2, 0.5), (2.0, -0.3, 0.8)])
    positions = np.array([(0.05 * i, 0.0) for i in range(61)])
    c, s = np.cos(np.radians(33)), np.sin(np.radians(33))
    turn = np.array([[c, s], [-s, c]])
    turned = np.column_stack([points[:, :2] @ turn, points[:, 2]])
    kit = {"ground": Ground(), "aerial": Aerial()}
    a, b = traces(points, [1, 1], positions, **kit), traces(turned, [1, 1], positions @ turn, **kit)
    np.testing.assert_allclose(b, a, atol=1e-9 * np.abs(a).max())  # rounding of the turned places


def test_dense_level_plane_answers_as_its_integral():
    """Zero offset over a plane of q per m²: ∫ 2π q r dr / r² = π q v ∫ w(t - τ) 2/(v τ) dτ from 2z/v on."""
    z, v, q, cell = 0.5, 0.1, 1.0, 0.02
    side = np.arange(-1.8, 1.8, cell) + cell / 2
    x, y = (a.ravel() for a in np.meshgrid(side, side))
    points = np.column_stack([x, y, np.full(x.size, z)])
    found = traces(points, np.full(x.size, q * cell**2), LINE, ground=Ground(v, 0.0), aerial=Aerial(0.0, 0.0, 5.0))[0]
    times = np.arange(N) * DT - 6.0
    near = np.abs(times - 2 * z / v) < 4.0  # before the plane's edge at 1.8 m answers (37 ns)
    expected = [
        np.pi * q * v * quad(lambda u, t=t: ricker(t - u, F) * 2 / (v * u), 2 * z / v, t + 8, points=[t], limit=200)[0]
        if t + 8 > 2 * z / v
        else 0.0
        for t in times[near]
    ]
    # 2 cm cells against a shortest wavelength of 0.1 m (1 GHz): a few parts in a thousand
    np.testing.assert_allclose(found[near], expected, atol=0.01 * np.max(np.abs(expected)))


def test_ricker_has_its_textbook_shape():
    """Zero at 1/(π f √2), troughs -2 exp(-3/2) at √1.5/(π f) (closed form)."""
    zero, trough = 1 / (np.pi * F * np.sqrt(2)), np.sqrt(1.5) / (np.pi * F)
    np.testing.assert_allclose(
        ricker(np.array([0, zero, -trough, trough]), F), [1, 0, -2 * np.exp(-1.5), -2 * np.exp(-1.5)], atol=1e-12
    )
    fine = np.linspace(-3, 3, 6001)
    assert abs(fine[np.argmin(ricker(fine, F))]) == pytest.approx(trough, abs=1e-3)  # the step of the search


@pytest.mark.parametrize("f", [0.05, 0.2, 0.4, 0.7])
def test_ricker_spectrum_is_its_fourier_integral(f):
    """Against numerical quadrature of ∫ w cos(2π f t) dt."""
    integral = 2 * quad(lambda t: ricker(t, F) * np.cos(2 * np.pi * f * t), 0, 12, limit=200)[0]
    assert ricker_spectrum(f, F) == pytest.approx(integral, abs=1e-9)


def test_phase_turns_the_wavelet_and_leaves_its_envelope():
    """A constant phase is a rotation of the analytic signal."""
    kit = {"ground": Ground(0.1, 0.0), "aerial": PLAIN}
    a = traces([(0, 0, 0.4)], [1.0], LINE, **kit)[0]
    b = traces([(0, 0, 0.4)], [1.0], LINE, **kit, phase=70.0)[0]
    np.testing.assert_allclose(np.abs(hilbert(b)), np.abs(hilbert(a)), atol=1e-6 * np.abs(a).max())
    assert np.abs(b - a).max() > 0.5 * np.abs(a).max()
