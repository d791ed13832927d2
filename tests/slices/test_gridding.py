"""Between the lines: band-limited, never outside what the neighbours show, nothing where nothing was recorded."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.signal

from planum.constants import LIMIT_MARGIN
from planum.records import FLAG_CLIPPED, FLAG_DEAD, FLAG_FILLED, FLAG_NONE, CubeGeometry
from planum.slices import kernels
from planum.slices.gridding import LineGridder

CELL = 0.05


def geometry(n_lines=12, n_along=101, *, direction="x", along_step=0.05, spacing=0.25):
    return CubeGeometry(
        direction=direction, line0_m=0.0, line_step_m=spacing, n_lines=n_lines, along0_m=0.0, along_step_m=along_step,
        n_along=n_along, time0_ns=0.0, time_step_ns=0.1, n_time=2,
    )  # fmt: skip


def clear(g):
    return np.zeros((g.n_lines, g.n_along), np.uint8)


def cells(g, *, rim=0.0, cell=CELL):
    x = np.arange(g.along0_m - rim + cell / 2, g.along()[-1] + rim, cell)
    y = np.arange(g.line0_m - rim + cell / 2, g.lines()[-1] + rim, cell)
    xx, yy = np.meshgrid(x, y)
    return (xx, yy) if g.direction == "x" else (yy, xx)


def grid(g, strip, *, flag=None, limit=True, rim=0.0, cell=CELL):
    x, y = cells(g, rim=rim, cell=cell)
    w = LineGridder(g, clear(g) if flag is None else flag, cell_m=cell).weights(x.ravel(), y.ravel())
    return w.apply(strip, limit=limit).reshape(x.shape), w, x, y


def band_limited(g, share, *, seed=0, waves=60):
    """Sum of sines up to ``share`` of the line spacing's Nyquist, as a function of place; unit standard deviation."""
    rng = np.random.default_rng(seed)
    f = rng.uniform(0.0, share * 0.5 / g.line_step_m, waves)
    angle, phase = rng.uniform(0, 2 * np.pi, waves), rng.uniform(0, 2 * np.pi, waves)
    fx, fy = f * np.cos(angle), f * np.sin(angle)

    def field(x, y):
        x, y = np.asarray(x)[..., None], np.asarray(y)[..., None]
        return np.sqrt(2 / waves) * np.cos(2 * np.pi * (fx * x + fy * y) + phase).sum(axis=-1)

    return field


def strip_of(g, field):
    a, b = np.meshgrid(g.along(), g.lines())
    return field(a, b).astype(np.float32)


def test_a_field_below_80_percent_of_nyquist_errs_by_less_than_a_twentieth():
    """Closed form: sines at any place. The kernel alone; 0.05 sigma is the goal set for 8 taps."""
    g = geometry(40, 201)
    for share, most in ((0.5, 0.02), (0.8, 0.05)):
        field = band_limited(g, share)
        got, _, x, y = grid(g, strip_of(g, field), limit=False)
        inside = (y > 1.0) & (y < 8.75) & (x > 0.5) & (x < 9.5)
        error = np.sqrt(np.mean((got - field(x, y))[inside] ** 2))
        assert error < most


def test_across_the_lines_it_agrees_with_fourier_resampling():
    """Outside check: scipy.signal.resample of a periodic series of 80 lines, five times finer, up to 0.8 Nyquist."""
    g = geometry(80, 5)
    rng = np.random.default_rng(2)
    spectrum = np.zeros(41, complex)
    spectrum[:33] = rng.normal(size=33) + 1j * rng.normal(size=33)
    series = np.fft.irfft(spectrum, 80)
    fine = scipy.signal.resample(series, 400)
    y = np.arange(400)[60:340] * 0.05
    w = LineGridder(g, clear(g), cell_m=CELL).weights(np.full(y.size, 0.1), y)
    got = w.apply(np.repeat(series[:, None], 5, axis=1).astype(np.float32), limit=False)
    assert np.sqrt(np.mean((got - fine[60:340]) ** 2)) < 0.05 * series.std()


def test_it_beats_straight_lines_between_the_lines():
    g = geometry(40, 201)
    field = band_limited(g, 0.8)
    strip = strip_of(g, field)
    got, w, x, y = grid(g, strip, limit=False)
    straight = w.between(strip).reshape(x.shape)
    inside = (y > 1.0) & (y < 8.75) & (x > 0.5) & (x < 9.5)
    limited, *_ = grid(g, strip + np.float32(10.0))  # amplitudes are positive
    error = [np.sqrt(np.mean((v - field(x, y))[inside] ** 2)) for v in (got, straight, limited - 10.0)]
    assert error[0] < 0.3 * error[1]
    # Crests between two lines are cut by the limit to the neighbours' range: the price of inventing nothing.
    assert error[2] < 0.5 * error[1]


@pytest.mark.parametrize("direction", ["x", "y"])
@pytest.mark.parametrize("along_step", [0.02, 0.05, 0.11])
def test_a_plane_is_reproduced(direction, along_step):
    """Closed form, beside edges and holes too, wherever a cell lies between recorded places.

    Left out: the half cell by which the end of the partial line is held, and what is beside a missing line.
    """
    g = geometry(7, 60, direction=direction, along_step=along_step)

    def plane(a, b):
        return 10.0 + 0.7 * a + 2.0 * b

    flag = clear(g)
    flag[2, :20] = FLAG_NONE
    flag[5] = FLAG_NONE
    got, w, x, y = grid(g, strip_of(g, plane), flag=flag)
    along, across = (x, y) if direction == "x" else (y, x)
    row = np.floor(across / g.line_step_m).astype(int)
    held = np.abs(along - 20 * along_step) < max(CELL / 2, along_step / 2) + 1e-6
    missing = np.isin(row, [4, 5]) | (np.isin(row, [1, 2]) & (along < 20 * along_step)) | held
    assert w.limited == 0
    # float32 weights and sums of some 15.
    assert np.abs(got - plane(along, across))[~missing].max() < 2e-5
    assert (~missing).mean() > 0.3


def test_cells_on_a_line_hold_what_the_line_recorded():
    g = geometry(6, 50)
    strip = np.random.default_rng(0).gamma(2.0, size=(6, 50)).astype(np.float32)
    a, b = np.meshgrid(g.along(), g.lines())
    w = LineGridder(g, clear(g), cell_m=CELL).weights(a.ravel(), b.ravel())
    assert w.apply(strip).reshape(6, 50) == pytest.approx(strip, rel=1e-6)
    assert np.all(w.coverage == 1)


def test_a_strong_pipe_beside_weak_ground_makes_no_false_ridge():
    """A kernel alone would ring by a tenth of the pipe; no value may leave the neighbours' range by over 2 % of it."""
    g = geometry(16, 101)
    strip = np.random.default_rng(0).uniform(0.9, 1.1, (16, 101)).astype(np.float32)
    strip[7] = 100.0
    ringing, _, x, y = grid(g, strip, limit=False)
    assert ringing.min() < -5
    got, w, x, y = grid(g, strip)
    row = np.clip(np.floor(y / g.line_step_m).astype(int), 0, g.n_lines - 2)
    sides = np.stack([w_row(g, strip, row, x), w_row(g, strip, row + 1, x)])
    low, high = sides.min(axis=0), sides.max(axis=0)
    slack = LIMIT_MARGIN * (high - low) + 1e-4 * high  # float32
    assert np.all(got >= low - slack)
    assert np.all(got <= high + slack)
    assert got.min() >= 0
    far = np.abs(y - 7 * 0.25) > 0.25 + CELL
    assert got[far].max() < 1.12
    assert w.limited > 0


def w_row(g, strip, row, x):
    """Value of the given rows at the cells' place along them, by weights for cells that lie on the rows."""
    w = LineGridder(g, clear(g), cell_m=CELL).weights(x.ravel(), (g.line_step_m * row).ravel())
    return w.apply(strip).reshape(x.shape)


def test_one_missing_line_leaves_a_stripe():
    g = geometry(9, 40)
    flag = clear(g)
    flag[4] = FLAG_NONE
    got, w, x, y = grid(g, np.ones((9, 40), np.float32), flag=flag)
    away = np.abs(y - 1.0)
    # Lines 3 and 5 at 0.75 and 1.25 m reach 0.6 spacings: 0.15 m.
    assert np.array_equal(np.isnan(got), away < 0.1 - 1e-9)
    assert np.array_equal(w.coverage.reshape(x.shape) == 0, np.isnan(got))
    assert got[~np.isnan(got)] == pytest.approx(np.ones(np.count_nonzero(~np.isnan(got))), rel=1e-6)


def test_outside_the_lines_half_a_spacing_and_half_a_cell_are_shown():
    g = geometry(5, 40)
    got, _, x, y = grid(g, np.full((5, 40), 2.0, np.float32), rim=0.4)
    end = g.along()[-1]
    seen = (y > -0.125 - 1e-6) & (y < 1.125 + 1e-6) & (x > -0.025 - 1e-6) & (x < end + 0.025 + 1e-6)
    assert np.array_equal(~np.isnan(got), seen)
    assert got[seen] == pytest.approx(np.full(seen.sum(), 2.0), rel=1e-6)


def test_coverage_tells_measured_from_filled():
    g = geometry(3, 40)
    y = np.array([0.0, 0.025, 0.03, 0.125, 0.23, 0.25, 0.51, 0.6, 0.63, -0.1])
    w = LineGridder(g, clear(g), cell_m=CELL).weights(np.full(y.size, 1.0), y)
    assert list(w.coverage) == [1, 1, 2, 2, 1, 1, 1, 2, 0, 2]


@pytest.mark.parametrize("cell", [0.05, 0.2])
def test_partial_lines_and_gaps_are_not_bridged(cell):
    """Row 3 has nothing from 1 to 2 m: cells near it read rows 2 and 4 within 0.6 spacings, the rest is nothing."""
    g = geometry(7, 201, along_step=0.02)
    flag = clear(g)
    flag[3, 50:101] = FLAG_DEAD
    strip = np.where(flag > 0, np.nan, 1.0).astype(np.float32)
    got, _, x, y = grid(g, strip, flag=flag, cell=cell)
    hole = (np.abs(y - 0.75) < 0.1 - 1e-6) & (x > 0.98 + cell / 2 + 1e-6) & (x < 2.02 - cell / 2 - 1e-6)
    assert np.array_equal(np.isnan(got), hole)
    assert got[~hole] == pytest.approx(np.ones((~hole).sum()), rel=1e-6)


def test_filled_and_clipped_places_are_data():
    g = geometry(5, 40)
    flag = clear(g)
    flag[2, 10:13] = FLAG_FILLED
    flag[2, 20] = FLAG_CLIPPED
    got, _, _, _ = grid(g, np.ones((5, 40), np.float32), flag=flag)
    assert not np.isnan(got).any()


def test_fine_traces_are_averaged_over_the_cell():
    """Five traces a cell: a pattern that alternates from trace to trace is averaged away, a wave of 1 m is kept."""
    g = geometry(4, 1001, along_step=0.01)
    alternate = np.broadcast_to(5.0 + (-1.0) ** np.arange(1001), (4, 1001)).astype(np.float32)
    got, *_ = grid(g, alternate, limit=False)
    # A mean over exactly five alternating values leaves a fifth.
    assert np.abs(got - 5.0)[:, 2:-2].max() < 0.21
    wave = np.broadcast_to(5.0 + np.cos(2 * np.pi * g.along()), (4, 1001)).astype(np.float32)
    got, _, x, _ = grid(g, wave, limit=False)
    # Mean of a cosine over 0.05 of its wavelength: sinc(0.05) = 0.9959 of it.
    assert np.abs(got - 5.0 - 0.9959 * np.cos(2 * np.pi * x))[:, 3:-3].max() < 1e-3


@pytest.mark.parametrize("n_lines", [1, 2, 3])
def test_tiny_sets_work(n_lines):
    g = geometry(n_lines, 40)
    strip = np.full((n_lines, 40), 3.0, np.float32)
    got, _, x, y = grid(g, strip, rim=0.2)
    last = g.lines()[-1]
    seen = (y > -0.125 - 1e-6) & (y < last + 0.125 + 1e-6) & (x > -0.03) & (x < g.along()[-1] + 0.03)
    assert np.array_equal(~np.isnan(got), seen)
    assert got[seen] == pytest.approx(np.full(seen.sum(), 3.0), rel=1e-6)
    left = LineGridder(g, clear(g)).left_out(strip)
    assert np.isnan(left).sum() == 40 * min(n_lines, 2)


def test_an_empty_set_shows_nothing():
    g = geometry(3, 20)
    got, w, _, _ = grid(g, np.zeros((3, 20), np.float32), flag=clear(g) + np.uint8(FLAG_NONE))
    assert np.isnan(got).all()
    assert not w.coverage.any()


def test_a_block_of_cells_equals_all_cells():
    g = geometry(8, 60)
    strip = np.random.default_rng(0).gamma(2.0, size=(8, 60)).astype(np.float32)
    x, y = (a.ravel() for a in cells(g))
    gridder = LineGridder(g, clear(g), cell_m=CELL)
    whole = gridder.weights(x, y).apply(strip)
    parts = np.concatenate(
        [gridder.weights(x[i : i + 100], y[i : i + 100]).apply(strip) for i in range(0, x.size, 100)]
    )
    assert np.array_equal(whole, parts)


def test_limited_cells_of_the_last_strip_are_counted():
    g = geometry(8, 40)
    strip = np.ones((8, 40), np.float32)
    strip[4] = 50.0
    x, y = cells(g)
    w = LineGridder(g, clear(g), cell_m=CELL).weights(x.ravel(), y.ravel())
    _, count = w.apply_counted(strip)
    assert w.limited == 0
    w.apply(strip)
    assert w.limited == count > 0
    w.apply(np.ones((8, 40), np.float32))
    assert w.limited == 0


def test_leaving_a_line_out_predicts_smooth_ground_and_not_a_pipe():
    g = geometry(24, 80)
    field = band_limited(g, 0.3, seed=4)  # 0.6 of Nyquist at doubled spacing
    strip = strip_of(g, field) + 5.0
    left = LineGridder(g, clear(g)).left_out(strip)
    assert left.shape == strip.shape
    assert left.dtype == np.float32
    assert np.all(np.isnan(left[[0, -1]]))
    # The limit to the neighbours' range costs something at crests: still far below the field's sigma of 1.
    assert np.sqrt(np.mean(left[8:-8] ** 2)) < 0.15
    pipe = np.ones((24, 80), np.float32)
    pipe[12] = 9.0
    assert LineGridder(g, clear(g)).left_out(pipe)[12] == pytest.approx(np.full(80, 8.0))


def test_a_plane_is_predicted_exactly_by_its_neighbours():
    g = geometry(9, 30)
    strip = strip_of(g, lambda a, b: 3.0 + a + 2.0 * b)
    left = LineGridder(g, clear(g)).left_out(strip)
    assert np.nanmax(left) < 1e-5


def test_a_line_without_both_neighbours_has_no_prediction():
    g = geometry(7, 30)
    flag = clear(g)
    flag[3, 10:] = FLAG_NONE
    left = LineGridder(g, flag).left_out(np.where(flag > 0, np.nan, 1.0).astype(np.float32))
    assert np.isnan(left[2:5, 10:]).all()
    assert not left[1:6, :10].any()
    assert not left[[1, 5]].any()


def test_errors_are_drawn_between_lines_that_have_one():
    g = geometry(5, 40)
    strip = np.full((5, 40), np.nan, np.float32)
    strip[1:4] = np.array([1.0, 2.0, 4.0])[:, None]
    y = np.array([0.1, 0.25, 0.375, 0.5, 0.7, 0.9, 0.0])
    w = LineGridder(g, clear(g), cell_m=CELL).weights(np.full(y.size, 1.0), y)
    got = w.between(strip)
    assert got[:6] == pytest.approx([1.0, 1.0, 1.5, 2.0, 3.6, 4.0], rel=1e-5)
    assert w.coverage[6] == 1


def test_weights_keep_lines_whatever_taps_are_missing():
    """Property: unit sum and zero first moment, unless all taps lie on one side, when the nearest is held."""
    rng = np.random.default_rng(0)
    d = kernels.LINE_TAPS - rng.uniform(0.01, 0.99, 3000)[:, None]
    present = rng.random(d.shape) < 0.6
    w = kernels.with_taps(*kernels.line_kernel(d), d, present)
    both = (present & (d < 0)).any(axis=1) & (present & (d > 0)).any(axis=1)
    assert np.all(w[~present] == 0)
    assert w[both].sum(axis=1) == pytest.approx(np.ones(both.sum()), abs=1e-9)
    assert (w * d)[both].sum(axis=1) == pytest.approx(np.zeros(both.sum()), abs=1e-9)
    some = ~both & present.any(axis=1)
    assert np.all(np.sort(w[some], axis=1)[:, -1] == 1)
    assert np.all(w[~present.any(axis=1)] == 0)


def test_flags_and_cells_must_fit():
    with pytest.raises(ValueError, match=r"flag has shape \(2, 2\), the geometry \(12, 101\)"):
        LineGridder(geometry(), np.zeros((2, 2), np.uint8))
    with pytest.raises(ValueError, match="a cell has a positive size"):
        LineGridder(geometry(), clear(geometry()), cell_m=0.0)
